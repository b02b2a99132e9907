//! Findings: what is to be said of a supply as it stands, whatever the mains does. Each is a typed figure; `report`
//! puts it into words.

use std::f64::consts::TAU;

use serde::Serialize;

use super::circuit::{Circuit, Loading, RectifierCircuit, SeriesPart};
use super::discharge::{Discharge, discharge, drains};
use super::state::SteadyState;

/// A core that is driven this much over what it was wound for runs hot and hums (rule of this tool; no published
/// source). No dropper in the rail helps it: a tap or a bucking winding does.
pub const CORE_LIMIT: f64 = 1.06;

/// One finding. [`Finding::is_wrong`] tells a fault from a figure that is only good to know.
#[derive(Clone, Debug, PartialEq, Serialize)]
#[serde(tag = "finding", rename_all = "kebab-case")]
pub enum Finding {
    /// How long a capacitor stays charged after switching off.
    Discharge {
        /// Its node.
        node: String,
        /// Its capacitance, F.
        capacitance_f: f64,
        /// Voltage at switching off, V.
        from_v: f64,
        /// What it holds then, J.
        energy_j: f64,
        /// Until it stands below 60 V, s; none: it stays charged for hours or days.
        seconds: Option<f64>,
        /// Whether that is with a standby switch open, which takes it away from other resistors.
        in_standby: bool,
    },
    /// What a bleeder (or a string's balance resistors together) has to bear.
    Bleeder {
        /// Its node.
        node: String,
        /// Its resistance, Ω.
        resistance_ohm: f64,
        /// Across it without load at the declared voltage, V.
        across_v: f64,
        /// What it turns into heat then, W.
        heat_w: f64,
    },
    /// A valve rectifier's first capacitor against its sheet.
    FirstCapacitor {
        /// Type of the rectifier.
        rectifier: String,
        /// The capacitor, F.
        capacitance_f: f64,
        /// Largest that the sheet allows, F.
        most_f: f64,
    },
    /// A valve rectifier's source resistance against its sheet.
    SourceResistance {
        /// Type of the rectifier.
        rectifier: String,
        /// In one path, Ω.
        source_ohm: f64,
        /// Least that the sheet asks for at that winding voltage, Ω.
        least_ohm: f64,
        /// Winding, V r.m.s. in one path.
        winding_v: f64,
    },
    /// A valve rectifier's direct current against its sheet.
    RectifierCurrent {
        /// Type of the rectifier.
        rectifier: String,
        /// Loading at which it flows.
        loading: Loading,
        /// Of the supply, A.
        mean_a: f64,
        /// Most that the sheet allows, A.
        most_a: f64,
    },
    /// A valve rectifier's charging pulses against its sheet.
    RectifierPeak {
        /// Type of the rectifier.
        rectifier: String,
        /// Loading at which they flow.
        loading: Loading,
        /// Peak of one anode, A.
        peak_a: f64,
        /// Most that the sheet allows, A.
        most_a: f64,
    },
    /// A valve rectifier's inverse voltage against its sheet.
    RectifierInverse {
        /// Type of the rectifier.
        rectifier: String,
        /// Across one device without load, V.
        inverse_v: f64,
        /// Most that the sheet allows, V.
        most_v: f64,
    },
    /// A choke input's rail without load.
    ChokeInput {
        /// The first node.
        node: String,
        /// The rail while the choke conducts throughout: the mean of the rectified wave, V.
        mean_v: f64,
        /// What it rises to with no current at all, π/2 times that for a sine, V.
        peak_v: f64,
        /// What bleeders draw, A.
        bleeder_a: f64,
        /// The least that keeps it from rising, A.
        critical_a: f64,
    },
    /// A capacitor against the unloaded rail at the declared voltage.
    Unloaded {
        /// Its node.
        node: String,
        /// The unloaded rail, V.
        rail_v: f64,
        /// Its expanded uncertainty (k = 2), V.
        u_v: f64,
        /// What the capacitor bears, V.
        most_v: f64,
        /// Whether that is its surge voltage (a brief warm-up) and not its working voltage.
        surge: bool,
    },
    /// A limit that is passed at the declared voltage already. A design-centre figure is compared with the rail there
    /// and nowhere else: it allows for what mains does about it.
    Limit {
        /// The node.
        node: String,
        /// Loading at which the limit holds.
        loading: Loading,
        /// The rail, V.
        rail_v: f64,
        /// Its expanded uncertainty (k = 2), V.
        u_v: f64,
        /// The limit, V.
        most_v: f64,
    },
    /// A capacitor's working voltage against the idle rail at the declared voltage.
    Idle {
        /// Its node.
        node: String,
        /// Highest moment of the idle rail, half the ripple included, V.
        rail_v: f64,
        /// What the capacitor is rated for, V.
        most_v: f64,
    },
    /// The output valves' anode dissipation at idle at the declared voltage.
    Dissipation {
        /// Type of the valves.
        valve: String,
        /// Of one, W.
        heat_w: f64,
        /// Most that the sheet allows, W.
        most_w: f64,
    },
    /// The heaters at the declared voltage.
    Heater {
        /// V.
        heater_v: f64,
        /// What they want, V.
        nominal_v: f64,
        /// Allowed either way, %.
        tolerance_pct: f64,
    },
    /// The core at the declared voltage.
    Core {
        /// Volts per hertz over what it was wound for.
        ratio: f64,
        /// [`CORE_LIMIT`].
        most: f64,
    },
    /// A loading at which the circuit has no answer.
    Unsolved {
        /// Loading.
        loading: Loading,
        /// The solver's sentence.
        why: String,
    },
}

