//! A closed hour of one channel: times and millivolts compressed with pco, quality as run lengths.

use pco::standalone::simple_decompress;
use rusqlite::Row;
use rusqlite::types::Type;

use super::columns::from_key;
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
#[error("the readings of channel {} in the hour from {} ms UTC: {what}", channel.0, hour.0)]
struct BadBlock {
    channel: ChannelId,
    hour: Utc,
    what: String,
}

impl Block {
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

/// What [`Block::from_row`] wants.
pub(super) const COLUMNS: &str = "key, sample_period_ms, quality, times, millivolts";
