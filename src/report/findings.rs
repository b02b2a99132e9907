//! Findings in plain sentences.

use std::time::Duration;

use super::time::span;
use crate::supply::{Finding, SAFE_V};

/// One finding as a sentence.
pub fn finding_sentence(finding: &Finding) -> String {
    match finding {
        Finding::Discharge { node, capacitance_f, from_v, energy_j, seconds, in_standby } => {
            let head = format!("{} at \"{node}\"", microfarads(*capacitance_f));
            let standby = if *in_standby { " (with the standby switch open)" } else { "" };
            match seconds {
                Some(s) => format!(
                    "{head}: {} from {from_v:.0} V ({energy_j:.0} J) to {SAFE_V:.0} V through what is there{standby}; \
                     measure, do not trust time.",
                    span(Duration::from_secs_f64(s.ceil()))
                ),
                None => format!(
                    "{head}: no resistor leads its charge away{standby}; it stays charged for hours or days, \
                     {from_v:.0} V ({energy_j:.0} J). Measure before every touch; a bleeder is wanted."
                ),
            }
        }
        Finding::Bleeder { node, resistance_ohm, across_v, heat_w } => format!(
            "The {} from \"{node}\" to 0 V bear {across_v:.0} V and {heat_w:.2} W without load: rate them for more than \
             that voltage, and for twice that heat.",
            ohms(*resistance_ohm)
        ),
        Finding::FirstCapacitor { rectifier, capacitance_f, most_f } => format!(
            "The {rectifier} charges {} first; its sheet allows {}.",
            microfarads(*capacitance_f),
            microfarads(*most_f)
        ),
        Finding::SourceResistance { rectifier, source_ohm, least_ohm, winding_v } => format!(
            "The {rectifier} has {source_ohm:.0} Ω in each path; its sheet asks for {least_ohm:.0} Ω at {winding_v:.0} V."
        ),
        Finding::RectifierCurrent { rectifier, loading, mean_a, most_a } => format!(
            "The {rectifier} gives {:.0} mA ({}); its sheet allows {:.0} mA.",
            mean_a * 1e3,
            loading.word(),
            most_a * 1e3
        ),
        Finding::RectifierPeak { rectifier, loading, peak_a, most_a } => format!(
            "The {rectifier}'s charging pulses reach {:.0} mA in each anode ({}); its sheet allows {:.0} mA.",
            peak_a * 1e3,
            loading.word(),
            most_a * 1e3
        ),
        Finding::RectifierInverse { rectifier, inverse_v, most_v } => format!(
            "The {rectifier} meets {inverse_v:.0} V of inverse voltage unloaded; its sheet allows {most_v:.0} V."
        ),
        Finding::ChokeInput { node, mean_v, peak_v, bleeder_a, critical_a } => format!(
            "The choke input keeps \"{node}\" near {mean_v:.0} V only while at least {:.1} mA flow; bleeders draw \
             {:.1} mA, {}.",
            critical_a * 1e3,
            bleeder_a * 1e3,
            if bleeder_a < critical_a {
                format!("so that with the valves cold it rises towards {peak_v:.0} V")
            } else {
                "which is enough with the valves cold too".to_owned()
            }
        ),
        Finding::Unloaded { node, rail_v, u_v, most_v, surge } => {
            let what = if *surge {
                "surge voltage (the warm-up is brief)"
            } else {
                "working voltage (it waits in standby)"
            };
            let doubt = if rail_v <= most_v && rail_v + u_v > *most_v { "; within its doubt" } else { "" };
            format!(
                "With cold valves the capacitor at \"{node}\" meets {rail_v:.0} V ± {u_v:.0} V; its {what} is \
                 {most_v:.0} V{doubt}."
            )
        }
        Finding::Limit { node, loading, rail_v, u_v, most_v } => format!(
            "At {} \"{node}\" stands at {rail_v:.0} V ± {u_v:.0} V; its limit is {most_v:.0} V.",
            loading.word()
        ),
        Finding::Idle { node, rail_v, most_v } => format!(
            "At idle the capacitor at \"{node}\" meets {rail_v:.0} V, ripple included; its working voltage is \
             {most_v:.0} V."
        ),
        Finding::Dissipation { valve, heat_w, most_w } => {
            format!("Each {valve} turns {heat_w:.1} W into heat at idle; its sheet allows {most_w:.0} W.")
        }
        Finding::Heater { heater_v, nominal_v, tolerance_pct } => format!(
            "The heaters get {heater_v:.2} V; {nominal_v} V ± {tolerance_pct} % is {:.2} to {:.2} V.",
            nominal_v * (1.0 - tolerance_pct / 100.0),
            nominal_v * (1.0 + tolerance_pct / 100.0)
        ),
        Finding::Core { ratio, most } => format!(
            "The core is driven at {ratio:.3} times what it was wound for{}.",
            if ratio > most {
                format!(
                    ", over {most}: it runs hot; no dropper in the rail helps it, another tap or a bucking winding does"
                )
            } else {
                String::new()
            }
        ),
        Finding::Unsolved { loading, why } => format!("Nothing is known of it {}: {why}.", loading.word()),
    }
}

fn microfarads(farad: f64) -> String {
    format!("{} µF", short(farad * 1e6))
}

fn ohms(ohm: f64) -> String {
    if ohm >= 1000.0 { format!("{} kΩ", short(ohm / 1000.0)) } else { format!("{} Ω", short(ohm)) }
}

/// Three significant digits, without zeros that say nothing.
fn short(value: f64) -> String {
    let digits = (2 - value.abs().log10().floor() as i32).clamp(0, 6) as usize;
    let text = format!("{value:.digits$}");
    if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_discharge_is_said_with_its_time_and_the_warning_not_to_trust_it() {
        let of = |seconds| {
            finding_sentence(&Finding::Discharge {
                node: "reservoir".into(),
                capacitance_f: 147e-6,
                from_v: 450.0,
                energy_j: 14.9,
                seconds,
                in_standby: false,
            })
        };
        insta::assert_snapshot!(of(Some(65.16)), @r#"147 µF at "reservoir": 1 min 6 s from 450 V (15 J) to 60 V through what is there; measure, do not trust time."#);
        insta::assert_snapshot!(of(None), @r#"147 µF at "reservoir": no resistor leads its charge away; it stays charged for hours or days, 450 V (15 J). Measure before every touch; a bleeder is wanted."#);
    }

    #[test]
    fn values_are_shown_with_three_digits_and_no_idle_zeros() {
        assert_eq!([220e3, 3900.0, 68.0, 4.7].map(ohms), ["220 kΩ", "3.9 kΩ", "68 Ω", "4.7 Ω"]);
        assert_eq!([100e-6, 0.22e-6].map(microfarads), ["100 µF", "0.22 µF"]);
    }
}
