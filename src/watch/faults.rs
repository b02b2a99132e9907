//! Faults that a measured rail may give away: the supply solved as it would be with a part of a fitted dropper shorted.

use crate::quantity::Uncertain;
use crate::supply::{Circuit, Dropper, Grid, Loading, Projector, RailCurve, SolveOptions};

/// A fault and the idle rail that it would give.
#[derive(Clone, Debug)]
pub(super) struct Fault {
    curve: RailCurve,
    sentence: &'static str,
}

/// What can happen to the dropper of `circuit`, as `node` would show it at idle. One that can't be solved is left out.
pub(super) fn faults(circuit: &Circuit, node: &str) -> Vec<Fault> {
    let changes: Vec<(Option<Dropper>, &'static str)> = match circuit.dropper {
        Some(Dropper::ReturnMosfet { threshold_v, k_a_per_v2, half_width_v, .. }) => vec![
            (None, "it fits a dropper whose MOSFET has shorted: the whole drop is gone"),
            (
                Some(Dropper::ReturnMosfet { zener_v: 0.0, threshold_v, k_a_per_v2, half_width_v }),
                "it fits a dropper whose zener has shorted: only about V_GS is left",
            ),
        ],
        Some(Dropper::ReturnZener { .. }) => {
            vec![(None, "it fits a dropper whose zener has shorted: the whole drop is gone")]
        }
        _ => Vec::new(),
    };
    changes
        .into_iter()
        .filter_map(|(dropper, sentence)| {
            let changed = Circuit { dropper, ..circuit.clone() };
            let grid = Grid { points: 17, ..Grid::about(circuit.transformer.wound_for_v) };
            let projector = Projector::from_circuit(&changed, grid, &SolveOptions::default()).ok()?;
            Some(Fault { curve: projector.curve(node, Loading::Idle)?.clone(), sentence })
        })
        .collect()
}

/// The fault whose rail the measured one fits best, in words; nothing where none fits within its uncertainty.
pub(super) fn suspect(faults: &[Fault], mains: Uncertain, measured: Uncertain) -> String {
    faults
        .iter()
        .map(|fault| {
            let rail = fault.curve.project(mains);
            ((measured.volts - rail.volts).abs(), Uncertain::combine([measured.u, rail.u]), fault.sentence)
        })
        .filter(|(off, u, _)| off <= u)
        .min_by(|a, b| a.0.total_cmp(&b.0))
        .map_or(String::new(), |(.., sentence)| sentence.to_owned())
}
