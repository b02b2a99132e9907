//! How fast the record grows, by its own blocks.

use rusqlite::params;

use super::block::HOUR_MS;
use super::error::StoreError;
use super::open::Store;
use crate::quantity::Utc;

/// Growth is measured over this long.
const LOOK_BACK_MS: i64 = 7 * 24 * HOUR_MS;
/// And over no less than this.
const AT_LEAST_MS: i64 = 6 * HOUR_MS;
/// What a block and its six intervals take beside the packed readings, bytes, free space in pages included.
const BESIDE_A_BLOCK: i64 = 700;

impl Store {
    /// Bytes that the record grows by in a day, from what was recorded in the week before `now`; `None` while that is
    /// less than six hours. A record that lets old readings go (`keep_readings`) stops growing once it does, which
    /// this leaves to the caller.
    pub fn bytes_per_day(&self, now: Utc) -> Result<Option<f64>, StoreError> {
        let since = now.0 - LOOK_BACK_MS;
        let measured = self
            .conn
            .prepare_cached(
                "SELECT coalesce(sum(length(times) + length(millivolts) + ?2), 0), min(t_ms) FROM block WHERE key >= ?1",
            )
            .and_then(|mut statement| {
                statement.query_row(params![since.max(0) << 8, BESIDE_A_BLOCK], |row| {
                    Ok((row.get::<_, i64>(0)?, row.get::<_, Option<i64>>(1)?))
                })
            })
            .map_err(|e| self.fault(e))?;
        let (bytes, Some(first)) = measured else { return Ok(None) };
        let span = now.0 - first;
        Ok((span >= AT_LEAST_MS).then(|| bytes as f64 * 24.0 * HOUR_MS as f64 / span as f64))
    }

    /// Whether readings have been let go of already.
    pub fn lets_go(&self) -> Result<bool, StoreError> {
        let frozen =
            super::batch::number(&self.conn, super::batch::FROZEN_BEFORE).map_err(|e| self.fault(e))?;
        Ok(frozen.is_some())
    }
}
