//! From a circuit to its rail curves: every node under every loading whose currents are known, solved once at a grid
//! of mains voltages.

use std::sync::Arc;

use super::circuit::{Circuit, Load, Loading};
use super::curve::{RailCurve, SolvedCurve};
use super::doubt;
use super::options::{SolveError, SolveOptions};
use super::steady::sweep;
use super::{Basis, NodeCurve, Projector};

/// The mains voltages at which a curve is solved, evenly spaced.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Grid {
    /// First, V r.m.s.
    pub from_v: f64,
    /// Last, V r.m.s.
    pub to_v: f64,
    /// How many, two at least.
    pub points: usize,
}

/// Doubts bend far less than rails do: they are worked out at every so many points and at the last.
const DOUBT_EVERY: usize = 8;

impl Grid {
    /// From 0.6 to 1.4 of `mains_v`, wide enough for any tap and any mains that a supply survives, in steps of 1.25 %.
    pub fn about(mains_v: f64) -> Self {
        Grid { from_v: 0.6 * mains_v, to_v: 1.4 * mains_v, points: 65 }
    }

    fn mains_v(self) -> Vec<f64> {
        let points = self.points.max(2);
        let step = (self.to_v - self.from_v) / (points - 1) as f64;
        (0..points).map(|i| self.from_v + i as f64 * step).collect()
    }
}

impl Circuit {
    /// Whether the currents under `loading` are known: full output needs every load's.
    pub fn knows(&self, loading: Loading) -> bool {
        loading != Loading::Full
            || self.loads.iter().all(|load| !matches!(load, Load::Law { full_a: None, .. }))
    }
}

impl Projector {
    /// Solves `circuit` over `grid`: a curve for every node and every loading whose currents are known, each with the
    /// expanded uncertainty that the circuit's own doubts leave.
    ///
    /// # Errors
    /// As [`super::steady_state`], for the first point that fails.
    pub fn from_circuit(circuit: &Circuit, grid: Grid, options: &SolveOptions) -> Result<Self, SolveError> {
        let mains_v = grid.mains_v();
        let mut curves = Vec::new();
        for loading in Loading::ALL.into_iter().filter(|&loading| circuit.knows(loading)) {
            for (section, curve) in circuit.filter.iter().zip(curves_of(circuit, loading, &mains_v, options)?)
            {
                let curve = RailCurve::Solved(Arc::new(curve));
                curves.push(NodeCurve { node: section.node.clone(), loading, curve });
            }
        }
        Ok(Projector::new(Basis::Model, curves))
    }
}

/// One curve a node.
fn curves_of(
    circuit: &Circuit,
    loading: Loading,
    mains_v: &[f64],
    options: &SolveOptions,
) -> Result<Vec<SolvedCurve>, SolveError> {
    let solved = sweep(circuit, loading, mains_v, options)?;
    let rails: Vec<Vec<f64>> =
        (0..circuit.filter.len()).map(|k| solved.iter().map(|s| s.nodes[k].mean_v).collect()).collect();
    let last = mains_v.len() - 1;
    let mut doubted: Vec<usize> = (0..last).step_by(DOUBT_EVERY).collect();
    doubted.push(last);
    let at_v: Vec<f64> = doubted.iter().map(|&i| mains_v[i]).collect();
    let there: Vec<Vec<f64>> = rails.iter().map(|rail| doubted.iter().map(|&i| rail[i]).collect()).collect();
    let doubts = doubt::expanded(circuit, loading, &at_v, &there, options)?;
    let refuse = || SolveError::Circuit {
        amplifier: circuit.amplifier.clone(),
        what: format!("mains from {} to {} V make no grid", mains_v[0], mains_v[last]),
    };
    rails
        .into_iter()
        .zip(doubts)
        .map(|(rail, u)| SolvedCurve::through(mains_v.to_vec(), rail, at_v.clone(), u).ok_or_else(refuse))
        .collect()
}

#[cfg(test)]
mod tests {
    use super::super::test_circuits::{all, amplifier};
    use super::*;
    use crate::quantity::{Uncertain, rectangular_u};
    use crate::supply::{Device, Dropper, SeriesPart, steady_state};

    fn projector(circuit: &Circuit) -> Projector {
        let grid = Grid::about(circuit.transformer.wound_for_v);
        Projector::from_circuit(circuit, grid, &SolveOptions::default()).expect("curves")
    }

    fn solved(circuit: &Circuit, mains_v: f64, loading: Loading) -> f64 {
        steady_state(circuit, mains_v, loading, &SolveOptions::default()).expect("a steady state").nodes[0]
            .mean_v
    }

