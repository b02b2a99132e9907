//! Warnings about a circuit that is possible but unlikely, as far as it can be judged without solving it.

use super::full_way::FullWay;
use super::table::Table;
use crate::supply::{Circuit, Load, RectifierCircuit, SeriesPart};

/// Warns of a source resistance above a tenth of the load and of a choke input below its critical current. What a
/// valve rectifier's sheet says is held against the solved supply, among its findings.
pub(super) fn warn(circuit: &Circuit, tables: &FullWay<'_>) {
    let Some(transformer) = tables.transformer else { return };
    let idle = Idle::of(circuit);
    if let Some(load_ohm) = idle.load_ohm() {
        let source_ohm = circuit.transformer.source_ohm.value;
        if source_ohm > load_ohm / 10.0 {
            transformer.notes().warn(
                transformer.header(),
                format!(
                    "a source resistance of {source_ohm:.0} Ω is more than a tenth of the load ({load_ohm:.0} Ω at \
                     idle); is it that of one path, in ohms?"
                ),
            );
        }
        warn_of_choke(circuit, tables.filter.first().copied(), load_ohm);
    }
}

/// What the loads draw at rest.
struct Idle {
    total_a: f64,
    /// The rail of the greatest load, V.
    at_v: f64,
}

impl Idle {
    fn of(circuit: &Circuit) -> Self {
        let laws = || {
            circuit.loads.iter().filter_map(|load| match load {
                Load::Law { idle_a, at_v, .. } => Some((*idle_a, *at_v)),
                Load::Bleeder { .. } => None,
            })
        };
        let at_v = laws().max_by(|a, b| a.0.total_cmp(&b.0)).map_or(0.0, |(_, at_v)| at_v);
        let bleeders = circuit.loads.iter().filter_map(|load| match load {
            Load::Bleeder { ohm, .. } => Some(at_v / ohm),
            Load::Law { .. } => None,
        });
        Idle { total_a: laws().map(|(idle_a, _)| idle_a).sum::<f64>() + bleeders.sum::<f64>(), at_v }
    }

    fn load_ohm(&self) -> Option<f64> {
        (self.total_a > 0.0 && self.at_v > 0.0).then(|| self.at_v / self.total_a)
    }
}

/// Critical inductance of a full-wave choke input, L = R/(3ω).
fn warn_of_choke(circuit: &Circuit, first: Option<Table<'_>>, load_ohm: f64) {
    let full_wave = matches!(circuit.rectifier, RectifierCircuit::Bridge | RectifierCircuit::FullWave);
    let (SeriesPart::Choke { henry, .. }, Some(table), true) = (circuit.filter[0].series, first, full_wave)
    else {
        return;
    };
    let critical_h = load_ohm / (3.0 * std::f64::consts::TAU * circuit.frequency_hz);
    if henry < critical_h {
        table.notes().warn(
            table.key("choke_h").span(),
            format!(
                "too little current for a choke input: at {load_ohm:.0} Ω it needs {critical_h:.1} H, or the rail \
                 rises towards the peak"
            ),
        );
    }
}
