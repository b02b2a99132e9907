//! A closed hour of one channel: times and millivolts compressed with pco, quality as run lengths.

use pco::ChunkConfig;
use pco::standalone::{simple_compress, simple_decompress};
use rusqlite::types::Type;
use rusqlite::{Connection, OptionalExtension, Row, params};

use super::columns::{from_key, key};
use crate::quantity::{Millivolts, Utc};
use crate::reading::{ChannelId, Quality, Reading};

/// Length of the time that a block covers.
pub(super) const HOUR_MS: i64 = 3_600_000;

/// The start of the hour that holds `at`.
pub(super) fn hour_of(at: Utc) -> Utc {
    Utc(at.0.div_euclid(HOUR_MS) * HOUR_MS)
}

/// A block as the table has it, still compressed.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Block {
    pub(super) channel: ChannelId,
    pub(super) hour: Utc,
    pub(super) sample_period_ms: u32,
    quality: Option<String>,
    times: Vec<u8>,
    millivolts: Vec<u8>,
}

/// A block's bytes don't give the readings that they should; becomes [`super::StoreError::Damaged`].
#[derive(Debug, thiserror::Error)]
#[error("the readings of channel {} in the hour from {}: {what}", channel.0, iso(*hour))]
struct BadBlock {
    channel: ChannelId,
    hour: Utc,
    what: String,
}

/// What stands beside a block, so that nobody has to unpack it: over the readings whose value is sound.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Summary {
    /// Every reading, sound or not.
    pub(super) count: usize,
    pub(super) min_mv: Option<i32>,
    pub(super) max_mv: Option<i32>,
    pub(super) mean_square_v2: Option<f64>,
}

impl Summary {
    fn of(readings: &[Reading]) -> Self {
        let sound = || readings.iter().filter(|r| r.quality.value_is_sound()).map(|r| r.value.0);
        let squares: f64 = sound().map(|mv| f64::from(mv) * f64::from(mv)).sum();
        let n = sound().count();
        Summary {
            count: readings.len(),
            min_mv: sound().min(),
            max_mv: sound().max(),
            mean_square_v2: (n > 0).then(|| squares / n as f64 / 1e6),
        }
    }
}

fn iso(at: Utc) -> String {
    let time = chrono::DateTime::from_timestamp_millis(at.0).unwrap_or_default();
    time.to_rfc3339_opts(chrono::SecondsFormat::Secs, true)
}

impl Block {
    /// Packs `readings` of one channel and hour: at least one, ascending in time, no millisecond twice.
    pub(super) fn encode(
        channel: ChannelId,
        hour: Utc,
        sample_period_ms: u32,
        readings: &[Reading],
    ) -> rusqlite::Result<(Block, Summary)> {
        let packing = |e: pco::errors::PcoError| rusqlite::Error::ToSqlConversionFailure(Box::new(e));
        let config = ChunkConfig::default();
        let times: Vec<u32> = readings.iter().map(|r| (r.at.0 - hour.0) as u32).collect();
        let values: Vec<i32> = readings.iter().map(|r| r.value.0).collect();
        let runs = quality_runs(readings);
        let quality = (!runs.is_empty()).then(|| serde_json::to_string(&runs)).transpose();
        let block = Block {
            channel,
            hour,
            sample_period_ms,
            quality: quality.map_err(|e| rusqlite::Error::ToSqlConversionFailure(Box::new(e)))?,
            times: simple_compress(&times, &config).map_err(packing)?,
            millivolts: simple_compress(&values, &config).map_err(packing)?,
        };
        Ok((block, Summary::of(readings)))
    }

