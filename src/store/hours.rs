//! Hours: the open rows of an hour packed into one block a channel, late rows merged into a block that is there
//! already, and old hours let go.

use rusqlite::{Connection, TransactionBehavior, params};

use super::batch::{FROZEN_BEFORE, number, put_number};
use super::block::{Block, HOUR_MS, hour_of};
use super::channels::live_period;
use super::error::StoreError;
use super::intervals::refresh_intervals;
use super::open::Store;
use super::readings::{merge, open_rows};
use crate::quantity::Utc;
use crate::reading::{ChannelId, Reading};

/// An hour is closed this long after its end, ms: by then even a slow commit has brought its last reading.
const CLOSED_AFTER_MS: i64 = 5 * 60_000;

/// Hours merged in one transaction: about 20 ms of work at one reading a second.
const HOURS_AT_A_TIME: usize = 12;
/// Blocks dropped in one transaction, so that it stays short.
const DROPPED_AT_A_TIME: i64 = 96;
/// Free pages handed back to the disk after that.
const PAGES_HANDED_BACK: i64 = 512;

impl Store {
    /// Closes the oldest hour that is due at `now`, of all channels, in one transaction: its open rows go into blocks,
    /// merged with the block that a channel may have already, and its 10-minute intervals are worked out anew. False
    /// when no hour is due.
    ///
    /// A block that can't be unpacked is left as it is and so are its hour's rows; the error is told once and later
    /// hours are closed all the same.
    pub fn close_next_hour(&mut self, now: Utc) -> Result<bool, StoreError> {
        let Some(hour) = self.hour_to_close(now).map_err(|e| self.fault(e))? else { return Ok(false) };
        let closed = close(&mut self.conn, hour);
        if closed.is_err() {
            let error = closed.map_err(|e| self.fault(e));
            if matches!(error, Err(StoreError::Damaged { .. })) {
                self.close_from = Utc(hour.0 + HOUR_MS);
            }
            error?;
        }
        Ok(true)
    }

    fn hour_to_close(&self, now: Utc) -> rusqlite::Result<Option<Utc>> {
        let oldest: Option<i64> = self
            .conn
            .prepare_cached("SELECT min(key) FROM open WHERE key >= ?1")?
            .query_row([self.close_from.0 << 8], |row| row.get(0))?;
        Ok(oldest
            .map(|key| hour_of(Utc(key >> 8)))
            .filter(|hour| hour.0 + HOUR_MS + CLOSED_AFTER_MS <= now.0))
    }

    /// Merges `readings` of one channel, in any order and each standing for `sample_period_ms`, into the closed hours,
    /// some hours in a transaction so that none takes long. How many were from before the time up to which readings
    /// have been let go, and so were refused. After an error the hours before it are stored; merging the same readings
    /// again changes nothing.
    pub fn merge_recording(
        &mut self,
        channel: ChannelId,
        sample_period_ms: u32,
        mut readings: Vec<Reading>,
    ) -> Result<u64, StoreError> {
        readings.sort_by_key(|r| (r.at, r.quality, std::cmp::Reverse(r.value)));
        readings.dedup_by_key(|r| r.at);
        let hours: Vec<&[Reading]> = readings.chunk_by(|a, b| hour_of(a.at) == hour_of(b.at)).collect();
        let mut refused = 0;
        for some in hours.chunks(HOURS_AT_A_TIME) {
            refused +=
                merge_hours(&mut self.conn, channel, sample_period_ms, some).map_err(|e| self.fault(e))?;
        }
        Ok(refused)
    }

    /// Lets go of closed hours that end before `before`, some at a time; their intervals stay, frozen. False when none
    /// is left.
    pub fn drop_hours_before(&mut self, before: Utc) -> Result<bool, StoreError> {
        drop_hours(&mut self.conn, hour_of(before)).map_err(|e| self.fault(e))
    }
}

