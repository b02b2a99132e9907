//! The solver against published figures and closed theory; each source stands beside its check.
//!
//! "Computed from first principles" marks figures that an independent study computed once, two of them re-run in a
//! general-purpose circuit simulator to four digits.

use std::f64::consts::{PI, SQRT_2, TAU};

use super::test_circuits::{
    CONSTANT, IDEAL, amplifier, bleeder, circuit, idle, load, near, reservoir, solve,
};
use super::{
    Device, Dropper, Load, Loading, RectifierCircuit, SeriesPart, SolveOptions, SteadyState, steady_state,
};

/// 1 kV of peak, 1 kΩ of load, ideal devices.
fn ideal(rectifier: RectifierCircuit, source_over_load: f64, omega_c_r: f64) -> SteadyState {
    let farad = omega_c_r / (TAU * 50.0 * 1000.0);
    idle(&circuit(
        rectifier,
        IDEAL,
        1000.0 / SQRT_2,
        1000.0 * source_over_load,
        farad,
        vec![bleeder(0, 1000.0)],
    ))
}

#[test]
fn four_output_points_of_the_ez40_data_sheet() {
    // EZ40 data sheet by way of tubeofile.com: two halves, 50 Hz, 50 µF, 90 mA. (V r.m.s., source Ω, sheet V, V by
    // the model with k = 8.41e-4 and with 188 Ω instead of the valve; the model's column computed from first
    // principles, its last row 357.62 V in a circuit simulator.)
    let points = [
        (250.0, 125.0, 260.0, 262.7, 262.3),
        (275.0, 175.0, 285.0, 285.0, 285.0),
        (300.0, 215.0, 310.0, 309.5, 309.6),
        (350.0, 300.0, 360.0, 357.6, 357.9),
    ];
    for (secondary_v, source_ohm, sheet_v, model_v, linear_v) in points {
        let with = |device: Device, ohm: f64| {
            let loads = vec![load(0, 0.09, sheet_v, CONSTANT)];
            idle(&circuit(RectifierCircuit::FullWave, device, secondary_v, ohm, 50e-6, loads)).nodes[0]
                .clone()
        };
        let valve = with(Device::Valve { perveance: 8.41e-4, type_name: None }, source_ohm);
        near("data sheet", valve.mean_v, sheet_v, 0.015);
        assert!((valve.mean_v - model_v).abs() < 0.3, "{} and not {model_v}", valve.mean_v);
        assert!(valve.ripple_vpp > 10.15 && valve.ripple_vpp < 10.65, "{}", valve.ripple_vpp);
        let straight = with(IDEAL, source_ohm + 188.0);
        assert!((straight.mean_v - linear_v).abs() < 0.3, "{} and not {linear_v}", straight.mean_v);
    }
}

#[test]
fn output_point_of_the_ez41_data_sheet() {
    // EZ41 data sheet by way of tubeofile.com: 2 × 250 V, 300 Ω, 32 µF, 60 mA → 260 V; drop 15.0 V at 60 mA.
    let device = Device::Valve { perveance: 0.06 / 15f64.powf(1.5), type_name: None };
    let loads = vec![load(0, 0.06, 260.0, CONSTANT)];
    let rail = idle(&circuit(RectifierCircuit::FullWave, device, 250.0, 300.0, 32e-6, loads)).nodes[0].mean_v;
    near("EZ41", rail, 260.0, 0.02);
}