impl Finding {
    /// Whether it's a fault, not only a figure that is good to know.
    pub fn is_wrong(&self) -> bool {
        match self {
            Finding::Discharge { seconds, .. } => seconds.is_none(),
            Finding::Bleeder { .. } => false,
            Finding::FirstCapacitor { capacitance_f, most_f, .. } => capacitance_f > most_f,
            Finding::SourceResistance { source_ohm, least_ohm, .. } => source_ohm < least_ohm,
            Finding::RectifierCurrent { mean_a, most_a, .. } => mean_a > most_a,
            Finding::RectifierPeak { peak_a, most_a, .. } => peak_a > most_a,
            Finding::RectifierInverse { inverse_v, most_v, .. } => inverse_v > most_v,
            Finding::ChokeInput { bleeder_a, critical_a, .. } => bleeder_a < critical_a,
            Finding::Unloaded { rail_v, most_v, .. }
            | Finding::Idle { rail_v, most_v, .. }
            | Finding::Limit { rail_v, most_v, .. } => rail_v > most_v,
            Finding::Dissipation { heat_w, most_w, .. } => heat_w > most_w,
            Finding::Heater { heater_v, nominal_v, tolerance_pct } => {
                (heater_v / nominal_v - 1.0).abs() > tolerance_pct / 100.0
            }
            Finding::Core { ratio, most } => ratio > most,
            Finding::Unsolved { .. } => true,
        }
    }
}

/// What a rectifier's sheet allows, as far as it's known.
#[derive(Clone, Debug, PartialEq)]
pub struct RectifierSheet {
    /// Type designation.
    pub type_name: String,
    /// Direct current of the supply with a first capacitor, A.
    pub most_a: f64,
    /// Repetitive peak of one anode, A.
    pub peak_a: f64,
    /// Peak inverse voltage of one anode, V.
    pub inverse_v: f64,
    /// Largest first capacitor, F.
    pub most_f: f64,
    /// Least source resistance in one path at the winding's voltage, Ω.
    pub least_ohm: Option<f64>,
}

