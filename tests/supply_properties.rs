//! What holds for every supply, over random ones: a steady state is found; power and charge are conserved; the rail
//! rises with mains; and everything scales where nothing has a voltage of its own. Physics is the oracle.

use proptest::prelude::*;
use railtide::supply::{
    Capacitor, Circuit, Device, Doubtful, Dropper, Grid, Load, Loading, MainsWave, Projector,
    RectifierCircuit, Section, SeriesPart, SolveOptions, SteadyState, Transformer, Winding, steady_state,
};

/// One section after the first.
#[derive(Clone, Debug)]
struct Stretch {
    choke: bool,
    /// Drop across the series part at the load's current, part of the rail.
    drop: f64,
    henry: f64,
    farad: f64,
    esr_ohm: f64,
    /// Load at this node as a part of the main load.
    share: f64,
}

fn stretch() -> impl Strategy<Value = Stretch> {
    (any::<bool>(), 0.002..0.08, 1.0..20.0, 4e-6..300e-6, prop_oneof![Just(0.0), 0.0..3.0], 0.0..0.5f64)
        .prop_map(|(choke, drop, henry, farad, esr_ohm, share)| Stretch {
            choke,
            drop,
            henry,
            farad,
            esr_ohm,
            share,
        })
}

fn device() -> impl Strategy<Value = Device> {
    prop_oneof![
        (0.0..1.5, 0.0..2.0).prop_map(|(forward_v, on_ohm)| Device::Silicon { forward_v, on_ohm }),
        (2e-4..5e-3).prop_map(|perveance| Device::Valve { perveance, type_name: None }),
    ]
}

/// A dropper by its kind and the part of the rail that it takes.
fn dropper() -> impl Strategy<Value = (u8, f64)> {
    (0..8u8, 0.03..0.15)
}

fn wave() -> impl Strategy<Value = MainsWave> {
    let harmonics = prop_oneof![
        3 => Just(Vec::new()),
        2 => (-0.03..0.03, -0.04..0.02).prop_map(|(third, fifth)| vec![(3, third), (5, fifth)]),
        1 => (-0.01..0.01, -0.03..0.03).prop_map(|(second, third)| vec![(2, second), (3, third)]),
    ];
    harmonics.prop_map(|harmonics| MainsWave { harmonics, known: true })
}

/// A supply as someone might have built it, with its load in proportion to what it can give.
fn supply() -> impl Strategy<Value = Circuit> {
    let wiring = prop_oneof![
        Just(RectifierCircuit::Bridge),
        Just(RectifierCircuit::FullWave),
        Just(RectifierCircuit::HalfWave),
        Just(RectifierCircuit::Doubler),
    ];
    let source = (100.0..800.0, 0.002..0.15, prop_oneof![Just(0.0), 1e-4..10e-3]);
    let input = (0..4u8, 1.0..20.0, 0.01..0.06, 8e-6..470e-6, prop_oneof![Just(0.0), 0.0..2.0f64]);
    let load = (0.004..0.5, prop_oneof![Just(0.0), Just(1.0), Just(1.5), 0.0..6.0], 50e3..1e6f64);
    let rest = (device(), dropper(), wave(), prop_oneof![Just(50.0), Just(60.0)]);
    (wiring, source, input, load, rest, prop::collection::vec(stretch(), 0..4)).prop_map(
        |(wiring, (secondary_v, ratio, leakage_h), input, (load_a, law, bleeder_ohm), rest, stretches)| {
            let (device, (dropper, dropped), wave, frequency_hz) = rest;
            let doubler = wiring == RectifierCircuit::Doubler;
            let rail_v = secondary_v * if doubler { 2.4 } else { 1.2 };
            let load_ohm = rail_v / load_a;
            // A doubler and a half-wave supply pass all their charge in fewer pulses.
            let harder = match wiring {
                RectifierCircuit::Doubler => 0.15,
                RectifierCircuit::HalfWave => 0.4,
                _ => 1.0,
            };
            let (kind, henry, drop, farad, esr_ohm) = input;
            let series = match kind {
                _ if doubler => SeriesPart::None,
                0 => SeriesPart::Choke { henry, ohm: drop * load_ohm },
                1 => SeriesPart::Resistor(0.3 * drop * load_ohm),
                _ => SeriesPart::None,
            };
            let part =
                |farad, esr_ohm| Capacitor { farad, rated_v: None, esr_ohm, in_series: 1, balance_ohm: None };
            let first = (!doubler).then(|| part(farad, esr_ohm));
            let mut filter = vec![Section { node: "n0".to_owned(), series, capacitor: first }];
            let mut loads = vec![
                Load::Law { node: 0, idle_a: load_a, full_a: Some(1.3 * load_a), at_v: rail_v, law },
                Load::Bleeder { node: 0, ohm: bleeder_ohm },
            ];
            for (k, stretch) in stretches.iter().enumerate() {
                let ohm = stretch.drop * load_ohm;
                let series = if stretch.choke {
                    SeriesPart::Choke { henry: stretch.henry, ohm }
                } else {
                    SeriesPart::Resistor(ohm)
                };
                let capacitor = Some(part(stretch.farad, stretch.esr_ohm));
                filter.push(Section { node: format!("n{}", k + 1), series, capacitor });
                let idle_a = stretch.share * load_a;
                loads.push(Load::Law { node: k + 1, idle_a, full_a: Some(idle_a), at_v: rail_v, law: 1.0 });
            }
            let zener_v = dropped * rail_v;
            let dropper = match dropper {
                0 => Some(Dropper::ReturnMosfet {
                    zener_v,
                    threshold_v: 3.0,
                    k_a_per_v2: 1.0,
                    half_width_v: 2.0,
                }),
                1 => Some(Dropper::ReturnZener { zener_v, zener_ohm: 0.1 * dropped * load_ohm }),
                2 => Some(Dropper::ReturnResistor(0.3 * dropped * load_ohm)),
                3 if filter.len() > 1 => Some(Dropper::LineResistor(dropped * load_ohm)),
                _ => None,
            };
            let centre_tapped = wiring == RectifierCircuit::FullWave;
            let exact = |value| Doubtful { value, half_width: 0.0 };
            Circuit {
                amplifier: "random".to_owned(),
                frequency_hz,
                wave,
                transformer: Transformer {
                    wound_for_v: 230.0,
                    wound_for_hz: frequency_hz,
                    taps_v: vec![230.0],
                    secondary_v: exact(secondary_v),
                    winding: if centre_tapped { Winding::CentreTapped } else { Winding::Single },
                    source_ohm: exact(ratio * harder * load_ohm),
                    leakage_h,
                },
                rectifier: wiring,
                device,
                doubler_f: doubler.then_some([farad, 1.1 * farad]),
                filter,
                loads,
                dropper,
                heater: None,
            }
        },
    )
}