#[test]
fn a_large_capacitor_meets_the_closed_form() {
    // tan θ − θ = π·Rs/(m·R), V = Vp·cos θ: solved here by bisection. The current ratios are the closed form's own
    // integrals, tabled (computed from first principles): Rs/R, full-wave r.m.s. and peak over Idc, half-wave r.m.s.
    let table = [
        (0.005, 2.579, 8.32, 3.261),
        (0.01, 2.306, 6.65, 2.920),
        (0.02, 2.065, 5.34, 2.624),
        (0.05, 1.794, 4.03, 2.294),
        (0.10, 1.622, 3.30, 2.091),
        (0.20, 1.478, 2.75, 1.926),
        (0.35, 1.382, 2.40, 1.821),
        (0.50, 1.330, 2.23, 1.766),
        (1.00, 1.249, 1.97, 1.686),
    ];
    let cosine = |right: f64| {
        let (mut low, mut high) = (0.0, PI / 2.0 - 1e-9);
        for _ in 0..200 {
            let middle = 0.5 * (low + high);
            if middle.tan() - middle < right { low = middle } else { high = middle }
        }
        low.cos()
    };
    for (ratio, rms, peak, half_wave_rms) in table {
        let full = ideal(RectifierCircuit::Bridge, ratio, 4000.0);
        near("full-wave mean", full.nodes[0].mean_v, 1000.0 * cosine(PI * ratio / 2.0), 1e-4);
        let direct_a = full.nodes[0].load_a;
        near("full-wave r.m.s.", full.winding_rms_a / direct_a, rms, 2e-3);
        near("full-wave peak", full.winding_peak_a / direct_a, peak, 3e-3);
        let half = ideal(RectifierCircuit::HalfWave, ratio, 4000.0);
        near("half-wave mean", half.nodes[0].mean_v, 1000.0 * cosine(PI * ratio), 3e-4);
        near("half-wave r.m.s.", half.winding_rms_a / half.nodes[0].load_a, half_wave_rms, 2e-3);
    }
}

#[test]
fn finite_capacitors_meet_the_capacitor_input_relations() {
    // Relations of the kind that O. H. Schade published (Proc. IRE, July 1943), computed from first principles; the
    // second and last but one rows also in a circuit simulator. (Rs/R, ωCR) → V/Vp, peak to peak/Vp, r.m.s. and peak
    // over Idc.
    use RectifierCircuit::{Bridge, HalfWave};
    let table = [
        (Bridge, 0.05, 5.0, 0.7829, 0.2994, 1.712, 3.72),
        (Bridge, 0.05, 10.0, 0.8167, 0.1640, 1.771, 3.95),
        (Bridge, 0.05, 20.0, 0.8281, 0.0843, 1.788, 4.01),
        (Bridge, 0.05, 40.0, 0.8311, 0.0424, 1.792, 4.03),
        (Bridge, 0.02, 20.0, 0.8935, 0.1017, 2.044, 5.25),
        (Bridge, 0.01, 50.0, 0.9345, 0.0458, 2.296, 6.61),
        (Bridge, 0.10, 10.0, 0.7445, 0.1342, 1.613, 3.27),
        (HalfWave, 0.05, 10.0, 0.7057, 0.3394, 2.257, 6.42),
        (HalfWave, 0.10, 10.0, 0.6217, 0.2844, 2.077, 5.43),
    ];
    for (wiring, ratio, omega_c_r, mean, ripple, rms, peak) in table {
        let found = ideal(wiring, ratio, omega_c_r);
        let direct_a = found.nodes[0].load_a;
        let what = format!("{wiring:?} Rs/R {ratio} ωCR {omega_c_r}");
        near(&what, found.nodes[0].mean_v / 1000.0, mean, 2e-4);
        near(&what, found.nodes[0].ripple_vpp / 1000.0, ripple, 2e-3);
        near(&what, found.winding_rms_a / direct_a, rms, 2e-3);
        near(&what, found.winding_peak_a / direct_a, peak, 3e-3);
    }
}