/// What can be said of `circuit` at the declared mains voltage without its solution. `unloaded_v` is each node's
/// unloaded rail there where that is known; `standby_after` the node after which a standby switch interrupts.
pub fn circuit_findings(
    circuit: &Circuit,
    declared_v: f64,
    unloaded_v: Option<&[f64]>,
    standby_after: Option<usize>,
) -> Vec<Finding> {
    let peak_v = vec![unloaded_peak_v(circuit, declared_v); circuit.filter.len()];
    let from_v = unloaded_v.unwrap_or(&peak_v);
    let mut findings = discharge_findings(circuit, from_v, standby_after);
    for (node, section) in circuit.filter.iter().enumerate() {
        findings.extend(drains(circuit, node).into_iter().map(|resistance_ohm| Finding::Bleeder {
            node: section.node.clone(),
            resistance_ohm,
            across_v: from_v[node],
            heat_w: from_v[node] * from_v[node] / resistance_ohm,
        }));
    }
    findings.extend(choke_finding(circuit, declared_v));
    findings.extend(circuit.heater.map(|heater| Finding::Heater {
        heater_v: heater.per_mains_v * declared_v,
        nominal_v: heater.nominal_v,
        tolerance_pct: heater.tolerance_pct,
    }));
    findings.push(Finding::Core { ratio: core_ratio(circuit, declared_v), most: CORE_LIMIT });
    findings
}

/// Mains over what the core was wound for, times wound-for hertz over the site's.
pub fn core_ratio(circuit: &Circuit, mains_v: f64) -> f64 {
    let transformer = &circuit.transformer;
    mains_v / transformer.wound_for_v * transformer.wound_for_hz / circuit.frequency_hz
}

/// A valve rectifier against its sheet. `states` are the supply's steady states at the declared voltage, as far as
/// they are known: what needs none is judged anyway.
pub fn rectifier_findings(
    circuit: &Circuit,
    sheet: &RectifierSheet,
    declared_v: f64,
    states: &[SteadyState],
) -> Vec<Finding> {
    let rectifier = || sheet.type_name.clone();
    let mut findings = Vec::new();
    if circuit.filter[0].series == SeriesPart::None {
        let first_f = circuit.filter[0].capacitor.map(|c| c.farad);
        let doubler_f = circuit.doubler_f.map(|pair| pair[0].max(pair[1]));
        let capacitance_f = first_f.into_iter().chain(doubler_f).fold(0.0, f64::max);
        findings.push(Finding::FirstCapacitor {
            rectifier: rectifier(),
            capacitance_f,
            most_f: sheet.most_f,
        });
        findings.extend(sheet.least_ohm.map(|least_ohm| Finding::SourceResistance {
            rectifier: rectifier(),
            source_ohm: circuit.transformer.source_ohm.value,
            least_ohm,
            winding_v: circuit.transformer.secondary_v.value * declared_v / circuit.transformer.wound_for_v,
        }));
    }
    let devices = match circuit.rectifier {
        RectifierCircuit::Bridge | RectifierCircuit::FullWave => 2.0,
        // A doubler's devices carry the same direct current one after the other.
        RectifierCircuit::HalfWave | RectifierCircuit::Doubler => 1.0,
    };
    for state in states {
        if state.loading == Loading::Unloaded {
            let inverse_v = state.inverse_peak_v;
            findings.push(Finding::RectifierInverse {
                rectifier: rectifier(),
                inverse_v,
                most_v: sheet.inverse_v,
            });
            continue;
        }
        findings.push(Finding::RectifierCurrent {
            rectifier: rectifier(),
            loading: state.loading,
            mean_a: state.diode_mean_a * devices,
            most_a: sheet.most_a,
        });
        findings.push(Finding::RectifierPeak {
            rectifier: rectifier(),
            loading: state.loading,
            peak_a: state.diode_peak_a,
            most_a: sheet.peak_a,
        });
    }
    findings
}