    #[test]
    fn between_the_grid_a_curve_misses_the_solution_by_less_than_a_fiftieth_of_a_per_cent() {
        // One circuit in five of all wirings, devices and droppers, at mains that lie on no point of the grid.
        for (name, circuit) in all().into_iter().step_by(5) {
            let projector = projector(&circuit);
            for loading in Loading::ALL {
                let curve = projector.curve("reservoir", loading).expect("a curve");
                for mains_v in [141.3, 184.7, 219.9, 236.3, 251.1, 290.9, 319.5] {
                    let (rail, exact) = (curve.rail_v(mains_v), solved(&circuit, mains_v, loading));
                    assert!(
                        (rail / exact - 1.0).abs() < 2e-4,
                        "{name} {} at {mains_v} V: {rail} and not {exact}",
                        loading.word()
                    );
                }
            }
        }
    }

    #[test]
    fn slope_and_inverse_belong_to_the_curve() {
        let projector = projector(&amplifier());
        let curve = projector.curve("screens", Loading::Idle).expect("a curve");
        for mains_v in [210.0, 230.0, 253.0] {
            let numeric = (curve.rail_v(mains_v + 0.01) - curve.rail_v(mains_v - 0.01)) / 0.02;
            assert!((numeric / curve.slope(mains_v) - 1.0).abs() < 1e-4);
            let back = curve.mains_for(curve.rail_v(mains_v)).expect("within the grid");
            assert!((back - mains_v).abs() < 1e-6, "{back}");
        }
        assert_eq!(curve.mains_for(2_000.0), None);
    }

    #[test]
    fn a_loading_that_is_not_known_is_absent() {
        let mut circuit = amplifier();
        assert_eq!(projector(&circuit).curves().len(), 9);
        if let Load::Law { full_a, .. } = &mut circuit.loads[1] {
            *full_a = None;
        }
        let projector = projector(&circuit);
        assert_eq!(projector.curves().len(), 6);
        assert!(projector.curve("reservoir", Loading::Full).is_none());
    }

    #[test]
    fn doubts_combine_as_roots_of_squares() {
        // By hand (JCGM 100 5.1.2): with nothing drawing, ideal devices and a known wave the rail is the peak, so a
        // secondary of ±2 % is ±2 % of rail, a crest of about ±1 % another; the source's resistance does nothing.
        let mut circuit = amplifier();
        circuit.device = Device::Silicon { forward_v: 0.0, on_ohm: 0.0 };
        circuit.loads.retain(|load| matches!(load, Load::Law { .. }));
        circuit.wave.known = true;
        circuit.transformer.secondary_v.half_width = 7.0;
        circuit.transformer.source_ohm.half_width = 10.0;
        let rail =
            projector(&circuit).project("reservoir", Loading::Unloaded, Uncertain::new(230.0, 0.0)).unwrap();
        let peak_v = 350.0 * 2f64.sqrt();
        let by_hand = Uncertain::combine([rectangular_u(0.02 * peak_v), rectangular_u(0.01 * peak_v)]);
        assert!((rail.volts / peak_v - 1.0).abs() < 1e-9);
        assert!((rail.u / by_hand - 1.0).abs() < 0.01, "{} and by hand {by_hand}", rail.u);
        // Unknown, the wave may be flat-topped: 4 % instead of 1 %.
        circuit.wave.known = false;
        let rail =
            projector(&circuit).project("reservoir", Loading::Unloaded, Uncertain::new(230.0, 0.0)).unwrap();
        let by_hand = Uncertain::combine([rectangular_u(0.02 * peak_v), rectangular_u(0.0404 * peak_v)]);
        assert!((rail.u / by_hand - 1.0).abs() < 0.01, "{} and by hand {by_hand}", rail.u);
    }

    #[test]
    fn each_doubt_counts_where_it_matters() {
        let u = |circuit: &Circuit, loading| {
            projector(circuit).curve("reservoir", loading).unwrap().model_u(235.0)
        };
        let mut circuit = amplifier();
        circuit.wave.known = true;
        let plain = u(&circuit, Loading::Idle);
        circuit.transformer.source_ohm.half_width = 12.0;
        let source = u(&circuit, Loading::Idle);
        assert!(source > plain + 1.0, "{plain} then {source}");
        assert!(u(&circuit, Loading::Full) > source, "the source's doubt grows with the load");
        circuit.transformer.source_ohm.half_width = 0.0;
        circuit.dropper = Some(Dropper::ReturnMosfet {
            zener_v: 36.0,
            threshold_v: 3.0,
            k_a_per_v2: 1.0,
            half_width_v: 3.8,
        });
        // Nearly the dropper's whole doubt reaches the rail: the load gives little of it back.
        let dropper = u(&circuit, Loading::Idle);
        assert!(
            dropper > Uncertain::combine([0.9 * plain, 0.8 * rectangular_u(3.8)]),
            "{plain} then {dropper}"
        );
        // A choke input follows the mean of the wave, which the shape of its top moves far less than its peak.
        let mut choke = amplifier();
        choke.filter[0].series = SeriesPart::Choke { henry: 20.0, ohm: 50.0 };
        let (capacitor, choke) = (u(&amplifier(), Loading::Idle), u(&choke, Loading::Idle));
        assert!(choke < 0.6 * capacitor, "{capacitor} and {choke}");
    }
}