fn solve(circuit: &Circuit, mains_v: f64, loading: Loading) -> SteadyState {
    steady_state(circuit, mains_v, loading, &SolveOptions::default()).unwrap_or_else(|why| panic!("{why}"))
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 192, ..ProptestConfig::default() })]

    #[test]
    fn power_and_charge_are_conserved(circuit in supply(), mains_v in 190.0..260.0f64) {
        for loading in Loading::ALL {
            let found = solve(&circuit, mains_v, loading);
            let power = found.power;
            prop_assert!(found.residual < 1e-6, "residual {:e}", found.residual);
            prop_assert!(
                power.missing_w().abs() <= 1e-3 * power.source_w,
                "{} of {} W missing, {}", power.missing_w(), power.source_w, loading.word()
            );
            // Each series part carries in a period what everything behind it draws; what is left of the residual shows
            // as charge on the capacitors.
            let whole: f64 = found.nodes.iter().map(|node| node.load_a).sum();
            for k in 0..found.nodes.len() {
                let behind: f64 = found.nodes[k..].iter().map(|node| node.load_a).sum();
                let error = (found.nodes[k].series_a - behind).abs();
                prop_assert!(error <= 1e-4 * whole, "node {k}: {} A in, {behind} A out", found.nodes[k].series_a);
            }
            for node in &found.nodes {
                let rounding = 1e-9 * node.mean_v;
                prop_assert!(node.min_v <= node.mean_v + rounding && node.mean_v <= node.max_v + rounding);
            }
        }
    }

    #[test]
    fn the_rail_rises_with_mains(circuit in supply(), mains_v in 190.0..255.0f64, more in 0.5..10.0f64) {
        for loading in Loading::ALL {
            let (low, high) = (solve(&circuit, mains_v, loading), solve(&circuit, mains_v + more, loading));
            prop_assert!(low.nodes[0].mean_v < high.nodes[0].mean_v, "{} then {}", low.nodes[0].mean_v, high.nodes[0].mean_v);
            prop_assert!(low.inverse_peak_v < high.inverse_peak_v * (1.0 + 1e-3));
        }
    }

    #[test]
    fn everything_scales_where_nothing_has_a_voltage_of_its_own(circuit in supply(), times in 0.3..3.0f64) {
        let mut circuit = circuit;
        circuit.device = Device::Silicon { forward_v: 0.0, on_ohm: 0.3 };
        if matches!(circuit.dropper, Some(Dropper::ReturnMosfet { .. } | Dropper::ReturnZener { .. })) {
            circuit.dropper = None;
        }
        for load in &mut circuit.loads {
            if let Load::Law { law, .. } = load {
                *law = 1.0;
            }
        }
        let (one, other) = (solve(&circuit, 230.0, Loading::Idle), solve(&circuit, 230.0 * times, Loading::Idle));
        let pairs = [
            (one.nodes[0].mean_v, other.nodes[0].mean_v),
            (one.nodes[0].ripple_vpp, other.nodes[0].ripple_vpp),
            (one.winding_rms_a, other.winding_rms_a),
            (one.diode_peak_a, other.diode_peak_a),
            (one.inverse_peak_v, other.inverse_peak_v),
        ];
        for (a, b) in pairs {
            prop_assert!((b / a / times - 1.0).abs() < 1e-5, "{a} times {times} and not {b}");
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 12, ..ProptestConfig::default() })]

    #[test]
    fn every_curve_can_be_drawn_and_lies_where_the_solutions_do(circuit in supply(), mains_v in 140.0..320.0f64) {
        let options = SolveOptions::default();
        let projector = Projector::from_circuit(&circuit, Grid::about(230.0), &options);
        let projector = projector.unwrap_or_else(|why| panic!("{why}"));
        for loading in Loading::ALL {
            let curve = projector.curve("n0", loading).expect("full output is known as well");
            let (rail_v, exact_v) = (curve.rail_v(mains_v), solve(&circuit, mains_v, loading).nodes[0].mean_v);
            // A fiftieth of a per cent where the rail bends gently; a choke input at its critical current has a kink.
            prop_assert!((rail_v / exact_v - 1.0).abs() < 2e-3, "{} at {mains_v} V: {rail_v} and not {exact_v}", loading.word());
            prop_assert!(curve.model_u(mains_v) >= 0.0 && curve.slope(mains_v) > 0.0);
        }
    }
}
