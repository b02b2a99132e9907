//! Reading the readings of one channel in order of time: open rows merged over closed hours, some hours at a time, so
//! that memory stays flat over a year.

use std::collections::VecDeque;

use rusqlite::{Connection, OptionalExtension, params};

use super::batch::wins;
use super::block::{self, Block, HOUR_MS, hour_of};
use super::columns;
use super::error::StoreError;
use super::open::Store;
use crate::quantity::Utc;
use crate::reading::{ChannelId, Reading};

/// Blocks fetched at a time; they stay compressed until their turn, about 6 kB each.
const BLOCKS_AT_A_TIME: usize = 24;

/// A channel's readings in order of time; made by [`Store::readings`].
///
/// Each piece of up to 24 closed hours is one consistent look at the database, so that an hour closed meanwhile is
/// neither missed nor seen twice, and a slow consumer doesn't keep the write-ahead log from being folded in. After an
/// error about a damaged block the iterator goes on with the next hour: what can be read, is.
#[derive(Debug)]
pub struct Readings<'s> {
    store: &'s Store,
    channel: ChannelId,
    from: Utc,
    to: Utc,
    /// Where the next piece starts.
    next: Utc,
    blocks: VecDeque<Block>,
    rows: VecDeque<Reading>,
    ready: std::vec::IntoIter<Reading>,
}

impl Store {
    /// The readings of `channel` from `from` until before `to`, in order of time.
    pub fn readings(&self, channel: ChannelId, from: Utc, to: Utc) -> Readings<'_> {
        // The record starts with 1970, and a key holds 55 bits of time.
        let (from, to) = (Utc(from.0.max(0)), Utc(to.0.min(i64::MAX >> 8)));
        Readings {
            store: self,
            channel,
            from,
            to,
            next: from,
            blocks: VecDeque::new(),
            rows: VecDeque::new(),
            ready: Vec::new().into_iter(),
        }
    }

    /// Hands the readings of `channel` from `from` until before `to` to `take`, in order of time and an hour or so at a
    /// time: quicker than [`Store::readings`] where every one of many is looked at.
    pub fn each_hour(
        &self,
        channel: ChannelId,
        from: Utc,
        to: Utc,
        mut take: impl FnMut(&[Reading]),
    ) -> Result<(), StoreError> {
        let mut readings = self.readings(channel, from, to);
        while readings.refill().map_err(|e| self.fault(e))? {
            take(readings.ready.as_slice());
        }
        Ok(())
    }

    /// How long each reading of `channel` stands for in that time: the shortest of the closed hours', or that of live
    /// readings.
    pub fn sample_period(
        &self,
        channel: ChannelId,
        from: Utc,
        to: Utc,
    ) -> Result<std::time::Duration, StoreError> {
        let shortest = || -> rusqlite::Result<u32> {
            let closed: Option<u32> = self
                .conn
                .prepare_cached(
                    "SELECT min(sample_period_ms) FROM block WHERE key >= ?1 AND key < ?2 AND channel = ?3",
                )?
                .query_row(
                    params![hour_of(Utc(from.0.max(0))).0 << 8, to.0.min(i64::MAX >> 8) << 8, channel.0],
                    |row| row.get(0),
                )?;
            match closed {
                Some(period) => Ok(period),
                None => super::channels::live_period(&self.conn, channel),
            }
        };
        shortest().map(|ms| std::time::Duration::from_millis(u64::from(ms))).map_err(|e| self.fault(e))
    }

    /// About how many readings of `channel` there are from `from` until before `to`: whole hours where they are closed.
    pub fn count_readings(&self, channel: ChannelId, from: Utc, to: Utc) -> Result<u64, StoreError> {
        let (from, to) = (Utc(from.0.max(0)), Utc(to.0.min(i64::MAX >> 8)));
        let count = |sql: &str, from: Utc| {
            self.conn
                .prepare_cached(sql)?
                .query_row(params![from.0 << 8, to.0 << 8, channel.0], |row| row.get::<_, i64>(0))
        };
        let closed = count(
            "SELECT coalesce(sum(count), 0) FROM block WHERE key >= ?1 AND key < ?2 AND channel = ?3",
            hour_of(from),
        );
        let open = count("SELECT count(*) FROM open WHERE key >= ?1 AND key < ?2 AND channel = ?3", from);
        closed.and_then(|closed| Ok((closed + open?) as u64)).map_err(|e| self.fault(e))
    }

    /// The newest reading of `channel`.
    pub fn latest_reading(&self, channel: ChannelId) -> Result<Option<Reading>, StoreError> {
        latest(&self.conn, channel).map_err(|e| self.fault(e))
    }
}

