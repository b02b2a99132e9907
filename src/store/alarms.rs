//! Reading alarms, their journal and the outbox.

use rusqlite::{Row, params};

use super::columns::{alarm_key, from_json, from_word, priority, state, unsigned};
use super::error::StoreError;
use super::open::Store;
use crate::alarm::{AlarmKey, AlarmRecord, Delivery, JournalEntry, Notice};
use crate::quantity::Utc;

/// Which journal entries; the default is all of them.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct JournalFilter {
    /// Not before this.
    pub from: Option<Utc>,
    /// Before this.
    pub to: Option<Utc>,
    /// About this alarm only.
    pub key: Option<AlarmKey>,
    /// At most so many, the newest ones.
    pub newest: Option<u32>,
}

/// A notice, how far it has come, and what the receiver said.
#[derive(Clone, Debug, PartialEq)]
pub struct OutboxEntry {
    /// What it tells.
    pub notice: Notice,
    /// How far it has come.
    pub delivery: Delivery,
    /// Attempts made.
    pub attempts: u32,
    /// What the receiver or the network said last; empty before the first attempt.
    pub said: String,
    /// The bytes of the last attempt; empty before the first.
    pub body: Vec<u8>,
}

impl Store {
    /// Every alarm that has ever left normal, as it stands, in the order of its key.
    pub fn alarms(&self) -> Result<Vec<AlarmRecord>, StoreError> {
        let read = || -> rusqlite::Result<Vec<AlarmRecord>> {
            self.conn
                .prepare_cached(
                    "SELECT condition, subject, state, active, priority, since_ms, raised_at_ms, shelved_until_ms,
                            last_seq, facts
                     FROM alarm ORDER BY condition, subject",
                )?
                .query_map([], alarm)?
                .collect()
        };
        read().map_err(|e| self.fault(e))
    }

    /// The journal's entries that `filter` lets through, oldest first.
    pub fn journal(&self, filter: &JournalFilter) -> Result<Vec<JournalEntry>, StoreError> {
        let read = || -> rusqlite::Result<Vec<JournalEntry>> {
            let (condition, subject) = match &filter.key {
                Some(key) => (Some(&key.condition), Some(&key.subject)),
                None => (None, None),
            };
            self.conn
                .prepare_cached(
                    "SELECT * FROM (
                         SELECT seq, at_ms, condition, subject, event, from_state, from_active, to_state, to_active,
                                priority, done_by, facts
                         FROM journal
                         WHERE (?1 IS NULL OR at_ms >= ?1) AND (?2 IS NULL OR at_ms < ?2)
                           AND (?3 IS NULL OR (condition, subject) = (?3, ?4))
                         ORDER BY seq DESC LIMIT ?5)
                     ORDER BY seq",
                )?
                .query_map(
                    params![
                        filter.from.map(|t| t.0),
                        filter.to.map(|t| t.0),
                        condition,
                        subject,
                        // SQLite takes a negative limit as none.
                        filter.newest.map_or(-1, i64::from)
                    ],
                    entry,
                )?
                .collect()
        };
        read().map_err(|e| self.fault(e))
    }

    /// The newest `newest` notices, oldest first.
    pub fn outbox(&self, newest: u32) -> Result<Vec<OutboxEntry>, StoreError> {
        let read = || -> rusqlite::Result<Vec<OutboxEntry>> {
            self.conn
                .prepare_cached(&format!(
                    "SELECT * FROM (SELECT {OUTBOX} FROM outbox ORDER BY id DESC LIMIT ?1) ORDER BY id"
                ))?
                .query_map([newest], outbox_entry)?
                .collect()
        };
        read().map_err(|e| self.fault(e))
    }

    /// Notices that still wait to be delivered, in the order of their numbers.
    pub(super) fn waiting_notices(&self) -> Result<Vec<OutboxEntry>, StoreError> {
        let read = || -> rusqlite::Result<Vec<OutboxEntry>> {
            self.conn
                .prepare_cached(&format!("SELECT {OUTBOX} FROM outbox WHERE state = 'waiting' ORDER BY id"))?
                .query_map([], outbox_entry)?
                .collect()
        };
        read().map_err(|e| self.fault(e))
    }
}

const OUTBOX: &str = "id, receiver, kind, priority, at_ms, condition, subject, raised_at_ms, facts, advice, \
                      idempotency_key, recorded, state, settled_at_ms, attempts, said, body";

fn alarm(row: &Row<'_>) -> rusqlite::Result<AlarmRecord> {
    Ok(AlarmRecord {
        key: alarm_key(row, 0)?,
        state: state(row, 2)?,
        priority: priority(row, 4)?,
        since: Utc(row.get(5)?),
        raised_at: row.get::<_, Option<i64>>(6)?.map(Utc),
        shelved_until: row.get::<_, Option<i64>>(7)?.map(Utc),
        last_seq: unsigned(row, 8)?,
        facts: from_json(row, 9)?,
    })
}

fn entry(row: &Row<'_>) -> rusqlite::Result<JournalEntry> {
    Ok(JournalEntry {
        seq: unsigned(row, 0)?,
        at: Utc(row.get(1)?),
        key: alarm_key(row, 2)?,
        event: from_word(row, 4)?,
        from: state(row, 5)?,
        to: state(row, 7)?,
        priority: priority(row, 9)?,
        by: row.get(10)?,
        facts: from_json(row, 11)?,
    })
}

fn outbox_entry(row: &Row<'_>) -> rusqlite::Result<OutboxEntry> {
    let settled_at = Utc(row.get::<_, Option<i64>>(13)?.unwrap_or(0));
    Ok(OutboxEntry {
        notice: Notice {
            id: unsigned(row, 0)?,
            receiver: row.get(1)?,
            kind: from_word(row, 2)?,
            priority: priority(row, 3)?,
            at: Utc(row.get(4)?),
            key: alarm_key(row, 5)?,
            raised_at: Utc(row.get(7)?),
            facts: from_json(row, 8)?,
            advice: row.get(9)?,
            idempotency_key: row.get(10)?,
            recorded: row.get(11)?,
        },
        delivery: super::columns::parsed(row, 12, |word| match word {
            "waiting" => Some(Delivery::Waiting),
            "delivered" => Some(Delivery::Delivered { at: settled_at }),
            "given_up" => Some(Delivery::GivenUp { at: settled_at }),
            _ => None,
        })?,
        attempts: row.get(14)?,
        said: row.get(15)?,
        body: row.get(16)?,
    })
}
