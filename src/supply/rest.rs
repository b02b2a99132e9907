//! A supply at rest: with nothing drawing, every capacitor charges to the peak and stays there.

use super::circuit::RectifierCircuit;
use super::solver::Solver;
use super::state::{DropperState, NodeState, PowerBalance, SteadyState, Work};

impl Solver<'_> {
    /// Volts at the first node with no current at all: the peak less the knees of devices and dropper; a doubler's two
    /// halves add up.
    pub(super) fn rest_v(&self, emf_v: f64) -> f64 {
        let [upper, lower] = self.rest_pair(emf_v);
        if self.net.pair.is_some() { upper.max(0.0) + lower.max(0.0) } else { upper }
    }

    /// What each half-wave alone would charge to, V.
    pub(super) fn rest_pair(&self, emf_v: f64) -> [f64; 2] {
        let parts = &self.net.parts;
        let lower = emf_v * self.crest_factor - parts.devices * parts.diode.knee_v() - parts.drop.knee_v;
        // In a doubler the dropper stands in the lower half alone.
        [if self.net.pair.is_some() { lower + parts.drop.knee_v } else { lower }, lower]
    }

    pub(super) fn first_rest_v(&self, emf_v: f64) -> f64 {
        if self.net.pair.is_some() { self.rest_pair(emf_v)[0] } else { self.rest_v(emf_v) }
    }

    /// Nothing draws: every capacitor has charged to the peak and stays there; or the mains is too low for the
    /// rectifier and dropper to conduct at all.
    pub(super) fn at_rest(&self, mains_v: f64, emf_v: f64) -> SteadyState {
        let rest_v = self.rest_v(emf_v).max(0.0);
        let nodes = self.circuit.filter.iter().map(|section| NodeState {
            node: section.node.clone(),
            mean_v: rest_v,
            ripple_vpp: 0.0,
            min_v: rest_v,
            max_v: rest_v,
            series_a: 0.0,
            load_a: 0.0,
            load_w: 0.0,
        });
        let knee_v = self.net.parts.drop.knee_v;
        SteadyState {
            mains_v,
            loading: self.loading,
            nodes: nodes.collect(),
            winding_rms_a: 0.0,
            winding_peak_a: 0.0,
            diode_mean_a: 0.0,
            diode_rms_a: 0.0,
            diode_peak_a: 0.0,
            inverse_peak_v: self.inverse_at_rest(emf_v),
            winding_loss_w: 0.0,
            dropper: self.circuit.dropper.as_ref().map(|_| DropperState { mean_v: knee_v, loss_w: 0.0 }),
            heater_v: self.heater_v(mains_v),
            power: PowerBalance::default(),
            crest_factor: self.crest_factor,
            residual: 0.0,
            work: Work::default(),
            warm: None,
        }
    }

    pub(super) fn inverse_at_rest(&self, emf_v: f64) -> f64 {
        let peak_v = emf_v * self.crest_factor;
        let rest_v = self.rest_v(emf_v).max(0.0);
        // What a dropper below its knee takes while the winding's peak drives forwards.
        let dropped = (peak_v - rest_v).clamp(0.0, self.net.parts.drop.knee_v);
        match self.net.wiring {
            RectifierCircuit::Bridge => 0.5 * (rest_v + dropped + peak_v),
            RectifierCircuit::FullWave => rest_v + dropped + peak_v,
            RectifierCircuit::HalfWave => rest_v + peak_v,
            RectifierCircuit::Doubler => self.rest_pair(emf_v)[0].max(0.0) + peak_v,
        }
    }
}
