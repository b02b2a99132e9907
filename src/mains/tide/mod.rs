//! The tide table: what the mains is expected to do over the next hours, from what it did over the last weeks.
//!
//! The method, in the order of the files here: `history` lays the intervals out in rows of 24 hours that end at the
//! moment of issue; `shape` takes the household's habit by time of day out of them, working days and weekends apart,
//! recent days weighing more; `level` says how what is left of the last hours, the last day and the last week carries
//! on, learnt from the same rows; `spread` takes the weighted quantiles of the errors that this very forecast would
//! have made from earlier rows. `turns` finds the expected highs and lows.
//!
//! It was tuned on the first eight months of the open recording in `tests/data` and judged on the rest; its constants
//! are our own, no source. It forecasts 10-minute values: seconds stand higher and lower than their mean.

mod history;
mod level;
mod shape;
mod spread;
mod turns;

use std::time::Duration;

use chrono_tz::Tz;
use serde::Serialize;

use super::interval::{INTERVAL, Interval};
use crate::quantity::Utc;
use history::History;

pub use turns::{Turn, TurnKind, turns};

/// Intervals in 24 hours.
const DAY: usize = 144;

/// Rows of 24 hours that a forecast looks back over, at most.
const MOST_ROWS: usize = 84;

/// How far back a forecast looks, at most.
pub const HISTORY: Duration = Duration::from_secs(MOST_ROWS as u64 * 86_400);

/// Rows of 24 hours that a forecast needs, at least.
pub const FEWEST_ROWS: usize = 7;

/// A row is used if at least this many of its intervals are there: half.
const ROW_FROM: usize = DAY / 2;

/// How much of the last 24 hours must be there, as a share.
const LAST_DAY_FROM: f64 = 0.4;

/// One interval to come.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct TideStep {
    /// Its start.
    pub at: Utc,
    /// Its mean is expected to be below this once in twenty times, V.
    pub low_v: f64,
    /// As likely above as below, V.
    pub median_v: f64,
    /// It is expected to be above this once in twenty times, V.
    pub high_v: f64,
}

/// The tide table of one moment.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct TideTable {
    /// The start of the first interval to come, which may have begun: nothing from here on was known.
    pub issued_at: Utc,
    /// How many rows of 24 hours it rests on.
    pub rows: usize,
    /// The intervals to come, in order.
    pub steps: Vec<TideStep>,
}

/// Why there is no forecast.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NoForecast {
    /// The record doesn't reach back far enough.
    #[error(
        "the tide table needs {FEWEST_ROWS} days of 24 hours that are at least half recorded, and there are {rows}; it comes by itself when they are there"
    )]
    TooShort {
        /// How many whole days there are.
        rows: usize,
    },
    /// The last day is missing, so nobody knows where the mains stands.
    #[error(
        "the tide table needs at least {:.0} % of the last 24 hours, and {recorded_pct:.0} % are recorded; look whether the logger is running",
        100.0 * LAST_DAY_FROM
    )]
    LastDayMissing {
        /// How much of it is there, %.
        recorded_pct: f64,
    },
}

/// Forecasts the intervals that start within `horizon` from the start of the interval that holds `as_of`.
///
/// `intervals` is the record of mains, in any order and with gaps; of it only what was complete at `as_of` is used,
/// and of that only the last twelve weeks. Intervals that are less than half covered, or stand more than 10 % off the
/// middle of their day (an interruption, a dip) count as missing. `time_zone` is the household's.
pub fn forecast(
    intervals: &[Interval],
    as_of: Utc,
    horizon: Duration,
    time_zone: Tz,
) -> Result<TideTable, NoForecast> {
    let issued_at = Interval::start_of(as_of, INTERVAL);
    let history = History::new(intervals, issued_at, time_zone)?;
    let coming = (horizon.as_millis() / INTERVAL.as_millis()) as usize;
    if coming == 0 {
        return Ok(TideTable { issued_at, rows: history.rows(), steps: Vec::new() });
    }
    let wall: Vec<_> = (0..coming).map(|k| history::wall(after(issued_at, k), time_zone)).collect();
    let shape = shape::Shape::of(&history);
    let left = shape.without(&history);
    let level = level::Level::learn(&left, coming);
    let spread = spread::Spread::of(&history, &level.errors, &wall);
    let steps = wall
        .iter()
        .enumerate()
        .map(|(k, wall)| {
            let centre = shape.at(*wall) + level.ahead[k];
            let [low, median, high] = spread.at(k).map(|off| centre + off);
            TideStep { at: after(issued_at, k), low_v: low, median_v: median, high_v: high }
        })
        .collect();
    Ok(TideTable { issued_at, rows: history.rows(), steps })
}

fn after(start: Utc, intervals: usize) -> Utc {
    Utc(start.0 + (intervals as u128 * INTERVAL.as_millis()) as i64)
}

/// The kernel exp(−½·(o/width)²) for whole offsets o up to twice its width, as (offset, weight).
fn kernel(width: f64) -> Vec<(isize, f64)> {
    let reach = (2.0 * width).ceil() as isize;
    (-reach..=reach).map(|o| (o, (-0.5 * (o as f64 / width).powi(2)).exp())).collect()
}

/// A weight that halves with every `half_life` rows of age.
fn fading(age: usize, half_life: f64) -> f64 {
    0.5f64.powf(age as f64 / half_life)
}

#[cfg(test)]
mod tests;
