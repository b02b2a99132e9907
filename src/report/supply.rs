//! A supply that is stated the full way, said back in plain sentences, and its findings.

use std::fmt;

use super::findings::finding_sentence;
use crate::config::Amplifier;
use crate::quantity::Uncertain;
use crate::supply::{
    Basis, Circuit, Device, Doubtful, Dropper, Finding, Load, Loading, Projector, RectifierCircuit,
    SeriesPart, Winding,
};
use crate::watch::Projecting;

/// What was understood of the supply: nothing where it isn't stated the full way.
pub(super) fn sentences(amplifier: &Amplifier, projecting: &Projecting, declared_v: f64) -> Vec<String> {
    let Some(circuit) = &amplifier.circuit else { return Vec::new() };
    let mut said = vec![transformer(circuit), wave(circuit), rectifier(circuit)];
    said.extend(circuit.dropper.as_ref().map(dropper));
    said.push(format!("Filter: {}.", filter(circuit)));
    said.push(format!("It draws {}.", loads(circuit)));
    if !circuit.knows(Loading::Full) {
        said.push("Full output isn't shown: not every load says what it draws there (full_ma).".to_owned());
    }
    said.extend(projecting.trouble.as_ref().map(|why| format!("It can't be solved: {why}.")));
    match &projecting.projector {
        Some(projector) => said.extend(rails(circuit, projector, declared_v)),
        None => said.push("So nothing says how its rails follow mains.".to_owned()),
    }
    said
}

/// The findings: faults first, each marked.
pub(super) fn findings_text(findings: &[Finding], declared_v: f64, out: &mut impl fmt::Write) -> fmt::Result {
    if findings.is_empty() {
        return Ok(());
    }
    let (wrong, good): (Vec<_>, Vec<_>) = findings.iter().partition(|finding| finding.is_wrong());
    writeln!(out, "  Findings at {declared_v} V of mains:")?;
    for finding in wrong {
        writeln!(out, "    WRONG  {}", finding_sentence(finding))?;
    }
    for finding in good {
        writeln!(out, "           {}", finding_sentence(finding))?;
    }
    Ok(())
}

fn doubtful(figure: Doubtful, unit: &str) -> String {
    format!("{:.1} {unit} ± {:.1} {unit}", figure.value, figure.half_width)
}

fn transformer(circuit: &Circuit) -> String {
    let t = &circuit.transformer;
    let per_half = if t.winding == Winding::CentreTapped { " in each half" } else { "" };
    let leakage =
        if t.leakage_h > 0.0 { format!(", {:.1} mH of leakage", t.leakage_h * 1e3) } else { String::new() };
    format!(
        "Transformer wound for {} V at {} Hz: {} open-circuit{per_half}, {} in one path{leakage}.",
        t.wound_for_v,
        t.wound_for_hz,
        doubtful(t.secondary_v, "V"),
        doubtful(t.source_ohm, "Ω")
    )
}

fn wave(circuit: &Circuit) -> String {
    let crest = circuit.wave.crest_factor();
    if circuit.wave.known {
        format!("The mains wave has a crest factor of {crest:.3}.")
    } else {
        "The mains wave isn't known and is taken as a sine, which predicts up to 4 % too much where it is flat-topped; \
         [site] wave says it."
            .to_owned()
    }
}

fn rectifier(circuit: &Circuit) -> String {
    let wiring = match circuit.rectifier {
        RectifierCircuit::Bridge => "bridge",
        RectifierCircuit::FullWave => "full-wave",
        RectifierCircuit::HalfWave => "half-wave",
        RectifierCircuit::Doubler => "doubler",
    };
    let device = match &circuit.device {
        Device::Silicon { forward_v, on_ohm } => format!("silicon, {forward_v} V and {on_ohm} Ω each"),
        Device::Valve { perveance, type_name } => format!(
            "{}, {:.0} V at 100 mA by the space-charge law",
            type_name.as_deref().unwrap_or("a valve"),
            (0.1 / perveance).powf(2.0 / 3.0)
        ),
    };
    format!("Rectifier: {wiring}, {device}.")
}

fn dropper(dropper: &Dropper) -> String {
    match *dropper {
        Dropper::ReturnMosfet { zener_v, threshold_v, half_width_v, .. } => format!(
            "Dropper fitted in the return: a MOSFET with {zener_v} V of zeners and a threshold of {threshold_v:.1} V, \
             ±{half_width_v:.1} V."
        ),
        Dropper::ReturnZener { zener_v, zener_ohm } => {
            format!("Dropper fitted in the return: {zener_v} V of power zeners, {zener_ohm} Ω.")
        }
        Dropper::ReturnResistor(ohm) => format!("Dropper fitted in the return: {ohm} Ω."),
        Dropper::LineResistor(ohm) => {
            format!("Dropper fitted after the reservoir: {ohm} Ω; it does nothing for the reservoir itself.")
        }
    }
}

fn filter(circuit: &Circuit) -> String {
    let sections = circuit.filter.iter().map(|section| {
        let series = match section.series {
            SeriesPart::None => String::new(),
            SeriesPart::Resistor(ohm) => format!("{ohm} Ω to "),
            SeriesPart::Choke { henry, ohm } => format!("a choke of {henry} H and {ohm} Ω to "),
        };
        let capacitor = section.capacitor.map_or("the doubler's pair".to_owned(), |c| {
            let rated = c.rated_v.map_or(String::new(), |v| format!(", {v} V"));
            format!("{:.4} µF{rated}", c.farad * 1e6).replace(".0000", "")
        });
        format!("{series}\"{}\" ({capacitor})", section.node)
    });
    sections.collect::<Vec<_>>().join(", then ")
}

fn loads(circuit: &Circuit) -> String {
    let name = |node: usize| &circuit.filter[node].node;
    let each = circuit.loads.iter().map(|load| match *load {
        Load::Law { node, idle_a, full_a, at_v, law } => {
            let full = full_a.map_or(String::new(), |a| format!(", {:.0} mA at full output", a * 1e3));
            format!(
                "{:.0} mA at idle{full} from \"{}\" at {at_v} V (by the power {law} of the rail)",
                idle_a * 1e3,
                name(node)
            )
        }
        Load::Bleeder { node, ohm } => format!("what {} kΩ take from \"{}\"", ohm / 1000.0, name(node)),
    });
    let all: Vec<String> = each.collect();
    if all.is_empty() { "nothing".to_owned() } else { all.join("; ") }
}

/// Where every rail stands at the declared voltage, loading by loading.
fn rails(circuit: &Circuit, projector: &Projector, declared_v: f64) -> Vec<String> {
    let source = match projector.basis() {
        Basis::MeasuredPair => "by one measured pair",
        Basis::Model => "by the circuit, solved",
        Basis::Fit => "by the circuit, fitted to the record",
    };
    let mains = Uncertain::new(declared_v, 0.0);
    let loadings = Loading::ALL.into_iter().filter_map(|loading| {
        let nodes: Vec<String> = circuit
            .filter
            .iter()
            .filter_map(|section| {
                Some(format!("{} {}", section.node, projector.project(&section.node, loading, mains)?))
            })
            .collect();
        (!nodes.is_empty()).then(|| format!("{}: {}", loading.word(), nodes.join(", ")))
    });
    let mut said = vec![format!("At {declared_v} V of mains its rails stand, {source}, at")];
    said.extend(loadings.map(|line| format!("  {line}")));
    said
}