fn discharge_findings(circuit: &Circuit, from_v: &[f64], standby_after: Option<usize>) -> Vec<Finding> {
    let finding = |found: Discharge, in_standby| Finding::Discharge {
        node: found.node,
        capacitance_f: found.farad,
        from_v: found.from_v,
        energy_j: found.energy_j,
        seconds: found.seconds,
        in_standby,
    };
    let joined = discharge(circuit, from_v, None);
    let Some(after) = standby_after else {
        return joined.into_iter().map(|found| finding(found, false)).collect();
    };
    // The slower of both counts: nobody asks in which position the switch was left.
    let slower = |a: Option<f64>, b: Option<f64>| b.is_none() || a.is_some_and(|a| b.is_some_and(|b| b > a));
    let open = discharge(circuit, from_v, Some(after));
    joined
        .into_iter()
        .zip(open)
        .map(|(joined, open)| {
            if slower(joined.seconds, open.seconds) && joined.seconds != open.seconds {
                finding(open, true)
            } else {
                finding(joined, false)
            }
        })
        .collect()
}

/// The highest that a node without any load can stand at, V.
fn unloaded_peak_v(circuit: &Circuit, mains_v: f64) -> f64 {
    let emf_v = circuit.transformer.secondary_v.value * mains_v / circuit.transformer.wound_for_v;
    let peak_v = emf_v * circuit.wave.crest_factor();
    if circuit.rectifier == RectifierCircuit::Doubler { 2.0 * peak_v } else { peak_v }
}

/// A full-wave choke input by its critical current: below I = V/(3ωL) (the rule R = 3ωL; handbook of choke-input
/// filters) the rail leaves the mean of the rectified wave, 2√2/π of its r.m.s., and rises towards its peak.
fn choke_finding(circuit: &Circuit, mains_v: f64) -> Option<Finding> {
    let full_wave = matches!(circuit.rectifier, RectifierCircuit::Bridge | RectifierCircuit::FullWave);
    let SeriesPart::Choke { henry, .. } = circuit.filter[0].series else { return None };
    if !full_wave {
        return None;
    }
    let emf_v = circuit.transformer.secondary_v.value * mains_v / circuit.transformer.wound_for_v;
    let mean_v = emf_v * 2.0 * 2f64.sqrt() / std::f64::consts::PI;
    let siemens: f64 =
        (0..circuit.filter.len()).flat_map(|node| drains(circuit, node)).map(|ohm| 1.0 / ohm).sum();
    Some(Finding::ChokeInput {
        node: circuit.filter[0].node.clone(),
        mean_v,
        peak_v: unloaded_peak_v(circuit, mains_v),
        bleeder_a: mean_v * siemens,
        critical_a: mean_v / (3.0 * TAU * circuit.frequency_hz * henry),
    })
}

#[cfg(test)]
pub(super) mod tests {
    use super::super::circuit::{
        Capacitor, Device, Doubtful, Heater, Load, MainsWave, Section, Transformer, Winding,
    };
    use super::*;

    pub(in super::super) fn section(node: &str, series: SeriesPart, farad: f64) -> Section {
        let capacitor =
            Capacitor { farad, rated_v: Some(550.0), esr_ohm: 0.0, in_series: 1, balance_ohm: None };
        Section { node: node.to_owned(), series, capacitor: Some(capacitor) }
    }

    /// 350 V behind a silicon bridge, 38 Ω, 100 µF, 160 mA at 450 V, a bleeder of 220 kΩ.
    pub(in super::super) fn plain() -> Circuit {
        Circuit {
            amplifier: "hall".into(),
            frequency_hz: 50.0,
            wave: MainsWave::default(),
            transformer: Transformer {
                wound_for_v: 220.0,
                wound_for_hz: 50.0,
                taps_v: vec![220.0],
                secondary_v: Doubtful { value: 350.0, half_width: 7.0 },
                winding: Winding::Single,
                source_ohm: Doubtful { value: 38.0, half_width: 3.8 },
                leakage_h: 0.0,
            },
            rectifier: RectifierCircuit::Bridge,
            device: Device::Silicon { forward_v: 0.85, on_ohm: 0.05 },
            doubler_f: None,
            filter: vec![section("reservoir", SeriesPart::None, 100e-6)],
            loads: vec![
                Load::Law { node: 0, idle_a: 0.16, full_a: Some(0.3), at_v: 450.0, law: 1.5 },
                Load::Bleeder { node: 0, ohm: 220e3 },
            ],
            dropper: None,
            heater: Some(Heater { nominal_v: 6.3, tolerance_pct: 10.0, per_mains_v: 6.3 / 220.0 }),
        }
    }

