//! The rail curve: mains volts to rail volts for one node and loading, with its uncertainty.

use std::sync::Arc;

use super::monotone::MonotoneCubic;
use crate::quantity::{Uncertain, rectangular_u};

/// One reading of a rail against mains: the short way of stating a supply.
#[derive(Clone, Debug, PartialEq)]
pub struct Measured {
    /// Mains while the meter was read, V r.m.s.
    pub mains_v: f64,
    /// The rail it showed, V.
    pub rail_v: f64,
    /// Accuracy of the meter, ±% of reading, for both figures.
    pub meter_pct: f64,
}

/// A supply's rail need not follow its mains in exact proportion: a load of constant current makes it steeper, one
/// that grows with a power of the rail (fixed bias, law 1.5) flatter. For a regulation of up to 15 % the relative
/// slope lies within 1 ± 0.15 (from Vdc = k·Vmains − R·I; computed, no published source).
const SLOPE_HALF_WIDTH: f64 = 0.15;

/// The crest factor of a household's mains moves over a day within about ±1 % of its middle, and a capacitor-input
/// rail follows the crest (from memory: 1.36 to 1.41, no survey found; the half-width here is for the difference
/// between the hour of measuring and now).
const CREST_HALF_WIDTH: f64 = 0.01;

/// Mains volts → rail volts for one node and one loading.
#[derive(Clone, Debug, PartialEq)]
pub enum RailCurve {
    /// In proportion to mains through one measured pair.
    Proportional(Measured),
    /// Through solutions of the supply's circuit.
    Solved(Arc<SolvedCurve>),
}

/// A rail solved at a grid of mains voltages, with its expanded uncertainty at each.
#[derive(Clone, Debug, PartialEq)]
pub struct SolvedCurve {
    rail: MonotoneCubic,
    model_u: MonotoneCubic,
}

impl SolvedCurve {
    /// A curve through `rail_v` with expanded uncertainty `u_v` (k = 2) at `mains_v`, all V. `None` where these are
    /// fewer than two, `mains_v` doesn't rise, or a figure isn't finite.
    pub fn new(mains_v: Vec<f64>, rail_v: Vec<f64>, u_v: Vec<f64>) -> Option<Self> {
        SolvedCurve::through(mains_v.clone(), rail_v, mains_v, u_v)
    }

    /// As [`SolvedCurve::new`], with the uncertainty at mains of its own.
    pub(super) fn through(
        mains_v: Vec<f64>,
        rail_v: Vec<f64>,
        u_mains_v: Vec<f64>,
        u_v: Vec<f64>,
    ) -> Option<Self> {
        let model_u = MonotoneCubic::new(u_mains_v, u_v)?;
        Some(SolvedCurve { rail: MonotoneCubic::new(mains_v, rail_v)?, model_u })
    }

    /// The mains between which it was solved, V; beyond them it goes on along its end's tangent.
    pub fn span_v(&self) -> (f64, f64) {
        self.rail.span()
    }
}

impl RailCurve {
    /// The rail that `mains_v` gives, V, without its uncertainty.
    pub fn rail_v(&self, mains_v: f64) -> f64 {
        match self {
            RailCurve::Proportional(pair) => pair.rail_v * mains_v / pair.mains_v,
            RailCurve::Solved(curve) => curve.rail.at(mains_v).max(0.0),
        }
    }

    /// dRail/dMains at `mains_v`.
    pub fn slope(&self, mains_v: f64) -> f64 {
        match self {
            RailCurve::Proportional(pair) => pair.rail_v / pair.mains_v,
            RailCurve::Solved(curve) => curve.rail.slope_at(mains_v),
        }
    }

    /// Expanded uncertainty (k = 2) of the curve itself at `mains_v`, V: what it would be with mains known exactly.
    pub fn model_u(&self, mains_v: f64) -> f64 {
        match self {
            RailCurve::Proportional(pair) => {
                let rail_v = self.rail_v(mains_v);
                let distance = (mains_v - pair.mains_v).abs() / pair.mains_v;
                let meter = rectangular_u(rail_v * pair.meter_pct / 100.0);
                Uncertain::combine([
                    meter,
                    meter, // the same meter's doubt about the mains, in proportion
                    rectangular_u(rail_v * CREST_HALF_WIDTH),
                    rectangular_u(rail_v * SLOPE_HALF_WIDTH * distance),
                ])
            }
            RailCurve::Solved(curve) => curve.model_u.at(mains_v).max(0.0),
        }
    }

    /// The rail that an uncertain mains gives, by JCGM 100 5.1.2: the mains' doubt through the slope, and the
    /// curve's own.
    pub fn project(&self, mains: Uncertain) -> Uncertain {
        let through = self.slope(mains.volts) * mains.u;
        Uncertain::new(self.rail_v(mains.volts), Uncertain::combine([through, self.model_u(mains.volts)]))
    }

    /// The mains at which the rail stands at `rail_v`, V; `None` where no mains within a factor of two of the measured
    /// pair's does it, or none between which the supply was solved.
    pub fn mains_for(&self, rail_v: f64) -> Option<f64> {
        match self {
            RailCurve::Proportional(pair) => {
                let mains_v = rail_v * pair.mains_v / pair.rail_v;
                (mains_v > pair.mains_v / 2.0 && mains_v < pair.mains_v * 2.0).then_some(mains_v)
            }
            RailCurve::Solved(curve) => curve.rail.backwards(rail_v),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn five_hundred_at_220() -> RailCurve {
        RailCurve::Proportional(Measured { mains_v: 220.0, rail_v: 500.0, meter_pct: 1.0 })
    }

    #[test]
    fn a_500_v_rail_at_220_v_stands_at_about_545_v_at_240_v() {
        // Common practice, no source: 500 V at 220 V is about 545 V at 240 V.
        let rail = five_hundred_at_220().project(Uncertain::new(240.0, 0.0));
        assert!((rail.volts - 545.0).abs() < 0.6, "{rail}");
    }

    #[test]
    fn doubt_grows_with_the_distance_from_the_measured_pair_and_with_the_mains_own_doubt() {
        let curve = five_hundred_at_220();
        let near = curve.project(Uncertain::new(220.0, 0.5)).u;
        let far = curve.project(Uncertain::new(240.0, 0.5)).u;
        let vague = curve.project(Uncertain::new(240.0, 5.0)).u;
        assert!(near < far && far < vague, "{near} {far} {vague}");
        // By hand at 220 V exactly: two meters' ±1 % and the crest's ±1 %, each rectangular: √3·(2/√3)·5 V = 10 V.
        assert!((curve.model_u(220.0) - 10.0).abs() < 1e-9);
    }

    #[test]
    fn the_mains_for_a_rail_is_the_curve_read_backwards() {
        let curve = five_hundred_at_220();
        let mains_v = curve.mains_for(520.0).unwrap();
        assert!((curve.rail_v(mains_v) - 520.0).abs() < 1e-9);
        assert_eq!(curve.mains_for(5_000.0), None);
    }
}