#[test]
fn without_any_resistance_the_discharge_meets_the_wave_again_where_theory_says() {
    // Transcendental equation of the exact discharge (computed from first principles): ωCR → lowest/peak.
    for (omega_c_r, lowest) in [(10.0, 0.7848), (20.0, 0.8774), (100.0, 0.9714)] {
        let node = &ideal(RectifierCircuit::Bridge, 0.0, omega_c_r).nodes[0];
        near("lowest", node.min_v / 1000.0, lowest, 1e-3);
        near("highest", node.max_v / 1000.0, 1.0, 1e-4);
        // A kink is seen to within a step: to the figure's last digit with finer ones.
        let farad = omega_c_r / (TAU * 50.0 * 1000.0);
        let loads = vec![bleeder(0, 1000.0)];
        let circuit = circuit(RectifierCircuit::Bridge, IDEAL, 1000.0 / SQRT_2, 0.0, farad, loads);
        let options = SolveOptions { steps: 2000, ..SolveOptions::default() };
        let fine = steady_state(&circuit, 230.0, Loading::Idle, &options).expect("a steady state");
        near("lowest", fine.nodes[0].min_v / 1000.0, lowest, 1.2e-4);
    }
    // Rs → 0 at ωCR = 10: peak to peak 0.215 of the peak, where the bound π/ωCR says 0.314.
    near("ripple", ideal(RectifierCircuit::Bridge, 0.0, 10.0).nodes[0].ripple_vpp, 215.2, 3e-3);
}

#[test]
fn handbook_rules_for_a_300_v_winding() {
    // Blencowe, valvewizard.co.uk: a bridge gives 1.4·V r.m.s. lightly loaded, so 441 to 462 V from a 300 V winding
    // that stands at 315 to 330 V unloaded, and about 1.3·300 = 390 V at full load (a source of 1.5 % of the load).
    let silicon = Device::Silicon { forward_v: 0.85, on_ohm: 0.05 };
    for (secondary_v, rail_v) in [(315.0, 441.0), (330.0, 462.0)] {
        let light = circuit(RectifierCircuit::Bridge, silicon.clone(), secondary_v, 30.0, 47e-6, vec![]);
        near("light load", solve(&light, Loading::Unloaded).nodes[0].mean_v, rail_v, 0.01);
    }
    let loads = vec![bleeder(0, 2000.0)];
    let full = circuit(RectifierCircuit::Bridge, IDEAL, 300.0, 0.015 * 2000.0, 220e-6, loads);
    near("full load", idle(&full).nodes[0].mean_v, 390.0, 0.005);
    // A published design's reading of Schade's figure: 0.85·√2 = 1.202·V r.m.s., at a source of 4 % of the load
    // (revistaantenna.com.br, linear supplies, part III).
    let loads = vec![bleeder(0, 2000.0)];
    let read = circuit(RectifierCircuit::Bridge, IDEAL, 300.0, 0.04 * 2000.0, 220e-6, loads);
    near("reading", idle(&read).nodes[0].mean_v, 1.202 * 300.0, 0.01);
}

#[test]
fn winding_currents_of_the_transformer_makers() {
    // atc-frost.com design notes: bridge with capacitor 1.8·Idc, each half of a centre-tapped winding 1.2·Idc,
    // half-wave 2.6·Idc; rounded rules, so within 8 % at a usual source resistance.
    let factor = |wiring, ratio| {
        let found = ideal(wiring, ratio, 40.0);
        found.winding_rms_a / found.nodes[0].load_a
    };
    near("bridge", factor(RectifierCircuit::Bridge, 0.05), 1.8, 0.02);
    near("centre-tapped half", factor(RectifierCircuit::FullWave, 0.05), 1.2, 0.08);
    near("half-wave", factor(RectifierCircuit::HalfWave, 0.02), 2.6, 0.02);
    let (bridge, half) = (factor(RectifierCircuit::Bridge, 0.05), factor(RectifierCircuit::FullWave, 0.05));
    near("one half over the whole", half, bridge / SQRT_2, 1e-6);
}

/// 300 V r.m.s., 4 kΩ, a choke input of `henry`.
fn choke_input(henry: f64, hertz: f64) -> SteadyState {
    let mut circuit = circuit(RectifierCircuit::Bridge, IDEAL, 300.0, 1e-3, 400e-6, vec![bleeder(0, 4000.0)]);
    circuit.frequency_hz = hertz;
    circuit.filter[0].series = SeriesPart::Choke { henry, ohm: 1e-3 };
    idle(&circuit)
}

