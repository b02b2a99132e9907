//! What one period showed: integrals by the method's own weights, so that charge is balanced exactly, and extremes:
//! of the voltages at every stage, of the currents at the ends of the steps.

use super::circuit::RectifierCircuit;
use super::network::Network;
use super::stage::Stage;

/// One node over the period.
#[derive(Clone, Copy, Debug)]
pub(super) struct NodeMeasure {
    pub(super) mean_v: f64,
    pub(super) lowest_v: f64,
    pub(super) highest_v: f64,
    /// Mean current of the series part ahead of it, A.
    pub(super) series_a: f64,
    /// Mean current drawn by its loads, A.
    pub(super) load_a: f64,
    pub(super) load_w: f64,
    /// Loss in the series part without a dropper, in the dropper, and in the capacitor's own resistance, W.
    pub(super) series_w: f64,
    pub(super) line_dropper_w: f64,
    pub(super) esr_w: f64,
}

/// One conducting path over the period.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct PathMeasure {
    pub(super) mean_a: f64,
    pub(super) square_a2: f64,
    pub(super) peak_a: f64,
}

/// Everything over the period (or over the half that repeats).
#[derive(Clone, Debug)]
pub(super) struct Measures {
    pub(super) nodes: Vec<NodeMeasure>,
    pub(super) paths: [PathMeasure; 2],
    /// Of the winding's current where both paths use one winding, A².
    pub(super) winding_square_a2: f64,
    pub(super) winding_peak_a: f64,
    pub(super) inverse_peak_v: f64,
    pub(super) source_w: f64,
    pub(super) diode_w: f64,
    pub(super) return_drop_w: f64,
    /// Mean current through a dropper in the return, A.
    pub(super) return_a: f64,
}

impl Measures {
    pub(super) fn new(net: &Network) -> Measures {
        let node = NodeMeasure {
            mean_v: 0.0,
            lowest_v: f64::INFINITY,
            highest_v: f64::NEG_INFINITY,
            series_a: 0.0,
            load_a: 0.0,
            load_w: 0.0,
            series_w: 0.0,
            line_dropper_w: 0.0,
            esr_w: 0.0,
        };
        Measures {
            nodes: vec![node; net.nodes.len()],
            paths: [PathMeasure::default(); 2],
            winding_square_a2: 0.0,
            winding_peak_a: 0.0,
            inverse_peak_v: 0.0,
            source_w: 0.0,
            diode_w: 0.0,
            return_drop_w: 0.0,
            return_a: 0.0,
        }
    }

    /// Adds a stage that stands for the part `weight` of the span.
    pub(super) fn add(&mut self, net: &Network, stage: &Stage, emf: f64, weight: f64) {
        for (k, sum) in self.nodes.iter_mut().enumerate() {
            let node = &net.nodes[k];
            let (v, i) = (stage.v[k], stage.i[k]);
            sum.mean_v += weight * v;
            sum.series_a += weight * i;
            sum.load_a += weight * stage.drawn[k];
            sum.load_w += weight * v * stage.drawn[k];
            sum.series_w += weight * (node.series_ohm - node.dropper_ohm) * i * i;
            sum.line_dropper_w += weight * node.dropper_ohm * i * i;
            if let Some(shunt) = node.shunt {
                sum.esr_w += weight * shunt.esr_ohm * stage.shunt_i[k].powi(2);
            }
        }
        for (sum, &v) in self.nodes.iter_mut().zip(&stage.v) {
            sum.lowest_v = sum.lowest_v.min(v);
            sum.highest_v = sum.highest_v.max(v);
        }
        let [positive, negative] = stage.paths.i;
        let winding = positive - negative;
        self.source_w += weight * emf * winding;
        self.winding_square_a2 += weight * winding * winding;
        for (path, i) in self.paths.iter_mut().zip([positive, negative]) {
            if i > 0.0 {
                path.mean_a += weight * i;
                path.square_a2 += weight * i * i;
                self.diode_w += weight * net.parts.devices * net.parts.diode.volts(i).0 * i;
            }
        }
        let through = return_current(net, positive, negative);
        if through > 0.0 {
            self.return_a += weight * through;
            self.return_drop_w += weight * net.parts.drop.volts(through).0 * through;
        }
    }

    /// Looks at the extremes of the currents and of the inverse voltage at a step's end.
    /// The step took `seconds` and began with the states `before`.
    pub(super) fn look(
        &mut self,
        net: &Network,
        stage: &Stage,
        y: &[f64],
        emf: f64,
        before: &[f64],
        seconds: f64,
    ) {
        let [positive, negative] = stage.paths.i;
        self.paths[0].peak_a = self.paths[0].peak_a.max(positive);
        self.paths[1].peak_a = self.paths[1].peak_a.max(negative);
        self.winding_peak_a = self.winding_peak_a.max((positive - negative).abs());
        // Over the whole step: where a current has just met its bound a stage's own slope is a fiction.
        let leak_v = net.leak_state.map_or([0.0; 2], |at| {
            let held = |state: usize| net.leakage_h * (y[state] - before[state]) / seconds;
            if net.wiring == RectifierCircuit::FullWave {
                [held(at), held(at + 1)]
            } else {
                [held(at), -held(at)]
            }
        });
        self.inverse_peak_v = self.inverse_peak_v.max(inverse_v(net, stage, y, emf, leak_v));
    }
}

/// Current through a dropper in the return: in a doubler only the lower device's comes back from 0 V.
fn return_current(net: &Network, positive: f64, negative: f64) -> f64 {
    if net.wiring == RectifierCircuit::Doubler { negative } else { positive + negative }
}

/// The greatest inverse voltage across any one device now, V. A dropper doesn't block in reverse; while the winding
/// drives forwards but below the dropper's knee, the dropper takes what the device doesn't. `leak_v` is what the
/// leakage of each path holds.
fn inverse_v(net: &Network, stage: &Stage, y: &[f64], emf: f64, leak_v: [f64; 2]) -> f64 {
    let [positive, negative] = stage.paths.i;
    let across = |i: f64| net.parts.diode.volts(i).0;
    let dropped = net.parts.drop.volts(return_current(net, positive, negative)).0;
    if let Some(pair) = net.pair {
        let [upper, lower] = [y[pair.state], y[pair.state + 1]];
        return match (positive > 0.0, negative > 0.0) {
            (false, false) => (upper - emf).max(lower + emf),
            (true, false) => upper + lower + across(positive),
            (false, true) => upper + lower + across(negative) + dropped,
            (true, true) => 0.0,
        };
    }
    // What the winding's terminals hold in the direction of the path that conducts.
    let terminals = match (positive > 0.0, negative > 0.0) {
        (true, true) => return 0.0,
        (true, false) => emf - net.source_ohm * positive - leak_v[0],
        (false, true) => -emf - net.source_ohm * negative - leak_v[1],
        (false, false) => {
            // With no current a choke holds no voltage, so the rectifier's output stands at its node.
            let output = stage.v[0];
            let forwards = (emf.abs() - output).clamp(0.0, net.parts.drop.knee_v);
            return match net.wiring {
                RectifierCircuit::Bridge => 0.5 * (output + forwards + emf.abs()),
                RectifierCircuit::FullWave => output + forwards + emf.abs(),
                RectifierCircuit::HalfWave | RectifierCircuit::Doubler => output - emf,
            };
        }
    };
    let device_v = across(positive.max(negative));
    match net.wiring {
        RectifierCircuit::Bridge => terminals - device_v,
        RectifierCircuit::FullWave => terminals - device_v + emf.abs(),
        RectifierCircuit::HalfWave | RectifierCircuit::Doubler => 0.0,
    }
}
