//! What the amplifier did at each pair, told from the rail's own behaviour beside what the model makes of the mains.
//!
//! A rail over its projection at idle is a ratio near one that mains doesn't move. Off, it is near nothing; unloaded
//! it stands a known share higher; in loud passages lower. The commonest ratio while the amplifier is on is taken as
//! a level of its own, so that a nameplate that is some per cent wrong does no harm; which of the levels it is, idle or
//! unloaded, is what the priors find more likely.

use super::least_squares::Priors;
use super::surface::Surfaces;
use super::{Pair, PairsSeen};
use crate::supply::circuit::Loading;

/// Below this part of the projected idle rail the amplifier is off.
const OFF_BELOW: f64 = 1.0 / 3.0;

/// After switching on, the idle current drifts for about this long (common practice, no source).
const WARM_UP_MS: i64 = 15 * 60_000;

/// A gap in the record longer than this may hide a switching.
const GAP_MS: i64 = 10 * 60_000;

/// Unloaded must stand at least this share above idle to be told from it.
const LEAST_RISE: f64 = 0.012;

/// What full output takes off the idle rail where the config doesn't say it, as a share.
const USUAL_SAG: f64 = 0.12;

/// What the amplifier did.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Doing {
    /// Nothing: it's switched off.
    Off,
    /// Its rail is on the way up or down, or its valves are still warming up.
    WarmingUp,
    /// It stands in this loading.
    In(Loading),
    /// It plays loudly, somewhere between idle and full.
    Loud,
}

/// Sorts `pairs` (in order of time). With the owner's `word` everything that isn't off or switching is that loading.
pub(super) fn sort(
    pairs: &[Pair],
    surfaces: &Surfaces,
    priors: &Priors,
    word: Option<Loading>,
) -> Vec<Doing> {
    let idle_v = |pair: &Pair| surfaces.rail_v(Loading::Idle, pair.mains_v, 1.0).unwrap_or(f64::NAN);
    let ratios: Vec<f64> = pairs.iter().map(|pair| pair.rail_v / idle_v(pair)).collect();
    let levels = Levels::of(pairs, &ratios, surfaces, priors);
    let mut doing: Vec<Doing> = ratios.iter().map(|ratio| levels.of_ratio(*ratio, word)).collect();
    if word.is_none() {
        keep_steady_unloaded(pairs, &mut doing);
    }
    mark_switching(pairs, &mut doing);
    doing
}

/// How many pairs were of each kind.
pub(super) fn count(doing: &[Doing]) -> PairsSeen {
    let of = |what: Doing| doing.iter().filter(|d| **d == what).count();
    PairsSeen {
        all: doing.len(),
        off: of(Doing::Off),
        warming_up: of(Doing::WarmingUp),
        unloaded: of(Doing::In(Loading::Unloaded)),
        idle: of(Doing::In(Loading::Idle)),
        loaded: of(Doing::In(Loading::Full)) + of(Doing::Loud),
        outliers: 0,
    }
}

/// The ratios to the projected idle rail at which the amplifier stands.
#[derive(Clone, Copy, Debug)]
struct Levels {
    idle: f64,
    /// Unloaded over idle, less one; `None` where that can't be told.
    rise: Option<f64>,
    /// One less full over idle.
    sag: f64,
}

impl Levels {
    fn of(pairs: &[Pair], ratios: &[f64], surfaces: &Surfaces, priors: &Priors) -> Self {
        let mut on: Vec<f64> = ratios.iter().copied().filter(|r| *r > 2.0 * OFF_BELOW).collect();
        on.sort_by(f64::total_cmp);
        let mains: Vec<f64> = pairs.iter().map(|pair| pair.mains_v).collect();
        let mains_v = if mains.is_empty() { 0.0 } else { super::pairs::median(mains) };
        let over_idle = |loading| {
            let idle_v = surfaces.rail_v(Loading::Idle, mains_v, 1.0)?;
            Some(surfaces.rail_v(loading, mains_v, 1.0)? / idle_v - 1.0)
        };
        let rise = over_idle(Loading::Unloaded).filter(|rise| *rise > LEAST_RISE);
        let sag = over_idle(Loading::Full).map_or(USUAL_SAG, |full| (-full).max(0.02));
        let Some(common) = half_sample_mode(&on) else { return Levels { idle: 1.0, rise, sag } };
        let idle = match rise {
            // Unloaded only where that is more likely by the priors, and nothing stands higher still.
            Some(rise) if priors.unlikely(common) > priors.unlikely(common / (1.0 + rise)) => {
                let higher =
                    on.iter().filter(|r| (*r / common / (1.0 + rise) - 1.0).abs() < rise / 4.0).count();
                if higher * 50 > on.len() { common } else { common / (1.0 + rise) }
            }
            _ => common,
        };
        Levels { idle, rise, sag }
    }

