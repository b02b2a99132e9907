//! What any correct solution must show, whatever the method: exact invariants, limits, the criteria of its own
//! convergence, and the work that it takes.

use std::f64::consts::SQRT_2;

use super::test_circuits::{
    CONSTANT, IDEAL, amplifier, bleeder, capacitor, circuit, idle, load, near, reservoir, solve,
};
use super::{
    Circuit, Device, Dropper, Load, Loading, RectifierCircuit, Section, SeriesPart, SolveError, SolveOptions,
    Solver, steady_state,
};

#[test]
fn a_constant_drop_in_the_return_lowers_a_constant_current_rail_by_itself_and_leaves_the_ripple_alone() {
    // Exact for any correct solution: the charging path sees only the sum of rail and drop.
    let silicon = Device::Silicon { forward_v: 0.85, on_ohm: 0.05 };
    let valve = Device::Valve { perveance: 3.2e-3, type_name: None };
    for (wiring, device) in [
        (RectifierCircuit::Bridge, silicon.clone()),
        (RectifierCircuit::FullWave, valve),
        (RectifierCircuit::HalfWave, silicon.clone()),
        (RectifierCircuit::Doubler, silicon),
    ] {
        let plain = reservoir(wiring, device, vec![load(0, 0.15, 450.0, CONSTANT)]);
        let dropper = Some(Dropper::ReturnZener { zener_v: 43.0, zener_ohm: 0.0 });
        let dropped = Circuit { dropper, ..plain.clone() };
        let (plain, dropped) = (idle(&plain), idle(&dropped));
        near("rail", plain.nodes[0].mean_v - dropped.nodes[0].mean_v, 43.0, 1e-5);
        near("ripple", dropped.nodes[0].ripple_vpp, plain.nodes[0].ripple_vpp, 1e-5);
        // Its heat is the drop times the mean current, whatever the pulses.
        let dropper = dropped.dropper.expect("it is fitted");
        near("drop", dropper.mean_v, 43.0, 1e-9);
        near("heat", dropper.loss_w, 43.0 * dropped.nodes[0].load_a, 1e-6);
    }
    // With a resistive load the current falls with the rail, so it falls by less.
    let plain = reservoir(RectifierCircuit::Bridge, IDEAL, vec![bleeder(0, 3000.0)]);
    let dropper = Some(Dropper::ReturnZener { zener_v: 43.0, zener_ohm: 0.0 });
    let dropped = Circuit { dropper, ..plain.clone() };
    let fell = idle(&plain).nodes[0].mean_v - idle(&dropped).nodes[0].mean_v;
    assert!(fell < 42.5 && fell > 30.0, "{fell}");
}

#[test]
fn a_resistor_heats_by_the_pulses_in_the_return_and_by_the_direct_current_in_the_line() {
    // By definition: R·Irms² in the pulsed path, R·Idc² (but for the ripple) after the reservoir.
    let mut circuit = amplifier();
    circuit.dropper = Some(Dropper::ReturnResistor(60.0));
    let found = idle(&circuit);
    near("return", found.dropper.expect("fitted").loss_w, 60.0 * found.winding_rms_a.powi(2), 1e-6);
    circuit.dropper = Some(Dropper::LineResistor(500.0));
    let found = idle(&circuit);
    near("line", found.dropper.expect("fitted").loss_w, 500.0 * found.nodes[1].series_a.powi(2), 5e-3);
    near("line drop", found.dropper.expect("fitted").mean_v, 500.0 * found.nodes[1].series_a, 5e-3);
    let resistor_ohm = 500.0 + 120.0;
    let between = found.nodes[0].mean_v - found.nodes[1].mean_v;
    near("voltage between the nodes", between, resistor_ohm * found.nodes[1].series_a, 1e-6);
}

#[test]
fn everything_scales_with_mains_and_with_the_other_tap() {
    // Exact for ideal devices and resistive loads.
    for wiring in [RectifierCircuit::Bridge, RectifierCircuit::FullWave, RectifierCircuit::Doubler] {
        let mut circuit = reservoir(wiring, IDEAL, vec![bleeder(0, 3000.0)]);
        let at = |circuit: &Circuit, mains_v: f64| {
            steady_state(circuit, mains_v, Loading::Idle, &SolveOptions::default()).expect("a steady state")
        };
        let (once, twice) = (at(&circuit, 115.0), at(&circuit, 230.0));
        near("rail", twice.nodes[0].mean_v, 2.0 * once.nodes[0].mean_v, 1e-6);
        near("ripple", twice.nodes[0].ripple_vpp, 2.0 * once.nodes[0].ripple_vpp, 1e-6);
        near("current", twice.winding_rms_a, 2.0 * once.winding_rms_a, 1e-6);
        near("inverse", twice.inverse_peak_v, 2.0 * once.inverse_peak_v, 1e-6);
        circuit.transformer.wound_for_v = 250.0;
        near("tap 230 to 250", at(&circuit, 230.0).nodes[0].mean_v, 0.920 * twice.nodes[0].mean_v, 1e-6);
    }
}

