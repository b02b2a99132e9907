//! The household's habit: how far each time of day stands above or below its day, working days and weekends apart.

use super::history::{History, Wall};
use super::{DAY, fading, kernel};

/// One of two passes: a slow one that keeps what happens at a fixed minute sharp, then a quick one, broad in time,
/// for how the last days differ from that.
struct Pass {
    /// Rows after which a row weighs half.
    half_life: f64,
    /// Width of the kernel over times of day, intervals.
    width: f64,
    /// What a day of the other kind weighs.
    other_kind: f64,
}

const SLOW: Pass = Pass { half_life: 20.0, width: 0.6, other_kind: 0.4 };
const QUICK: Pass = Pass { half_life: 2.5, width: 3.0, other_kind: 0.3 };

/// The habit, V, and the level that it stands on.
#[derive(Debug)]
pub(super) struct Shape {
    working: [f64; DAY],
    weekend: [f64; DAY],
    /// Weighted mean of the rows' means, V.
    base: f64,
}

impl Shape {
    pub(super) fn of(history: &History) -> Self {
        let mut left = deviations(history);
        let mut shape = Shape { working: [0.0; DAY], weekend: [0.0; DAY], base: base(history) };
        for pass in [SLOW, QUICK] {
            let [working, weekend] = [false, true].map(|weekend| fit(&pass, history, &left, weekend));
            for (i, wall) in history.wall.iter().enumerate() {
                left[i] -= if wall.weekend { weekend[wall.slot] } else { working[wall.slot] };
            }
            for slot in 0..DAY {
                shape.working[slot] += working[slot];
                shape.weekend[slot] += weekend[slot];
            }
        }
        shape
    }

    /// The habit at a time of day, V.
    pub(super) fn at(&self, wall: Wall) -> f64 {
        self.base + if wall.weekend { self.weekend[wall.slot] } else { self.working[wall.slot] }
    }

    /// What is left of the past without the habit, V.
    pub(super) fn without(&self, history: &History) -> Vec<f64> {
        history.volts.iter().zip(&history.wall).map(|(v, wall)| v - self.at(*wall)).collect()
    }
}

fn base(history: &History) -> f64 {
    let (mut sum, mut weights) = (0.0, 0.0);
    for (row, mean) in history.row_mean.iter().enumerate().filter(|(_, mean)| mean.is_finite()) {
        let weight = fading(history.age(row), SLOW.half_life);
        sum += weight * mean;
        weights += weight;
    }
    sum / weights
}

/// Each value less the mean of its row.
fn deviations(history: &History) -> Vec<f64> {
    history.volts.iter().enumerate().map(|(i, v)| v - history.row_mean[i / DAY]).collect()
}

/// Weighted mean by time of day, over rows and over neighbouring times; the day closes on itself.
fn fit(pass: &Pass, history: &History, left: &[f64], weekend: bool) -> [f64; DAY] {
    let (mut sums, mut weights) = ([0.0; DAY], [0.0; DAY]);
    for (i, d) in left.iter().enumerate().filter(|(_, d)| d.is_finite()) {
        let wall = history.wall[i];
        let kind = if wall.weekend == weekend { 1.0 } else { pass.other_kind };
        let weight = kind * fading(history.age(i / DAY), pass.half_life);
        sums[wall.slot] += weight * d;
        weights[wall.slot] += weight;
    }
    let kernel = kernel(pass.width);
    std::array::from_fn(|slot| {
        let (sum, weight) = kernel.iter().fold((0.0, 0.0), |(sum, weight), (offset, share)| {
            let near = (slot as isize + offset).rem_euclid(DAY as isize) as usize;
            (sum + share * sums[near], weight + share * weights[near])
        });
        if weight > 0.0 { sum / weight } else { 0.0 }
    })
}
