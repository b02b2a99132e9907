//! What the owner takes up again after a restart.

use std::collections::BTreeMap;

use super::error::StoreError;
use super::open::Store;
use crate::alarm::{AlarmRecord, Notice};
use crate::quantity::{Mono, Utc};
use crate::reading::{ChannelId, Reading};

/// Where the last run left off.
#[derive(Clone, Debug, PartialEq)]
pub struct Restored {
    /// Every alarm as it stood.
    pub alarms: Vec<AlarmRecord>,
    /// The number for the next journal entry.
    pub next_seq: u64,
    /// The number for the next notice.
    pub next_notice_id: u64,
    /// Notices that wait to be delivered, in the order of their numbers.
    pub undelivered: Vec<Undelivered>,
    /// The latest reading of each channel that has one.
    pub latest: BTreeMap<ChannelId, Reading>,
    /// The time of the newest reading of all: a clock that shows less can't be trusted.
    pub newest: Option<Utc>,
    /// Runs that ended before their time was known, each with the first monotonic time of what it left waiting.
    pub left_waiting: Vec<(u32, Mono)>,
}

/// A notice that waits to be delivered.
#[derive(Clone, Debug, PartialEq)]
pub struct Undelivered {
    /// What it tells.
    pub notice: Notice,
    /// Attempts made by former runs.
    pub attempts: u32,
    /// The bytes of the last attempt, to be sent again as they are; empty before the first.
    pub body: Vec<u8>,
}

impl Store {
    /// Reads what the owner takes up again.
    pub fn restore(&self) -> Result<Restored, StoreError> {
        let mut latest = BTreeMap::new();
        for channel in self.channels()? {
            if let Some(reading) = self.latest_reading(channel.id)? {
                latest.insert(channel.id, reading);
            }
        }
        Ok(Restored {
            alarms: self.alarms()?,
            next_seq: self.next("SELECT coalesce(max(seq), 0) + 1 FROM journal")?,
            next_notice_id: self.next("SELECT coalesce(max(id), 0) + 1 FROM outbox")?,
            undelivered: self
                .waiting_notices()?
                .into_iter()
                .map(|entry| Undelivered { notice: entry.notice, attempts: entry.attempts, body: entry.body })
                .collect(),
            newest: latest.values().map(|reading: &Reading| reading.at).max(),
            latest,
            left_waiting: self.left_waiting().map_err(|e| self.fault(e))?,
        })
    }

    fn left_waiting(&self) -> rusqlite::Result<Vec<(u32, Mono)>> {
        self.conn
            .prepare_cached("SELECT session, min(mono_ms) FROM waiting GROUP BY session ORDER BY session")?
            .query_map([], |row| Ok((row.get(0)?, Mono(row.get::<_, i64>(1)? as u64))))?
            .collect()
    }

    fn next(&self, sql: &str) -> Result<u64, StoreError> {
        self.conn.query_row(sql, [], |row| super::columns::unsigned(row, 0)).map_err(|e| self.fault(e))
    }
}