fn close(conn: &mut Connection, hour: Utc) -> rusqlite::Result<()> {
    let tx = conn.transaction_with_behavior(TransactionBehavior::Immediate)?;
    let end = Utc(hour.0 + HOUR_MS);
    let channels: Vec<ChannelId> = tx
        .prepare_cached("SELECT DISTINCT channel FROM open WHERE key >= ?1 AND key < ?2")?
        .query_map([hour.0 << 8, end.0 << 8], |row| Ok(ChannelId(row.get(0)?)))?
        .collect::<rusqlite::Result<_>>()?;
    for channel in channels {
        let rows = open_rows(&tx, channel, hour, end)?;
        let period = live_period(&tx, channel)?;
        pack(&tx, channel, hour, period, rows)?;
        tx.prepare_cached("DELETE FROM open WHERE key >= ?1 AND key < ?2 AND channel = ?3")?
            .execute(params![hour.0 << 8, end.0 << 8, channel.0])?;
        refresh_intervals(&tx, channel, hour)?;
    }
    tx.commit()
}

fn merge_hours(
    conn: &mut Connection,
    channel: ChannelId,
    sample_period_ms: u32,
    hours: &[&[Reading]],
) -> rusqlite::Result<u64> {
    let tx = conn.transaction_with_behavior(TransactionBehavior::Immediate)?;
    let frozen_before = number(&tx, FROZEN_BEFORE)?.unwrap_or(i64::MIN);
    let mut refused = 0;
    for readings in hours {
        let old = readings.partition_point(|r| r.at.0 < frozen_before);
        refused += old as u64;
        if let Some(first) = readings.get(old) {
            let hour = hour_of(first.at);
            pack(&tx, channel, hour, sample_period_ms, readings[old..].to_vec())?;
            refresh_intervals(&tx, channel, hour)?;
        }
    }
    tx.commit()?;
    Ok(refused)
}

/// Packs `readings` into the hour's block, merged with what that holds. Of two sample periods the shorter stands, so
/// that nothing is taken to cover more than it does.
fn pack(
    tx: &Connection,
    channel: ChannelId,
    hour: Utc,
    sample_period_ms: u32,
    readings: Vec<Reading>,
) -> rusqlite::Result<()> {
    let (readings, period) = match Block::get(tx, channel, hour)? {
        Some(block) => {
            let held = block.decode()?;
            count_differing(tx, &held, &readings)?;
            (merge(held, readings), sample_period_ms.min(block.sample_period_ms))
        }
        None => (readings, sample_period_ms),
    };
    let (block, summary) = Block::encode(channel, hour, period, &readings)?;
    block.put(tx, summary)
}

/// Counts the readings that claim a millisecond already taken by a different one.
fn count_differing(tx: &Connection, held: &[Reading], late: &[Reading]) -> rusqlite::Result<()> {
    let differing = late
        .iter()
        .filter(|r| held.binary_search_by_key(&r.at, |h| h.at).is_ok_and(|i| held[i] != **r))
        .count();
    if differing > 0 {
        let key = super::batch::DIFFERING;
        put_number(tx, key, number(tx, key)?.unwrap_or(0) + differing as i64)?;
    }
    Ok(())
}

fn drop_hours(conn: &mut Connection, before: Utc) -> rusqlite::Result<bool> {
    let tx = conn.transaction_with_behavior(TransactionBehavior::Immediate)?;
    let dropped = tx
        .prepare_cached(
            "DELETE FROM block WHERE key IN (SELECT key FROM block WHERE key < ?1 ORDER BY key LIMIT ?2)",
        )?
        .execute([before.0 << 8, DROPPED_AT_A_TIME])?;
    if dropped > 0 && number(&tx, FROZEN_BEFORE)?.is_none_or(|frozen| frozen < before.0) {
        put_number(&tx, FROZEN_BEFORE, before.0)?;
    }
    tx.commit()?;
    if dropped > 0 {
        // Reading the pragma's rows is what does the work.
        let mut vacuum = conn.prepare(&format!("PRAGMA incremental_vacuum({PAGES_HANDED_BACK})"))?;
        let mut rows = vacuum.query([])?;
        while rows.next()?.is_some() {}
    }
    Ok(dropped as i64 == DROPPED_AT_A_TIME)
}