#[test]
fn with_nothing_drawing_every_node_stands_at_the_peak_and_nothing_flows() {
    let mut circuit = amplifier();
    circuit.loads.retain(|load| matches!(load, Load::Law { .. }));
    let peak_v = 350.0 * SQRT_2;
    let at_rest = |circuit: &Circuit| solve(circuit, Loading::Unloaded);
    let rail = at_rest(&circuit);
    for node in &rail.nodes {
        near(&node.node, node.mean_v, peak_v - 1.7, 1e-12);
        assert_eq!(node.ripple_vpp, 0.0);
    }
    assert_eq!((rail.winding_rms_a, rail.diode_peak_a, rail.power.source_w), (0.0, 0.0, 0.0));
    circuit.device = Device::Valve { perveance: 3.2e-3, type_name: None };
    near("valve", at_rest(&circuit).nodes[0].mean_v, peak_v, 1e-12);
    circuit.dropper = Some(Dropper::ReturnZener { zener_v: 40.0, zener_ohm: 5.0 });
    near("zener", at_rest(&circuit).nodes[0].mean_v, peak_v - 40.0, 1e-12);
    near("zener's volts", at_rest(&circuit).dropper.expect("fitted").mean_v, 40.0, 1e-12);
    circuit.rectifier = RectifierCircuit::FullWave;
    near("inverse: the whole of it", at_rest(&circuit).inverse_peak_v, 2.0 * peak_v, 1e-12);
    circuit.rectifier = RectifierCircuit::HalfWave;
    near("inverse: half-wave", at_rest(&circuit).inverse_peak_v, 2.0 * peak_v - 40.0, 1e-12);
    // A choke input unloaded rises to the peak as well.
    circuit.filter[0].series = SeriesPart::Choke { henry: 5.0, ohm: 100.0 };
    near("choke", at_rest(&circuit).nodes[0].mean_v, peak_v - 40.0, 1e-12);
}

#[test]
fn the_limit_of_a_vanishing_bleeder_is_the_peak() {
    let mut rails = Vec::new();
    for ohm in [1e5, 1e6, 1e7, 1e8] {
        let circuit = reservoir(RectifierCircuit::Bridge, IDEAL, vec![bleeder(0, ohm)]);
        rails.push(solve(&circuit, Loading::Unloaded).nodes[0].mean_v / (350.0 * SQRT_2));
    }
    assert!(rails.is_sorted(), "{rails:?}");
    near("10⁸ Ω", rails[3], 1.0, 1e-4);
}

#[test]
fn balance_resistors_draw_in_every_loading() {
    // Two in series with 100 kΩ each are a bleeder of 200 kΩ.
    let mut balanced = reservoir(RectifierCircuit::Bridge, IDEAL, vec![load(0, 0.1, 450.0, 1.5)]);
    let mut bled = balanced.clone();
    bled.loads.push(bleeder(0, 200e3));
    let capacitor = balanced.filter[0].capacitor.as_mut().expect("a reservoir");
    (capacitor.in_series, capacitor.balance_ohm) = (2, Some(100e3));
    for loading in [Loading::Unloaded, Loading::Idle] {
        let (balanced, bled) = (solve(&balanced, loading), solve(&bled, loading));
        near(loading.word(), balanced.nodes[0].mean_v, bled.nodes[0].mean_v, 1e-9);
        assert!(bled.nodes[0].load_a > 0.0);
    }
}

#[test]
fn halving_the_step_moves_no_mean_by_more_than_a_fiftieth_of_a_per_cent() {
    for (name, circuit) in super::test_circuits::all() {
        for loading in Loading::ALL {
            let mains_v = circuit.transformer.wound_for_v;
            let at = |steps| {
                let options = SolveOptions { steps, ..SolveOptions::default() };
                steady_state(&circuit, mains_v, loading, &options)
                    .unwrap_or_else(|why| panic!("{name}: {why}"))
            };
            let usual = SolveOptions::default().steps;
            let (coarse, fine) = (at(usual), at(2 * usual));
            for (a, b) in coarse.nodes.iter().zip(&fine.nodes) {
                near(&format!("{name} {} {}", loading.word(), a.node), a.mean_v, b.mean_v, 2e-4);
            }
            near(
                &format!("{name} {} r.m.s.", loading.word()),
                coarse.winding_rms_a,
                fine.winding_rms_a,
                5e-3,
            );
            assert!(coarse.residual < 1e-6, "{name}: {}", coarse.residual);
        }
    }
}

