//! From what a period's walk measured to the figures of the steady state.

use super::circuit::{Dropper, RectifierCircuit};
use super::measures::{Measures, PathMeasure};
use super::options::Warm;
use super::shooting::Periodic;
use super::solver::Solver;
use super::state::{DropperState, NodeState, PowerBalance, SteadyState, Work};

impl Solver<'_> {
    pub(super) fn heater_v(&self, mains_v: f64) -> Option<f64> {
        self.circuit.heater.map(|heater| heater.per_mains_v * mains_v)
    }

    pub(super) fn describe(&self, mains_v: f64, periodic: &Periodic, work: Work, warm: Warm) -> SteadyState {
        let seen = &periodic.walk.measures;
        let nodes = self.circuit.filter.iter().zip(&seen.nodes).map(|(section, node)| NodeState {
            node: section.node.clone(),
            mean_v: node.mean_v,
            ripple_vpp: node.highest_v - node.lowest_v,
            min_v: node.lowest_v,
            max_v: node.highest_v,
            series_a: node.series_a,
            load_a: node.load_a,
            load_w: node.load_w,
        });
        let path = self.harder_path(seen);
        let centre_tapped = self.net.wiring == RectifierCircuit::FullWave;
        let halves = seen.paths[0].square_a2 + seen.paths[1].square_a2;
        let (winding_a2, whole_a2, winding_peak_a) = if centre_tapped {
            let both = if self.half { [halves / 2.0; 2] } else { seen.paths.map(|path| path.square_a2) };
            (both[0].max(both[1]), halves, path.peak_a)
        } else {
            (seen.winding_square_a2, seen.winding_square_a2, seen.winding_peak_a)
        };
        let winding_w = self.net.source_ohm * whole_a2;
        let dropper = self.dropper(seen);
        SteadyState {
            mains_v,
            loading: self.loading,
            nodes: nodes.collect(),
            winding_rms_a: winding_a2.sqrt(),
            winding_peak_a,
            diode_mean_a: path.mean_a,
            diode_rms_a: path.square_a2.sqrt(),
            diode_peak_a: path.peak_a,
            inverse_peak_v: seen.inverse_peak_v,
            winding_loss_w: winding_w,
            dropper,
            heater_v: self.heater_v(mains_v),
            power: PowerBalance {
                source_w: seen.source_w,
                winding_w,
                diodes_w: seen.diode_w,
                dropper_w: dropper.map_or(0.0, |dropper| dropper.loss_w),
                filter_w: seen.nodes.iter().map(|node| node.series_w + node.esr_w).sum(),
                loads_w: seen.nodes.iter().map(|node| node.load_w).sum(),
            },
            crest_factor: self.crest_factor,
            residual: periodic.residual,
            work,
            warm: Some(warm),
        }
    }

    /// The path whose devices work harder. Over half a period that repeats with the halves exchanged, each path's
    /// whole period is the two together.
    fn harder_path(&self, seen: &Measures) -> PathMeasure {
        let [positive, negative] = seen.paths;
        if self.half {
            return PathMeasure {
                mean_a: (positive.mean_a + negative.mean_a) / 2.0,
                square_a2: (positive.square_a2 + negative.square_a2) / 2.0,
                peak_a: positive.peak_a.max(negative.peak_a),
            };
        }
        PathMeasure {
            mean_a: positive.mean_a.max(negative.mean_a),
            square_a2: positive.square_a2.max(negative.square_a2),
            peak_a: positive.peak_a.max(negative.peak_a),
        }
    }

    fn dropper(&self, seen: &Measures) -> Option<DropperState> {
        let (loss_w, through_a, knee_v) = match self.circuit.dropper.as_ref()? {
            Dropper::LineResistor(_) => (seen.nodes[1].line_dropper_w, seen.nodes[1].series_a, 0.0),
            _ => (seen.return_drop_w, seen.return_a, self.net.parts.drop.knee_v),
        };
        let mean_v = if through_a > 0.0 { loss_w / through_a } else { knee_v };
        Some(DropperState { mean_v, loss_w })
    }
}