    /// Writes the block over the one that its hour may have.
    pub(super) fn put(&self, conn: &Connection, summary: Summary) -> rusqlite::Result<()> {
        conn.prepare_cached(
            "INSERT OR REPLACE INTO block (key, count, min_mv, max_mv, mean_square_v2, sample_period_ms, calibration,
                                           quality, times, millivolts)
             VALUES (?1, ?2, ?3, ?4, ?5, ?6,
                     (SELECT id FROM calibration WHERE channel = ?7 AND at_ms < ?8 ORDER BY at_ms DESC LIMIT 1),
                     ?9, ?10, ?11)",
        )?
        .execute(params![
            key(self.channel, self.hour),
            summary.count as i64,
            summary.min_mv,
            summary.max_mv,
            summary.mean_square_v2,
            self.sample_period_ms,
            self.channel.0,
            self.hour.0 + HOUR_MS,
            self.quality,
            self.times,
            self.millivolts,
        ])?;
        Ok(())
    }

    /// The block of `channel` and `hour`, if that hour is closed.
    pub(super) fn get(conn: &Connection, channel: ChannelId, hour: Utc) -> rusqlite::Result<Option<Block>> {
        conn.prepare_cached(&format!("SELECT {COLUMNS} FROM block WHERE key = ?1"))?
            .query_row([key(channel, hour)], Block::from_row)
            .optional()
    }

    /// Whether the hour of `channel` is closed.
    pub(super) fn exists(conn: &Connection, channel: ChannelId, hour: Utc) -> rusqlite::Result<bool> {
        conn.prepare_cached("SELECT 1 FROM block WHERE key = ?1")?.exists([key(channel, hour)])
    }

    /// The readings again, in ascending order of time.
    pub(super) fn decode(&self) -> rusqlite::Result<Vec<Reading>> {
        let bad = |what: String| {
            let fault = BadBlock { channel: self.channel, hour: self.hour, what };
            rusqlite::Error::FromSqlConversionFailure(0, Type::Blob, Box::new(fault))
        };
        let times: Vec<u32> = simple_decompress(&self.times).map_err(|e| bad(e.to_string()))?;
        let values: Vec<i32> = simple_decompress(&self.millivolts).map_err(|e| bad(e.to_string()))?;
        if times.len() != values.len() {
            return Err(bad(format!("{} times for {} values", times.len(), values.len())));
        }
        let mut readings: Vec<Reading> = times
            .into_iter()
            .zip(values)
            .map(|(offset, mv)| Reading {
                channel: self.channel,
                at: Utc(self.hour.0 + i64::from(offset)),
                value: Millivolts(mv),
                quality: Quality::Good,
            })
            .collect();
        if let Some(runs) = &self.quality {
            let runs: Vec<(usize, usize, u8)> =
                serde_json::from_str(runs).map_err(|e| bad(format!("quality: {e}")))?;
            for (first, count, code) in runs {
                let quality = Quality::from_code(code).ok_or_else(|| bad(format!("quality {code}")))?;
                let run = first
                    .checked_add(count)
                    .and_then(|end| readings.get_mut(first..end))
                    .ok_or_else(|| bad(format!("quality run {first}+{count}")))?;
                run.iter_mut().for_each(|reading| reading.quality = quality);
            }
        }
        Ok(readings)
    }

    /// From the columns of [`COLUMNS`].
    pub(super) fn from_row(row: &Row<'_>) -> rusqlite::Result<Block> {
        let (channel, hour) = from_key(row.get(0)?);
        Ok(Block {
            channel,
            hour,
            sample_period_ms: row.get(1)?,
            quality: row.get(2)?,
            times: row.get(3)?,
            millivolts: row.get(4)?,
        })
    }
}

/// Stretches that are not good: first index, how many, quality.
fn quality_runs(readings: &[Reading]) -> Vec<(usize, usize, u8)> {
    let mut runs: Vec<(usize, usize, u8)> = Vec::new();
    for (index, reading) in readings.iter().enumerate().filter(|(_, r)| r.quality != Quality::Good) {
        let code = reading.quality.code();
        match runs.last_mut() {
            Some((first, count, last)) if *last == code && *first + *count == index => *count += 1,
            _ => runs.push((index, 1, code)),
        }
    }
    runs
}

/// What [`Block::from_row`] wants.
pub(super) const COLUMNS: &str = "key, sample_period_ms, quality, times, millivolts";