#[test]
fn a_choke_input_gives_the_mean_down_to_its_critical_inductance() {
    // Mean of a full-wave rectified sine, 2√2/π; critical inductance of 4 kΩ: rule R/(3ω) = 4.244 H at 50 Hz and
    // 3.537 H at 60 Hz, exactly (all harmonics) ωL/R = 0.3307, 4.210 H at 50 Hz (computed from first principles).
    let mean = 300.0 * 2.0 * SQRT_2 / PI;
    near("ample choke", choke_input(20.0, 50.0).nodes[0].mean_v, mean, 3e-5);
    for hertz in [50.0, 60.0] {
        let critical = 0.3307 * 4000.0 / (TAU * hertz);
        let above = choke_input(1.01 * critical, hertz).nodes[0].mean_v / mean - 1.0;
        let below = choke_input(0.99 * critical, hertz).nodes[0].mean_v / mean - 1.0;
        assert!(above.abs() < 2e-5, "{hertz} Hz, just above: {above:e}");
        assert!(below > 3e-5, "{hertz} Hz, just below: {below:e}");
    }
    // Far below it the rail climbs towards the peak, 1.57 times the mean.
    let light = choke_input(0.02, 50.0).nodes[0].mean_v / mean;
    assert!(light > 1.3 && light < PI / 2.0, "{light}");
}

#[test]
fn ripple_stays_under_its_bound() {
    // Idc/(2fC) neglects the time of conduction: 100 mA on 47 µF, 21.28 V at 50 Hz and 17.73 V at 60 Hz.
    for (hertz, bound_v) in [(50.0, 21.28), (60.0, 17.73)] {
        let loads = vec![load(0, 0.1, 400.0, CONSTANT)];
        let mut circuit = circuit(RectifierCircuit::Bridge, IDEAL, 300.0, 20.0, 47e-6, loads);
        circuit.frequency_hz = hertz;
        let ripple_vpp = idle(&circuit).nodes[0].ripple_vpp;
        assert!(ripple_vpp < bound_v && ripple_vpp > 0.7 * bound_v, "{ripple_vpp} under {bound_v}");
    }
}

#[test]
fn a_flat_topped_mains_lowers_the_rail_with_its_peak() {
    // Third +2 %, fifth −2 % of the fundamental: crest factor 1.3571 (computed from first principles). With nothing
    // drawing the rail is the peak; loaded, a flat top lets the current flow longer, so it falls by less.
    let mut circuit = amplifier();
    circuit.device = IDEAL;
    circuit.loads.retain(|load| matches!(load, Load::Law { .. }));
    let sine = (solve(&circuit, Loading::Unloaded), idle(&circuit));
    circuit.wave.harmonics = vec![(3, 0.02), (5, -0.02)];
    let flat = (solve(&circuit, Loading::Unloaded), idle(&circuit));
    near("unloaded", flat.0.nodes[0].mean_v / sine.0.nodes[0].mean_v, 1.3571 / SQRT_2, 1e-4);
    near("crest factor", flat.1.crest_factor, 1.3571, 1e-4);
    let fell = 1.0 - flat.1.nodes[0].mean_v / sine.1.nodes[0].mean_v;
    assert!(fell > 0.01 && fell < 0.04, "{fell}");
}

#[test]
fn a_bridge_device_stands_one_winding_and_a_centre_tapped_one_both_halves() {
    // Common practice, no source: peak inverse Vp in a bridge, 2·Vp else; the dropper takes no share of it.
    let silicon = Device::Silicon { forward_v: 0.85, on_ohm: 0.05 };
    let peak_v = 350.0 * SQRT_2;
    for (wiring, times, dropper) in [
        (RectifierCircuit::Bridge, 1.0, None),
        (RectifierCircuit::FullWave, 2.0, None),
        (RectifierCircuit::FullWave, 2.0, Some(Dropper::ReturnZener { zener_v: 40.0, zener_ohm: 0.0 })),
    ] {
        let mut circuit = reservoir(wiring, silicon.clone(), vec![load(0, 0.02, 450.0, 1.0)]);
        circuit.dropper = dropper;
        near("inverse", idle(&circuit).inverse_peak_v, times * peak_v, 0.025);
    }
}
