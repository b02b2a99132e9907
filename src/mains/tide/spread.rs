//! How far off: weighted quantiles of the errors that the same forecast would have made from earlier rows.

use super::history::{History, Wall};
use super::{DAY, fading, kernel};
use crate::mains::percentile::Distribution;

/// Rows after which a row's errors count half.
const HALF_LIFE: f64 = 12.0;

/// What an error on a day of the other kind counts.
const OTHER_KIND: f64 = 0.4;

/// Width of the kernel over neighbouring intervals to come.
const WIDTH: f64 = 6.0;

/// Quantiles are taken at every third interval to come, the line between: their kernel is much wider.
const EVERY: usize = 3;

/// Errors on the rows that a forecast was learnt from come out too small, the more so the fewer rows.
fn widening(rows: usize) -> f64 {
    1.05 + 1.7 / rows as f64
}

/// Offsets of the 5, 50 and 95 % quantiles, V.
#[derive(Debug)]
pub(super) struct Spread {
    offsets: Vec<[f64; 3]>,
}

impl Spread {
    /// `errors` of every row but the first; `wall` of every interval to come.
    pub(super) fn of(history: &History, errors: &[Vec<f64>], wall: &[Wall]) -> Self {
        let kernel = kernel(WIDTH);
        let widening = widening(history.rows());
        let last = wall.len().saturating_sub(1);
        let offsets = (0..last + EVERY)
            .step_by(EVERY)
            .map(|k| {
                let k = k.min(last);
                let near = errors.iter().enumerate().flat_map(|(i, errors)| {
                    let recent = fading(history.age(i + 1), HALF_LIFE);
                    let (wall, history) = (&wall, &history);
                    kernel.iter().map(move |(offset, share)| {
                        let near = (k as isize + offset).clamp(0, last as isize) as usize;
                        // Beyond the record's end the error is missing, whatever the kind.
                        let then = history.wall.get((i + 1) * DAY + near);
                        let kind =
                            if then.is_some_and(|t| t.weekend == wall[k].weekend) { 1.0 } else { OTHER_KIND };
                        (errors[near], recent * share * kind)
                    })
                });
                let errors = Distribution::weighted(near);
                let at = |pct| errors.percentile(pct).unwrap_or(0.0);
                let median = at(50.0);
                [median + widening * (at(5.0) - median), median, median + widening * (at(95.0) - median)]
            })
            .collect();
        Spread { offsets }
    }

    /// The offsets of the `k`-th interval to come.
    pub(super) fn at(&self, k: usize) -> [f64; 3] {
        let (before, part) = (k / EVERY, (k % EVERY) as f64 / EVERY as f64);
        let (from, to) = (self.offsets[before], self.offsets[(before + 1).min(self.offsets.len() - 1)]);
        std::array::from_fn(|q| from[q] + part * (to[q] - from[q]))
    }
}