impl Iterator for Readings<'_> {
    type Item = Result<Reading, StoreError>;

    fn next(&mut self) -> Option<Self::Item> {
        loop {
            if let Some(reading) = self.ready.next() {
                return Some(Ok(reading));
            }
            match self.refill() {
                Ok(true) => {}
                Ok(false) => return None,
                Err(e) => return Some(Err(self.store.fault(e))),
            }
        }
    }
}

impl Readings<'_> {
    /// Makes the next readings ready; false at the end.
    fn refill(&mut self) -> rusqlite::Result<bool> {
        if self.blocks.is_empty() && self.rows.is_empty() {
            if self.next >= self.to {
                return Ok(false);
            }
            self.fetch()?;
        }
        // Rows of hours before the next block stand alone, those of its own hour are merged with it.
        let block = self.blocks.pop_front();
        let end = block.as_ref().map_or(self.to, |block| Utc(block.hour.0 + HOUR_MS));
        let rows: Vec<Reading> = self.rows.drain(..self.rows.partition_point(|r| r.at < end)).collect();
        let mut closed = block.map_or(Ok(Vec::new()), |block| block.decode())?;
        closed.retain(|r| r.at >= self.from && r.at < self.to);
        self.ready = merge(closed, rows).into_iter();
        Ok(true)
    }

    /// Fetches the next piece in one look at the database.
    fn fetch(&mut self) -> rusqlite::Result<()> {
        let start = self.next;
        // If the look fails, the next call ends the iteration rather than fail for ever.
        self.next = self.to;
        let look = self.store.conn.unchecked_transaction()?;
        self.blocks = look
            .prepare_cached(&format!(
                "SELECT {} FROM block WHERE channel = ?1 AND t_ms >= ?2 AND t_ms < ?3 ORDER BY t_ms LIMIT ?4",
                block::COLUMNS
            ))?
            .query_map(
                params![self.channel.0, hour_of(start).0, self.to.0, BLOCKS_AT_A_TIME as i64],
                Block::from_row,
            )?
            .collect::<rusqlite::Result<_>>()?;
        let end = match self.blocks.back() {
            Some(last) if self.blocks.len() == BLOCKS_AT_A_TIME => Utc(last.hour.0 + HOUR_MS).min(self.to),
            _ => self.to,
        };
        self.rows = open_rows(&look, self.channel, start, end)?.into();
        self.next = end;
        look.finish()
    }
}

/// The open rows of `channel` from `from` until before `to`, in order of time.
pub(super) fn open_rows(
    conn: &Connection,
    channel: ChannelId,
    from: Utc,
    to: Utc,
) -> rusqlite::Result<Vec<Reading>> {
    conn.prepare_cached(
        "SELECT key, mv, quality FROM open WHERE key >= ?1 AND key < ?2 AND channel = ?3 ORDER BY key",
    )?
    .query_map(params![from.0 << 8, to.0 << 8, channel.0], columns::reading)?
    .collect()
}

/// Two ascending sequences as one; where both hold a time, the better reading.
pub(super) fn merge(a: Vec<Reading>, b: Vec<Reading>) -> Vec<Reading> {
    if a.is_empty() {
        return b;
    }
    if b.is_empty() {
        return a;
    }
    let mut merged = Vec::with_capacity(a.len() + b.len());
    let (mut a, mut b) = (a.into_iter().peekable(), b.into_iter().peekable());
    loop {
        let next = match (a.peek(), b.peek()) {
            (Some(x), Some(y)) if x.at < y.at => a.next(),
            (Some(x), Some(y)) if x.at > y.at => b.next(),
            (Some(_), Some(_)) => match (a.next(), b.next()) {
                (Some(x), Some(y)) if wins((y.quality, y.value), (x.quality, x.value)) => Some(y),
                (x, _) => x,
            },
            (Some(_), None) => a.next(),
            (None, _) => b.next(),
        };
        match next {
            Some(reading) => merged.push(reading),
            None => return merged,
        }
    }
}

fn latest(conn: &Connection, channel: ChannelId) -> rusqlite::Result<Option<Reading>> {
    let look = conn.unchecked_transaction()?;
    let open = look
        .prepare_cached("SELECT key, mv, quality FROM open WHERE channel = ?1 ORDER BY key DESC LIMIT 1")?
        .query_row([channel.0], columns::reading)
        .optional()?;
    let closed = look
        .prepare_cached(&format!(
            "SELECT {} FROM block WHERE channel = ?1 ORDER BY t_ms DESC LIMIT 1",
            block::COLUMNS
        ))?
        .query_row([channel.0], Block::from_row)
        .optional()?;
    look.finish()?;
    let closed = match closed {
        Some(block) if open.is_none_or(|open| open.at < Utc(block.hour.0 + HOUR_MS)) => block.decode()?.pop(),
        _ => None,
    };
    Ok(match (open, closed) {
        (Some(a), Some(b)) => merge(vec![a], vec![b]).pop(),
        (a, b) => a.or(b),
    })
}
