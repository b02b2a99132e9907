//! Warnings about a circuit that is possible but unlikely, as far as it can be judged without solving it.

use super::full_way::FullWay;
use super::table::Table;
use super::valves::{Rectifier, rectifier};
use crate::supply::{Circuit, Device, Load, RectifierCircuit, SeriesPart};

/// Warns of a source resistance above a tenth of the load, a choke input below its critical current, and a valve
/// rectifier used beyond its sheet.
pub(super) fn warn(circuit: &Circuit, tables: &FullWay<'_>) {
    let (Some(transformer), Some(rectifier_table)) = (tables.transformer, tables.rectifier) else { return };
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
    if let Device::Valve { type_name: Some(name), .. } = &circuit.device
        && let Some(row) = rectifier(name)
    {
        for why in beyond_the_sheet(circuit, row, &idle) {
            rectifier_table.notes().warn(rectifier_table.key("device").span(), why);
        }
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

/// Each of the sheet's limits that the circuit passes, in words.
fn beyond_the_sheet(circuit: &Circuit, row: &Rectifier, idle: &Idle) -> Vec<String> {
    let winding_v = circuit.transformer.secondary_v.value;
    let peak_v = winding_v * 2f64.sqrt();
    let source_ohm = circuit.transformer.source_ohm.value;
    let mut whys = Vec::new();

    let idle_ma = idle.total_a * 1000.0;
    if idle_ma > row.max_ma {
        whys.push(format!("{idle_ma:.0} mA at idle; its sheet allows {} mA", row.max_ma));
    }
    // A bridge shares the inverse peak between two; in the others the capacitor's voltage adds to the winding's.
    let inverse_v = if circuit.rectifier == RectifierCircuit::Bridge { peak_v } else { 2.0 * peak_v };
    if inverse_v > row.inverse_v {
        whys.push(format!(
            "{inverse_v:.0} V of inverse peak without load; its sheet allows {} V",
            row.inverse_v
        ));
    }
    if circuit.filter[0].series != SeriesPart::None {
        return whys;
    }
    let first_f = circuit.filter[0].capacitor.map(|capacitor| capacitor.farad);
    let doubler_f = circuit.doubler_f.map(|pair| pair[0].max(pair[1]));
    let first_uf = first_f.into_iter().chain(doubler_f).fold(0.0, f64::max) * 1e6;
    if first_uf > row.max_uf {
        whys.push(format!("{first_uf:.0} µF as first capacitor; its sheet allows {} µF", row.max_uf));
    }
    if let Some(min_ohm) = row.min_ohm_at(winding_v).filter(|min_ohm| source_ohm < *min_ohm) {
        whys.push(format!(
            "{source_ohm:.0} Ω of source resistance; its sheet asks for {min_ohm:.0} Ω at {winding_v:.0} V"
        ));
    }
    if let (Some(load_ohm), Some(pulses)) = (idle.load_ohm(), pulses_a_period(circuit.rectifier)) {
        let in_path = if circuit.rectifier == RectifierCircuit::Bridge { 2.0 } else { 1.0 };
        let path_ohm = source_ohm + in_path * row.drop_v / (row.at_ma / 1000.0);
        let peak_ma = idle_ma * peak_over_mean(path_ohm / load_ohm, pulses);
        if peak_ma > row.peak_ma {
            whys.push(format!(
                "charging pulses of about {peak_ma:.0} mA at idle; its sheet allows {} mA",
                row.peak_ma
            ));
        }
    }
    whys
}

fn pulses_a_period(circuit: RectifierCircuit) -> Option<f64> {
    match circuit {
        RectifierCircuit::Bridge | RectifierCircuit::FullWave => Some(2.0),
        RectifierCircuit::HalfWave => Some(1.0),
        RectifierCircuit::Doubler => None,
    }
}

/// Peak over mean current of a large capacitor's charging pulses, by the closed form tan θ − θ = π·Rs/(m·R), m pulses
/// a period: (1 − cos θ)/cos θ · R/Rs. `rs_over_r` is above 0.
fn peak_over_mean(rs_over_r: f64, m: f64) -> f64 {
    let wanted = std::f64::consts::PI * rs_over_r / m;
    // tan θ − θ rises from 0 without bound on (0, π/2): halve the interval until nothing is left of it.
    let (mut low, mut high) = (0.0, std::f64::consts::FRAC_PI_2);
    for _ in 0..60 {
        let middle: f64 = (low + high) / 2.0;
        if middle.tan() - middle < wanted { low = middle } else { high = middle }
    }
    let cos = low.cos();
    (1.0 - cos) / cos / rs_over_r
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_pulses_of_a_large_capacitor_are_those_of_the_closed_form() {
        // Handbook section 5, computed (O15): Rs/R 0.05 full wave 4.03, 0.10 3.30, 0.005 8.32.
        for (rs_over_r, peak) in [(0.005, 8.32), (0.05, 4.03), (0.10, 3.30)] {
            assert!((peak_over_mean(rs_over_r, 2.0) - peak).abs() < 0.006, "{rs_over_r}");
        }
    }
}