    #[test]
    fn heater_and_core_are_judged_at_the_declared_voltage() {
        // Handbook oracle O29: a 6.3 V winding for 220 V stands at 7.245 V at 253 V, 15 % over.
        let findings = circuit_findings(&plain(), 253.0, None, None);
        let heater = findings.iter().find(|f| matches!(f, Finding::Heater { .. })).unwrap();
        assert!(matches!(heater, Finding::Heater { heater_v, .. } if (heater_v - 7.245).abs() < 1e-3));
        assert!(heater.is_wrong());
        let core = findings.iter().find(|f| matches!(f, Finding::Core { .. })).unwrap();
        assert!(
            matches!(core, Finding::Core { ratio, .. } if (ratio - 1.15).abs() < 1e-9) && core.is_wrong()
        );
        // Wound for 60 Hz and run at 50 Hz, the same voltage drives the core a fifth more.
        let mut circuit = plain();
        circuit.transformer.wound_for_hz = 60.0;
        assert!((core_ratio(&circuit, 220.0) - 1.2).abs() < 1e-12);
    }

    #[test]
    fn a_bleeders_heat_is_that_of_the_unloaded_rail() {
        let findings = circuit_findings(&plain(), 220.0, Some(&[494.0]), None);
        let heat = findings.iter().find_map(|f| match f {
            Finding::Bleeder { heat_w, across_v, .. } => Some((*heat_w, *across_v)),
            _ => None,
        });
        // 494²/220 kΩ = 1.109 W, by hand.
        assert!(heat.is_some_and(|(w, v)| (w - 1.109).abs() < 1e-3 && v == 494.0), "{heat:?}");
    }

    #[test]
    fn a_choke_input_needs_its_critical_current_or_rises_to_the_peak() {
        // Handbook oracle O22: the mean is 0.9003 of the r.m.s. and 4 kΩ at 50 Hz need R/942.5 = 4.244 H; the peak
        // of a sine is π/2 = 1.571 times its mean.
        let mut circuit = plain();
        circuit.filter = vec![section("reservoir", SeriesPart::Choke { henry: 4.244, ohm: 100.0 }, 47e-6)];
        let of = |circuit: &Circuit| {
            let findings = circuit_findings(circuit, 220.0, None, None);
            findings.into_iter().find(|f| matches!(f, Finding::ChokeInput { .. })).unwrap()
        };
        let found = of(&circuit);
        let Finding::ChokeInput { mean_v, peak_v, critical_a, .. } = found else { unreachable!() };
        assert!((mean_v / 350.0 - 0.9003).abs() < 1e-4 && (peak_v / mean_v - 1.571).abs() < 1e-3);
        assert!((mean_v / critical_a - 4000.0).abs() < 1.0, "{}", mean_v / critical_a);
        assert!(found.is_wrong(), "220 kΩ draws too little");
        circuit.loads = vec![Load::Bleeder { node: 0, ohm: 3900.0 }];
        assert!(!of(&circuit).is_wrong());
    }

    #[test]
    fn a_valve_rectifier_is_held_against_its_sheet() {
        // EZ40 sheet: at most 50 µF, 90 mA; at 350 V at least 300 Ω in each path.
        let sheet = RectifierSheet {
            type_name: "EZ40".into(),
            most_a: 0.09,
            peak_a: 0.27,
            inverse_v: 1000.0,
            most_f: 50e-6,
            least_ohm: Some(300.0),
        };
        let mut circuit = plain();
        let wrong = |circuit: &Circuit| {
            let findings = rectifier_findings(circuit, &sheet, 220.0, &[]);
            findings.iter().filter(|f| f.is_wrong()).count()
        };
        assert_eq!(wrong(&circuit), 2, "100 µF and 38 Ω");
        circuit.filter[0].capacitor.as_mut().unwrap().farad = 50e-6;
        circuit.transformer.source_ohm.value = 300.0;
        assert_eq!(wrong(&circuit), 0);
    }
}