#[test]
fn what_cannot_be_solved_says_why() {
    let mut circuit = amplifier();
    let options = SolveOptions::default();
    let full = steady_state(&circuit, 230.0, Loading::Full, &options);
    assert!(full.is_ok(), "every load says what it draws at full output");
    circuit.loads.push(load(0, 0.01, 450.0, 1.0));
    let why = |circuit: &Circuit, mains_v, loading| {
        steady_state(circuit, mains_v, loading, &options).expect_err("it can't be solved").to_string()
    };
    assert_eq!(
        why(&circuit, 230.0, Loading::Full),
        "the supply of hall can't be solved: a load's current at full output is unknown"
    );
    assert_eq!(
        why(&circuit, -5.0, Loading::Idle),
        "the supply of hall can't be solved: a mains of -5 V is no mains"
    );
    let one = SolveOptions { tries: 1, ..SolveOptions::default() };
    let refused = steady_state(&circuit, 230.0, Loading::Idle, &one).expect_err("one try isn't enough");
    assert!(matches!(refused, SolveError::Period { tries: 1, .. }), "{refused}");
    circuit.filter.push(Section {
        node: "bare".to_owned(),
        series: SeriesPart::Resistor(1e3),
        capacitor: None,
    });
    assert_eq!(
        why(&circuit, 230.0, Loading::Idle),
        "the supply of hall can't be solved: node bare has no capacitor"
    );
    circuit.filter.pop();
    circuit.filter[0].capacitor = Some(capacitor(100e-6));
    circuit.loads.push(bleeder(7, 1e3));
    assert_eq!(
        why(&circuit, 230.0, Loading::Idle),
        "the supply of hall can't be solved: a load stands on node 7 of 3"
    );
}

#[test]
fn a_filter_that_rings_for_hundreds_of_periods_finds_its_steady_state() {
    // A doubler with a choke of next to no resistance and next to no load: the filter's own 28 Hz is damped by
    // nothing but a bleeder.
    let mut circuit =
        circuit(RectifierCircuit::Doubler, IDEAL, 100.0, 0.2, 4e-6, vec![bleeder(0, 314_568.0)]);
    circuit.doubler_f = Some([8e-6, 8.8e-6]);
    circuit.transformer.leakage_h = 3.7e-3;
    circuit.filter.push(Section {
        node: "after".to_owned(),
        series: SeriesPart::Choke { henry: 15.6, ohm: 1.4 },
        capacitor: Some(capacitor(4e-6)),
    });
    let found = solve(&circuit, Loading::Unloaded);
    assert!(found.residual < 1e-6);
    near("rail", found.nodes[0].mean_v, 200.0 * SQRT_2, 0.01);
    near("what is behind it", found.nodes[1].mean_v, found.nodes[0].mean_v, 1e-4);
}

#[test]
fn a_neighbours_state_shortens_the_search_and_changes_nothing() {
    let circuit = amplifier();
    let at = |mains_v: f64, warm| {
        let options = SolveOptions { warm, ..SolveOptions::default() };
        steady_state(&circuit, mains_v, Loading::Idle, &options).expect("a steady state")
    };
    let neighbour = at(229.0, None);
    let (cold, warm) = (at(230.0, None), at(230.0, neighbour.warm().cloned()));
    assert!(warm.work.walks < cold.work.walks, "{:?} and {:?}", warm.work, cold.work);
    for (warm, cold) in warm.nodes.iter().zip(&cold.nodes) {
        near(&warm.node, warm.mean_v, cold.mean_v, 2e-5);
    }
}

#[test]
fn the_work_stays_small() {
    // Walks through the period and steps in the last one: a slower solver shows here before anyone has a clock.
    let mut lines = Vec::new();
    let mut choke_input = amplifier();
    choke_input.filter[0].series = SeriesPart::Choke { henry: 5.0, ohm: 90.0 };
    choke_input.transformer.leakage_h = 4e-3;
    let mut valve = amplifier();
    valve.rectifier = RectifierCircuit::FullWave;
    valve.device = Device::Valve { perveance: 3.2e-3, type_name: None };
    valve.dropper =
        Some(Dropper::ReturnMosfet { zener_v: 36.0, threshold_v: 3.5, k_a_per_v2: 1.0, half_width_v: 2.0 });
    for (name, circuit) in
        [("amplifier", amplifier()), ("choke input", choke_input), ("valve, mosfet", valve)]
    {
        for loading in Loading::ALL {
            let one = solve(&circuit, loading).work;
            let mut solver = Solver::new(&circuit, loading, SolveOptions::default()).expect("a circuit");
            let sweep: usize =
                (0..91).map(|v| solver.at(185.0 + f64::from(v)).expect("a steady state").work.walks).sum();
            lines.push(format!(
                "{name:<13} {:<8} {:>2} walks, {} steps; 91 mains: {sweep} walks",
                loading.word(),
                one.walks,
                one.steps
            ));
        }
    }
    insta::assert_snapshot!(lines.join("\n"), @r"
    amplifier     unloaded  7 walks, 130 steps; 91 mains: 99 walks
    amplifier     idle      5 walks, 130 steps; 91 mains: 114 walks
    amplifier     full      5 walks, 130 steps; 91 mains: 112 walks
    choke input   unloaded  8 walks, 129 steps; 91 mains: 100 walks
    choke input   idle      5 walks, 129 steps; 91 mains: 104 walks
    choke input   full      5 walks, 129 steps; 91 mains: 107 walks
    valve, mosfet unloaded  8 walks, 130 steps; 91 mains: 102 walks
    valve, mosfet idle      4 walks, 130 steps; 91 mains: 97 walks
    valve, mosfet full      5 walks, 130 steps; 91 mains: 100 walks
    ");
}