    fn of_ratio(&self, ratio: f64, word: Option<Loading>) -> Doing {
        if ratio.is_nan() || ratio < OFF_BELOW {
            return Doing::Off;
        }
        let level = ratio / self.idle;
        let lowest = 1.0 - 1.5 * self.sag;
        if let Some(word) = word {
            return if level < lowest - 0.1 { Doing::WarmingUp } else { Doing::In(word) };
        }
        match self.rise {
            Some(rise) if level > 1.0 + 1.5 * rise.max(0.04) => Doing::WarmingUp,
            Some(rise) if level > 1.0 + rise / 2.0 => Doing::In(Loading::Unloaded),
            _ if level >= 1.0 - self.sag / 2.0 => Doing::In(Loading::Idle),
            _ if level >= lowest => Doing::Loud,
            _ => Doing::WarmingUp,
        }
    }
}

/// The pairs beside a switching and those at idle soon after switching on are neither one thing nor the other.
fn mark_switching(pairs: &[Pair], doing: &mut [Doing]) {
    let before = doing.to_vec();
    let rests = |d: Doing| matches!(d, Doing::Off | Doing::WarmingUp);
    let joined = |i: usize| pairs[i].at_ms - pairs[i - 1].at_ms <= GAP_MS;
    let mut on_since: Option<i64> = None;
    for i in 0..pairs.len() {
        if rests(before[i]) {
            on_since = None;
            continue;
        }
        let after_rest = i > 0 && joined(i) && rests(before[i - 1]);
        // The valves warm up, or warm up again, from standby too.
        let cold = Doing::In(Loading::Unloaded);
        let after_standby = i > 0 && joined(i) && before[i - 1] == cold && before[i] != cold;
        let before_rest = i + 1 < pairs.len() && joined(i + 1) && rests(before[i + 1]);
        if after_rest || after_standby {
            on_since = Some(pairs[i].at_ms);
        } else if i > 0 && !joined(i) {
            on_since = None;
        }
        let drifting = before[i] != Doing::In(Loading::Unloaded)
            && on_since.is_some_and(|since| pairs[i].at_ms - since < WARM_UP_MS);
        if after_rest || after_standby || before_rest || drifting {
            doing[i] = Doing::WarmingUp;
        }
    }
}

/// Unloaded counts only in standby, where it lasts: with unloaded pairs on both sides.
fn keep_steady_unloaded(pairs: &[Pair], doing: &mut [Doing]) {
    let before = doing.to_vec();
    let unloaded = Doing::In(Loading::Unloaded);
    let steady = |i: usize, beside: Option<usize>| {
        beside.is_some_and(|b| {
            before.get(b) == Some(&unloaded) && pairs[i].at_ms.abs_diff(pairs[b].at_ms) <= GAP_MS as u64
        })
    };
    for i in 0..doing.len() {
        if before[i] == unloaded && !(steady(i, i.checked_sub(1)) && steady(i, Some(i + 1))) {
            doing[i] = Doing::WarmingUp;
        }
    }
}

/// The mode of sorted values by repeated halving: the half of the points that lies closest together, and so on
/// (D. R. Bickel and R. Frühwirth, "On a fast, robust estimator of the mode", Computational Statistics & Data Analysis
/// 50, 2006).
fn half_sample_mode(sorted: &[f64]) -> Option<f64> {
    let mut rest = sorted;
    while rest.len() > 3 {
        let half = rest.len().div_ceil(2);
        let closest = (0..=rest.len() - half)
            .min_by(|&a, &b| (rest[a + half - 1] - rest[a]).total_cmp(&(rest[b + half - 1] - rest[b])))?;
        rest = &rest[closest..closest + half];
    }
    (!rest.is_empty()).then(|| rest.iter().sum::<f64>() / rest.len() as f64)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_mode_is_where_the_points_crowd() {
        let mut values: Vec<f64> = (0..40).map(|i| 0.999 + 0.00005 * f64::from(i)).collect();
        values.extend([0.90, 0.92, 0.95, 1.08, 1.081, 1.0815, 1.09]);
        values.sort_by(f64::total_cmp);
        assert!((half_sample_mode(&values).unwrap() - 1.0).abs() < 0.002);
        assert_eq!(half_sample_mode(&[]), None);
    }
}
