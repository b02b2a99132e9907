//! How what is left without the habit carries on: from the last twenty minutes, the last hours, the last day and the
//! last week to each interval to come.

use nalgebra::{Matrix4, Vector4};

use super::history::{mean, middle};
use super::{DAY, LAST_DAY_FROM, fading, kernel};

/// Lengths of the stretches before the moment of issue, intervals.
const SHORT: usize = 2;
const HOURS: usize = 24;
const WEEK: usize = 7 * DAY;

/// What is expected of each before anything is learnt: the last day carries on at 0.85; the last twenty minutes' and
/// the last four hours' distance from it fade with these time constants (intervals); the week pulls back by 0.35.
const DAY_PRIOR: f64 = 0.85;
const SHORT_PRIOR: (f64, f64) = (0.6, 12.0);
const HOURS_PRIOR: (f64, f64) = (0.1, 40.0);
const WEEK_PRIOR: f64 = 0.35;

/// How much the expectation counts, in squares of the usual error: the learnt part must be worth more.
const PRIOR_WEIGHT: f64 = 60.0;

/// A day that stands further off its week than about this, V, has been switched there (a transformer's tap changer)
/// and isn't pulled back.
const SWITCHED: f64 = 1.5;

/// Rows after which a row counts half in learning.
const HALF_LIFE: f64 = 30.0;

/// Width of the kernel over neighbouring intervals to come.
const WIDTH: f64 = 6.0;

/// Errors beyond this many times their usual size are drawn in.
const DRAWN_IN: f64 = 4.0;

/// What was learnt.
#[derive(Debug)]
pub(super) struct Level {
    /// What each interval to come is expected to stand above the habit, V.
    pub(super) ahead: Vec<f64>,
    /// For every earlier row but the first, as if issued before it: what came less what this would have said, V; NaN
    /// where that isn't known.
    pub(super) errors: Vec<Vec<f64>>,
}

impl Level {
    /// `left` is row by row; forecasts `coming` intervals.
    pub(super) fn learn(left: &[f64], coming: usize) -> Self {
        let rows = left.len() / DAY;
        let known: Vec<Option<Vector4<f64>>> = (1..=rows).map(|row| standing(&left[..row * DAY])).collect();
        let prior: Vec<Vector4<f64>> = (0..coming).map(prior).collect();
        let came: Vec<Vec<f64>> = (1..rows)
            .map(|row| (0..coming).map(|k| left.get(row * DAY + k).copied().unwrap_or(f64::NAN)).collect())
            .collect();
        let surprises = surprises(&known, &came, &prior);
        let usual = usual_size(&surprises);
        let slopes = slopes(&known, &surprises, usual, &prior);
        let errors = came
            .iter()
            .zip(&known)
            .map(|(came, known)| {
                let error = |k: usize| known.map_or(f64::NAN, |known| came[k] - slopes[k].dot(&known));
                (0..coming).map(error).collect()
            })
            .collect();
        // The caller has seen to it that the last day is there.
        let now = known.last().copied().flatten().unwrap_or_default();
        Level { ahead: slopes.iter().map(|slope| slope.dot(&now)).collect(), errors }
    }
}

/// Where things stand at the end of `left`: the last day's mean, and how far the last twenty minutes, the last hours
/// and the week lie from that. `None` if too little of the day is there; what else is missing counts as no distance.
fn standing(left: &[f64]) -> Option<Vector4<f64>> {
    let over = |length: usize| {
        let stretch = &left[left.len().saturating_sub(length)..];
        let there = stretch.iter().filter(|v| v.is_finite()).count() as f64;
        if there < LAST_DAY_FROM * stretch.len() as f64 { None } else { mean(stretch) }
    };
    let day = over(DAY)?;
    let from_day = |length| over(length).map_or(0.0, |mean| mean - day);
    let week = from_day(WEEK);
    let week = week * (-0.5 * (week / SWITCHED).powi(2)).exp();
    Some(Vector4::new(day, from_day(SHORT), from_day(HOURS), week))
}

fn prior(lead: usize) -> Vector4<f64> {
    let fade = |(size, constant): (f64, f64)| size * (-(lead as f64) / constant).exp();
    Vector4::new(DAY_PRIOR, fade(SHORT_PRIOR), fade(HOURS_PRIOR), WEEK_PRIOR)
}

/// What came less what the prior expects, smoothed over neighbouring intervals; NaN where too little is there.
fn surprises(known: &[Option<Vector4<f64>>], came: &[Vec<f64>], prior: &[Vector4<f64>]) -> Vec<Vec<f64>> {
    let kernel = kernel(WIDTH);
    let whole: f64 = kernel.iter().map(|(_, share)| share).sum();
    let smooth = |came: &[f64], k: usize| {
        let (mut sum, mut weight) = (0.0, 0.0);
        for (offset, share) in &kernel {
            let near = (k as isize + offset).clamp(0, came.len() as isize - 1) as usize;
            if came[near].is_finite() {
                sum += share * came[near];
                weight += share;
            }
        }
        if weight > 0.3 * whole { sum / weight } else { f64::NAN }
    };
    came.iter()
        .zip(known)
        .map(|(came, known)| {
            let of = |k: usize| known.map_or(f64::NAN, |known| smooth(came, k) - prior[k].dot(&known));
            (0..prior.len()).map(of).collect()
        })
        .collect()
}

fn usual_size(surprises: &[Vec<f64>]) -> f64 {
    let mut sizes: Vec<f64> = surprises.iter().flatten().filter(|s| s.is_finite()).map(|s| s.abs()).collect();
    // 1.4826 times the median size is the standard deviation of a normal distribution.
    1.4826 * middle(&mut sizes).unwrap_or(0.0)
}

/// Ridge regression towards the prior: (XᵀWX + λs²·I)·(β − β₀) = XᵀW·surprise, for each interval to come.
fn slopes(
    known: &[Option<Vector4<f64>>],
    surprises: &[Vec<f64>],
    usual: f64,
    prior: &[Vector4<f64>],
) -> Vec<Vector4<f64>> {
    let rows = surprises.len();
    let weight = |row: usize| fading(rows - 1 - row, HALF_LIFE);
    let with_row = || (0..rows).filter_map(|row| Some((row, known[row]?)));
    let ridge = Matrix4::identity() * (PRIOR_WEIGHT * usual * usual);
    let normal = with_row().fold(ridge, |sum, (row, x)| sum + x * x.transpose() * weight(row));
    // Singular only where nothing ever moved: then there's nothing to learn.
    let Some(inverse) = normal.try_inverse() else { return prior.to_vec() };
    prior
        .iter()
        .enumerate()
        .map(|(k, prior)| {
            let pull = with_row().filter(|(row, _)| surprises[*row][k].is_finite()).fold(
                Vector4::zeros(),
                |sum, (row, x)| {
                    sum + x * (weight(row) * surprises[row][k].clamp(-DRAWN_IN * usual, DRAWN_IN * usual))
                },
            );
            prior + inverse * pull
        })
        .collect()
}
