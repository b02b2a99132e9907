//! How far a solved rail may be off: the circuit's doubts carried through the solution by finite differences and
//! combined by JCGM 100 5.1.2. Every doubt is the half-width of a range in which any value is as likely as any other.

use super::circuit::{Circuit, Dropper, Load, Loading};
use super::options::{SolveError, SolveOptions};
use super::steady::sweep;
use crate::quantity::{Uncertain, rectangular_u};

/// A sine predicts a capacitor-input rail up to 4 % too high where the mains is flat-topped: third +2 % and fifth
/// −2 % of the fundamental have a crest factor 4.0 % under a sine's (computed), and household crest factors of 1.36 to
/// 1.41 are met (from memory). The range is one-sided: the truth lies under the prediction, never over it. The
/// prediction isn't shifted, since for a rail that must not be too high the sine is the safe side; so what counts is
/// the range's mean square about its end, d²/3, that of a rectangle with d as its half-width.
const FLAT_TOP: [(u32, f64); 2] = [(3, 0.02), (5, -0.02)];

/// A wave that the owner gave still moves over the day: its crest factor by about 1 % (from memory, no survey found).
const RESTLESS_TOP: [(u32, f64); 2] = [(3, 0.005), (5, -0.005)];

/// What a meter in the cathodes, a drift of the bias and the valves' ageing leave open of an idle current, and of that
/// at full output, as fractions (common practice, no source).
const IDLE_DOUBT: f64 = 0.05;
const FULL_DOUBT: f64 = 0.1;

/// Tolerance of a zener's voltage and of a resistor where the circuit says nothing: the usual ±5 % grades.
const PART_DOUBT: f64 = 0.05;

/// A way in which the supply may differ from the circuit.
type Changed = fn(&mut Circuit, Loading);

const WAYS: [Changed; 5] = [other_secondary, other_source, other_wave, other_dropper, other_loads];

/// Expanded uncertainty U (k = 2) of every node's mean at each of `mains_v`, V, with `rails` what the circuit itself
/// gives there.
pub(super) fn expanded(
    circuit: &Circuit,
    loading: Loading,
    mains_v: &[f64],
    rails: &[Vec<f64>],
    options: &SolveOptions,
) -> Result<Vec<Vec<f64>>, SolveError> {
    let nodes = circuit.filter.len();
    let mut by_way: Vec<Vec<Vec<f64>>> = Vec::new();
    for change in WAYS {
        let mut changed = circuit.clone();
        change(&mut changed, loading);
        if changed == *circuit {
            continue;
        }
        let there = sweep(&changed, loading, mains_v, options)?;
        by_way.push(
            (0..nodes)
                .map(|k| there.iter().zip(&rails[k]).map(|(s, rail)| s.nodes[k].mean_v - rail).collect())
                .collect(),
        );
    }
    Ok((0..nodes)
        .map(|k| {
            (0..mains_v.len())
                .map(|i| Uncertain::combine(by_way.iter().map(|moved| rectangular_u(moved[k][i]))))
                .collect()
        })
        .collect())
}

fn other_secondary(circuit: &mut Circuit, _: Loading) {
    let secondary_v = &mut circuit.transformer.secondary_v;
    secondary_v.value += secondary_v.half_width;
}

fn other_source(circuit: &mut Circuit, _: Loading) {
    let source_ohm = &mut circuit.transformer.source_ohm;
    source_ohm.value += source_ohm.half_width;
}

fn other_wave(circuit: &mut Circuit, _: Loading) {
    let more = if circuit.wave.known { RESTLESS_TOP } else { FLAT_TOP };
    let harmonics = &mut circuit.wave.harmonics;
    for (order, part) in more {
        match harmonics.iter_mut().find(|(n, _)| *n == order) {
            Some((_, amplitude)) => *amplitude += part,
            None => harmonics.push((order, part)),
        }
    }
}

fn other_dropper(circuit: &mut Circuit, _: Loading) {
    match &mut circuit.dropper {
        Some(Dropper::ReturnMosfet { zener_v, half_width_v, .. }) => *zener_v += *half_width_v,
        Some(Dropper::ReturnZener { zener_v, .. }) => *zener_v *= 1.0 + PART_DOUBT,
        Some(Dropper::ReturnResistor(ohm) | Dropper::LineResistor(ohm)) => *ohm *= 1.0 + PART_DOUBT,
        None => {}
    }
}

fn other_loads(circuit: &mut Circuit, loading: Loading) {
    for load in &mut circuit.loads {
        match (load, loading) {
            (Load::Bleeder { ohm, .. }, _) => *ohm /= 1.0 + PART_DOUBT,
            (Load::Law { idle_a, .. }, Loading::Idle) => *idle_a *= 1.0 + IDLE_DOUBT,
            (Load::Law { full_a: Some(full_a), .. }, Loading::Full) => *full_a *= 1.0 + FULL_DOUBT,
            (Load::Law { .. }, _) => {}
        }
    }
}
