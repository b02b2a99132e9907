//! Ten-minute intervals: kept as rows for closed hours, worked out on the way for hours that aren't.

use std::collections::{BTreeMap, BTreeSet};
use std::time::Duration;

use rusqlite::{Connection, Row, params};

use super::block::{Block, HOUR_MS, hour_of};
use super::channels::live_period;
use super::columns::{from_key, key};
use super::error::StoreError;
use super::open::Store;
use super::readings::{merge, open_rows};
use crate::mains::{Aggregator, INTERVAL, Interval};
use crate::quantity::Utc;
use crate::reading::{ChannelId, Reading};

impl Store {
    /// The 10-minute intervals of `channel` that start from `from` until before `to`, in order. Ten minutes without a
    /// sound reading are left out; the last may be unfinished, and is flagged then.
    pub fn intervals(&self, channel: ChannelId, from: Utc, to: Utc) -> Result<Vec<Interval>, StoreError> {
        let (from, to) = (Utc(from.0.max(0)), Utc(to.0.min(i64::MAX >> 8)));
        if from >= to {
            return Ok(Vec::new());
        }
        look(&self.conn, channel, from, to).map_err(|e| self.fault(e))
    }
}

fn look(conn: &Connection, channel: ChannelId, from: Utc, to: Utc) -> rusqlite::Result<Vec<Interval>> {
    let look = conn.unchecked_transaction()?;
    let mut found: BTreeMap<Utc, Interval> = BTreeMap::new();
    let mut rows = look.prepare_cached(
        "SELECT key, rms_mv, min_mv, max_mv, count, covered, flagged FROM interval
         WHERE key >= ?1 AND key < ?2 AND channel = ?3",
    )?;
    for interval in rows.query_map(params![from.0 << 8, to.0 << 8, channel.0], interval)? {
        let interval = interval?;
        found.insert(interval.start, interval);
    }
    drop(rows);
    for hour in open_hours(&look, channel, from, to)? {
        for interval in of_hour(&look, channel, hour)? {
            if interval.start >= from && interval.start < to {
                found.insert(interval.start, interval);
            }
        }
    }
    look.finish()?;
    Ok(found.into_values().collect())
}

/// The hours in which `channel` has open rows that can touch an interval from `from` until before `to`.
fn open_hours(conn: &Connection, channel: ChannelId, from: Utc, to: Utc) -> rusqlite::Result<BTreeSet<Utc>> {
    // A reading may reach into the intervals of the next hour.
    let first = hour_of(from).0 - HOUR_MS;
    conn.prepare_cached("SELECT DISTINCT t_ms / ?4 FROM open WHERE key >= ?1 AND key < ?2 AND channel = ?3")?
        .query_map(params![first << 8, to.0 << 8, channel.0, HOUR_MS], |row| {
            Ok(Utc(row.get::<_, i64>(0)? * HOUR_MS))
        })?
        .collect()
}

/// Writes the intervals of a closed hour, and those of the next one that its last reading reaches into.
pub(super) fn refresh_intervals(tx: &Connection, channel: ChannelId, hour: Utc) -> rusqlite::Result<()> {
    for interval in of_hour(tx, channel, hour)? {
        let its_hour = hour_of(interval.start);
        // An hour that isn't closed gets its own in its turn.
        if its_hour != hour && !Block::exists(tx, channel, its_hour)? {
            continue;
        }
        tx.prepare_cached(
            "INSERT OR REPLACE INTO interval (key, rms_mv, min_mv, max_mv, count, covered, flagged)
             VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)",
        )?
        .execute(params![
            key(channel, interval.start),
            interval.rms_v * 1000.0,
            (interval.min_v * 1000.0).round() as i64,
            (interval.max_v * 1000.0).round() as i64,
            interval.count,
            interval.covered,
            interval.flagged,
        ])?;
    }
    Ok(())
}

/// The intervals that start in `hour`, and those after it that its last reading reaches into where that hour is known
/// too.
fn of_hour(conn: &Connection, channel: ChannelId, hour: Utc) -> rusqlite::Result<Vec<Interval>> {
    let (readings, period_ms) = held(conn, channel, hour)?;
    let period_ms = i64::from(period_ms);
    let mut aggregator = Aggregator::new(Duration::from_millis(period_ms as u64));
    let mut intervals = Vec::new();
    // What came before reaches into this hour.
    let mut before = Utc(hour.0 - HOUR_MS);
    let mut earlier = Vec::new();
    while before.0 > hour.0 - HOUR_MS - period_ms && before.0 >= 0 {
        let (readings, _) = held(conn, channel, before)?;
        earlier.extend(readings.into_iter().rev().find(|r| r.quality.value_is_sound()));
        before = Utc(before.0 - HOUR_MS);
    }
    for reading in earlier.into_iter().rev().chain(readings) {
        intervals.extend(aggregator.push(reading));
    }
    let interval_ms = INTERVAL.as_millis() as i64;
    // Only whole intervals may be written for the next hour, so all of its readings up to there are needed.
    let last_ends = hour.0 + HOUR_MS + period_ms - 1;
    let reach = Utc(last_ends + (interval_ms - last_ends % interval_ms) % interval_ms);
    let mut next = Utc(hour.0 + HOUR_MS);
    while next < reach {
        let (readings, _) = held(conn, channel, next)?;
        for reading in readings.into_iter().filter(|r| r.at < reach) {
            intervals.extend(aggregator.push(reading));
        }
        next = Utc(next.0 + HOUR_MS);
    }
    intervals.extend(aggregator.finish());
    intervals.retain(|interval| interval.start >= hour);
    Ok(intervals)
}

/// What is held of one hour of `channel`, open rows merged over its block, and how long each reading stands for, ms.
fn held(conn: &Connection, channel: ChannelId, hour: Utc) -> rusqlite::Result<(Vec<Reading>, u32)> {
    let rows = open_rows(conn, channel, hour, Utc(hour.0 + HOUR_MS))?;
    Ok(match Block::get(conn, channel, hour)? {
        Some(block) => (merge(block.decode()?, rows), block.sample_period_ms),
        None => (rows, live_period(conn, channel)?),
    })
}

fn interval(row: &Row<'_>) -> rusqlite::Result<Interval> {
    let (_, start) = from_key(row.get(0)?);
    Ok(Interval {
        start,
        rms_v: row.get::<_, f64>(1)? / 1000.0,
        min_v: row.get::<_, f64>(2)? / 1000.0,
        max_v: row.get::<_, f64>(3)? / 1000.0,
        count: row.get(4)?,
        covered: row.get(5)?,
        flagged: row.get(6)?,
    })
}
