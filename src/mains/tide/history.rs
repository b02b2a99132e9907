//! The past, laid out in rows of 24 hours that end at the moment of issue.

use chrono::Timelike;
use chrono_tz::Tz;

use super::{DAY, FEWEST_ROWS, LAST_DAY_FROM, MOST_ROWS, NoForecast, ROW_FROM};
use crate::mains::civil::{DayKind, local};
use crate::mains::interval::{INTERVAL, Interval};
use crate::quantity::Utc;

/// Intervals that are covered less than this count as missing.
const COVERED_FROM: f64 = 0.5;

/// Values further off the middle of their row than this share of it count as missing: EN 50160's band for normal
/// supply is ±10 %, and beyond it is an event, no habit.
const EVENT_FROM: f64 = 0.1;

/// Where an interval lies in the household's day.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Wall {
    /// Which tenth minute of the local day.
    pub(super) slot: usize,
    /// Saturday or Sunday.
    pub(super) weekend: bool,
}

/// The household's clock at `at`.
pub(super) fn wall(at: Utc, time_zone: Tz) -> Wall {
    let local = local(at, time_zone);
    let minute = (local.hour() * 60 + local.minute()) as usize;
    Wall { slot: minute / 10, weekend: DayKind::of(local.date()) == DayKind::Weekend }
}

/// The rows. Row 0 is the oldest; the last ends where the forecast begins.
#[derive(Debug)]
pub(super) struct History {
    /// Row by row; NaN where missing.
    pub(super) volts: Vec<f64>,
    /// Where each lies in the household's day.
    pub(super) wall: Vec<Wall>,
    /// The mean of each row, V; NaN where too little of it is there.
    pub(super) row_mean: Vec<f64>,
}

impl History {
    pub(super) fn new(intervals: &[Interval], issued_at: Utc, time_zone: Tz) -> Result<Self, NoForecast> {
        let step = INTERVAL.as_millis() as i64;
        let reach = MOST_ROWS * DAY;
        let oldest = issued_at.0 - reach as i64 * step;
        let mut volts = vec![f64::NAN; reach];
        for interval in intervals.iter().filter(|i| (oldest..issued_at.0).contains(&i.start.0)) {
            if interval.covered >= COVERED_FROM && interval.rms_v.is_finite() {
                volts[((interval.start.0 - oldest) / step) as usize] = interval.rms_v;
            }
        }
        for row in volts.chunks_mut(DAY) {
            leave_out_events(row);
        }
        let whole = |row: &[f64]| row.iter().filter(|v| v.is_finite()).count() >= ROW_FROM;
        let first = volts.chunks(DAY).position(whole).unwrap_or(MOST_ROWS);
        let rows = volts.chunks(DAY).filter(|row| whole(row)).count();
        if rows < FEWEST_ROWS {
            return Err(NoForecast::TooShort { rows });
        }
        let recorded = volts[reach - DAY..].iter().filter(|v| v.is_finite()).count() as f64 / DAY as f64;
        if recorded < LAST_DAY_FROM {
            return Err(NoForecast::LastDayMissing { recorded_pct: 100.0 * recorded });
        }
        let volts = volts.split_off(first * DAY);
        let start = Utc(oldest + (first * DAY) as i64 * step);
        let wall = (0..volts.len()).map(|i| wall(super::after(start, i), time_zone)).collect();
        let row_mean = volts
            .chunks(DAY)
            .map(|row| if whole(row) { mean(row).unwrap_or(f64::NAN) } else { f64::NAN })
            .collect();
        Ok(History { volts, wall, row_mean })
    }

    /// How many rows, from the oldest that is used.
    pub(super) fn rows(&self) -> usize {
        self.row_mean.len()
    }

    /// How many rows lie between row `row` and the moment of issue.
    pub(super) fn age(&self, row: usize) -> usize {
        self.rows() - 1 - row
    }
}

/// The mean of what is there; `None` if nothing is.
pub(super) fn mean(values: &[f64]) -> Option<f64> {
    let there = values.iter().filter(|v| v.is_finite());
    let (sum, count) = there.fold((0.0, 0), |(sum, count), v| (sum + v, count + 1));
    (count > 0).then(|| sum / f64::from(count))
}

/// The middle one of `values`, which are reordered; `None` if there are none.
pub(super) fn middle(values: &mut [f64]) -> Option<f64> {
    if values.is_empty() {
        return None;
    }
    let half = values.len() / 2;
    Some(*values.select_nth_unstable_by(half, f64::total_cmp).1)
}

fn leave_out_events(row: &mut [f64]) {
    let mut there: Vec<f64> = row.iter().copied().filter(|v| v.is_finite()).collect();
    let Some(middle) = middle(&mut there) else { return };
    for v in row.iter_mut().filter(|v| (**v - middle).abs() > EVENT_FROM * middle) {
        *v = f64::NAN;
    }
}
