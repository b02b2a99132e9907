//! Volts, instants and uncertain figures: the units that everything else is written in.
//!
//! Physics works on plain `f64` in SI base units with the unit in the name (`rail_v`, `source_ohm`). The types here
//! stand where a mix-up would be possible: stored millivolts, the two kinds of time, and a figure with its doubt.

use std::fmt;
use std::ops::{Add, Sub};
use std::time::Duration;

use serde::{Deserialize, Serialize};

/// A voltage as the record keeps it: calibrated millivolts.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Millivolts(pub i32);

impl Millivolts {
    /// The nearest whole millivolt to `volts`, or `None` if it isn't finite or doesn't fit (about ±2.1 MV).
    pub fn from_volts(volts: f64) -> Option<Self> {
        let mv = (volts * 1000.0).round();
        (mv.is_finite() && mv.abs() <= f64::from(i32::MAX)).then_some(Millivolts(mv as i32))
    }

    /// The same in volts.
    pub fn volts(self) -> f64 {
        f64::from(self.0) / 1000.0
    }
}

/// Universal time, in milliseconds since 1970-01-01T00:00:00Z. A label for readings and people; never used to
/// measure a delay, since a host's clock can step.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Utc(pub i64);

/// Monotonic time, in milliseconds since an arbitrary start of this process (or of a simulation). Delays, back-off
/// and silence are measured with it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Mono(pub u64);

/// One look at the clock: both times at once.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Moment {
    /// What delays are measured with.
    pub mono: Mono,
    /// What people read.
    pub utc: Utc,
}

impl Mono {
    /// Time since `earlier`; zero if `earlier` is in fact later.
    pub fn since(self, earlier: Mono) -> Duration {
        Duration::from_millis(self.0.saturating_sub(earlier.0))
    }
}

impl Add<Duration> for Mono {
    type Output = Mono;
    fn add(self, by: Duration) -> Mono {
        Mono(self.0.saturating_add(by.as_millis() as u64))
    }
}

impl Add<Duration> for Utc {
    type Output = Utc;
    fn add(self, by: Duration) -> Utc {
        Utc(self.0.saturating_add(by.as_millis() as i64))
    }
}

impl Sub<Duration> for Utc {
    type Output = Utc;
    fn sub(self, by: Duration) -> Utc {
        Utc(self.0.saturating_sub(by.as_millis() as i64))
    }
}

/// A voltage with its expanded uncertainty U (k = 2, about 95 %), as JCGM 100 6.2 defines it.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Uncertain {
    /// The best estimate, V.
    pub volts: f64,
    /// Expanded uncertainty U = 2·u, V; never negative.
    pub u: f64,
}

impl Uncertain {
    /// A figure of `volts` with expanded uncertainty `u` (k = 2), both V.
    pub fn new(volts: f64, u: f64) -> Self {
        Uncertain { volts, u: u.abs() }
    }

    /// Root sum of squares of expanded uncertainties of uncorrelated inputs (JCGM 100 5.1.2), V.
    pub fn combine(us: impl IntoIterator<Item = f64>) -> f64 {
        us.into_iter().map(|u| u * u).sum::<f64>().sqrt()
    }
}

impl fmt::Display for Uncertain {
    /// `471 V ± 4 V`: a projection never appears without its uncertainty, and never with more digits than that
    /// uncertainty bears.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let digits = if self.u < 1.95 { 1 } else { 0 };
        write!(f, "{:.digits$} V ± {:.digits$} V", self.volts, self.u)
    }
}

/// Expanded uncertainty (k = 2) of a quantity that lies anywhere within ±`half_width` with equal chance: 2·a/√3
/// (JCGM 100 4.3.7).
pub fn rectangular_u(half_width: f64) -> f64 {
    2.0 * half_width.abs() / 3f64.sqrt()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_rectangular_half_width_becomes_a_standard_uncertainty_by_jcgm_100() {
        // JCGM 100 4.3.7: ±0.05 V rectangular gives u = 0.02887 V, so U (k = 2) = 0.05774 V.
        assert!((rectangular_u(0.05) - 0.05774).abs() < 1e-5);
    }

    #[test]
    fn millivolts_refuse_what_they_cannot_hold() {
        assert_eq!(Millivolts::from_volts(229.5004), Some(Millivolts(229_500)));
        assert_eq!(Millivolts::from_volts(f64::NAN), None);
        assert_eq!(Millivolts::from_volts(1e99), None);
    }

    #[test]
    fn a_projection_shows_only_the_digits_its_uncertainty_bears() {
        assert_eq!(Uncertain::new(471.34, 4.2).to_string(), "471 V ± 4 V");
        assert_eq!(Uncertain::new(229.512, 0.41).to_string(), "229.5 V ± 0.4 V");
    }
}
