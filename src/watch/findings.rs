//! Everything that is to be said of one amplifier's supply as it stands, at the declared voltage.

use super::parts::PartWatch;
use crate::config::{Amplifier, Standby, rectifier};
use crate::quantity::Uncertain;
use crate::supply::{
    Circuit, Device, Finding, Loading, Projector, RectifierSheet, SolveOptions, SteadyState,
    circuit_findings, rectifier_findings, steady_state,
};

/// The findings of `amplifier`, faults and figures that are good to know alike ([`Finding::is_wrong`] tells them
/// apart). None without a circuit.
pub fn findings(
    amplifier: &Amplifier,
    projector: Option<&Projector>,
    parts: &PartWatch,
    declared_v: f64,
) -> Vec<Finding> {
    let Some(circuit) = &amplifier.circuit else { return Vec::new() };
    let standby_after = match amplifier.cold.as_ref().map(|cold| &cold.standby) {
        Some(Standby::After(node)) => circuit.node(node),
        _ => None,
    };
    let unloaded_v: Option<Vec<f64>> = circuit
        .filter
        .iter()
        .map(|section| Some(projector?.curve(&section.node, Loading::Unloaded)?.rail_v(declared_v)))
        .collect();
    let mut findings = circuit_findings(circuit, declared_v, unloaded_v.as_deref(), standby_after);
    let mut states = Vec::new();
    for loading in Loading::ALL.into_iter().filter(|loading| circuit.knows(*loading)) {
        match steady_state(circuit, declared_v, loading, &SolveOptions::default()) {
            Ok(state) => states.push(state),
            Err(why) => findings.push(Finding::Unsolved { loading, why: why.to_string() }),
        }
    }
    if let Some(sheet) = sheet_of(circuit, declared_v) {
        findings.extend(rectifier_findings(circuit, &sheet, declared_v, &states));
    }
    if let Some(idle) = states.iter().find(|state| state.loading == Loading::Idle) {
        findings.extend(idle_capacitors(circuit, idle));
    }
    findings.extend(parts.capacitors().iter().map(|capacitor| Finding::Unloaded {
        node: capacitor.node.clone(),
        rail_v: capacitor.at_declared.volts,
        u_v: capacitor.at_declared.u,
        most_v: capacitor.limit_v,
        surge: capacitor.surge,
    }));
    findings.extend(parts.dissipation_at(declared_v));
    findings.extend(amplifier.limits.iter().filter_map(|limit| {
        let rail = projector?.project(&limit.node, limit.loading, Uncertain::new(declared_v, 0.0))?;
        let (node, loading) = (limit.node.clone(), limit.loading);
        let over = Finding::Limit { node, loading, rail_v: rail.volts, u_v: rail.u, most_v: limit.max_v };
        over.is_wrong().then_some(over)
    }));
    findings
}

/// Each capacitor that the idle rail's highest moment passes.
fn idle_capacitors<'c>(circuit: &'c Circuit, idle: &'c SteadyState) -> impl Iterator<Item = Finding> + 'c {
    circuit.filter.iter().zip(&idle.nodes).filter_map(|(section, state)| {
        let most_v = section.capacitor?.rated_v?;
        let finding = Finding::Idle { node: section.node.clone(), rail_v: state.max_v, most_v };
        finding.is_wrong().then_some(finding)
    })
}

fn sheet_of(circuit: &Circuit, declared_v: f64) -> Option<RectifierSheet> {
    let Device::Valve { type_name: Some(name), .. } = &circuit.device else { return None };
    let row = rectifier(name)?;
    let winding_v = circuit.transformer.secondary_v.value * declared_v / circuit.transformer.wound_for_v;
    Some(RectifierSheet {
        type_name: row.type_name.clone(),
        most_a: row.max_ma / 1000.0,
        peak_a: row.peak_ma / 1000.0,
        inverse_v: row.inverse_v,
        most_f: row.max_uf / 1e6,
        least_ohm: row.min_ohm_at(winding_v),
    })
}

#[cfg(test)]
mod tests {
    use super::super::part_watches;
    use super::super::tests::{full_site, projectors};
    use super::*;
    use crate::config::Site;

    fn of(site: &Site) -> Vec<Finding> {
        let projectors = projectors(site);
        let parts = part_watches(site, &projectors);
        findings(&site.amplifiers[0], projectors[0].as_ref(), &parts[0], site.declared_v)
    }

    #[test]
    fn a_capacitor_that_the_cold_rail_passes_at_the_declared_voltage_is_a_finding() {
        let unloaded = |site: &Site| {
            of(site).into_iter().find(|f| matches!(f, Finding::Unloaded { .. })).expect("a rated capacitor")
        };
        let mut site = full_site("");
        // 350 V at 220 V peaks at 517.5 V at 230 V; two diodes and the closed form tan θ − θ = π·Rs/(2R) for 38 Ω and
        // 220 kΩ (cos θ = 0.9956) leave 513.5 V: under the surge voltage of 550 V.
        let found = unloaded(&site);
        let Finding::Unloaded { rail_v, most_v, surge, .. } = found else { unreachable!() };
        assert!((rail_v - 513.5).abs() < 0.5 && surge && !found.is_wrong(), "{found:?}");
        assert!((most_v - 550.0).abs() < 1e-9, "1.10 times 500 V, IEC 60384-4 from memory");
        site.amplifiers[0].cold.as_mut().unwrap().standby = Standby::After("reservoir".into());
        assert!(unloaded(&site).is_wrong(), "500 V of working voltage in standby");
    }

    #[test]
    fn what_the_idle_supply_does_to_valves_and_capacitors_is_said() {
        let mut site = full_site("");
        let wrong = |site: &Site| of(site).into_iter().filter(Finding::is_wrong).collect::<Vec<_>>();
        // 230 V on a winding for 220 V: 4.5 % over, within what heater and core bear.
        assert_eq!(wrong(&site), []);
        site.amplifiers[0].output.as_mut().unwrap().idle_a_each = 0.09;
        let hot = wrong(&site);
        assert!(matches!(&hot[..], [Finding::Dissipation { most_w, .. }] if *most_w == 25.0), "{hot:?}");
        site.declared_v = 253.0;
        let high = wrong(&site);
        assert!(high.iter().any(|f| matches!(f, Finding::Heater { .. })), "{high:?}");
        assert!(high.iter().any(|f| matches!(f, Finding::Core { .. })), "{high:?}");
    }
}
