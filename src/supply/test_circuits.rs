//! Circuits that this room's tests share.

use super::{
    Capacitor, Circuit, Device, Doubtful, Dropper, Heater, Load, Loading, MainsWave, RectifierCircuit,
    Section, SeriesPart, SolveOptions, SteadyState, Transformer, Winding, steady_state,
};

/// A law of constant current.
pub(super) const CONSTANT: f64 = 0.0;

/// A device without drop.
pub(super) const IDEAL: Device = Device::Silicon { forward_v: 0.0, on_ohm: 0.0 };

pub(super) fn bleeder(node: usize, ohm: f64) -> Load {
    Load::Bleeder { node, ohm }
}

/// A load whose full current isn't known.
pub(super) fn load(node: usize, idle_a: f64, at_v: f64, law: f64) -> Load {
    Load::Law { node, idle_a, full_a: None, at_v, law }
}

pub(super) fn capacitor(farad: f64) -> Capacitor {
    Capacitor { farad, rated_v: None, esr_ohm: 0.0, in_series: 1, balance_ohm: None }
}

/// One section, 50 Hz, wound for 230 V; a doubler gets two capacitors of twice `farad`.
pub(super) fn circuit(
    rectifier: RectifierCircuit,
    device: Device,
    secondary_v: f64,
    source_ohm: f64,
    farad: f64,
    loads: Vec<Load>,
) -> Circuit {
    let doubler = rectifier == RectifierCircuit::Doubler;
    let winding =
        if rectifier == RectifierCircuit::FullWave { Winding::CentreTapped } else { Winding::Single };
    let reservoir = (!doubler).then(|| capacitor(farad));
    Circuit {
        amplifier: "hall".to_owned(),
        frequency_hz: 50.0,
        wave: MainsWave::default(),
        transformer: Transformer {
            wound_for_v: 230.0,
            wound_for_hz: 50.0,
            taps_v: vec![230.0],
            secondary_v: Doubtful { value: secondary_v, half_width: 0.0 },
            winding,
            source_ohm: Doubtful { value: source_ohm, half_width: 0.0 },
            leakage_h: 0.0,
        },
        rectifier,
        device,
        doubler_f: doubler.then_some([2.0 * farad; 2]),
        filter: vec![Section {
            node: "reservoir".to_owned(),
            series: SeriesPart::None,
            capacitor: reservoir,
        }],
        loads,
        dropper: None,
        heater: None,
    }
}

/// 350 V, 38 Ω, 100 µF; a doubler from half of that.
pub(super) fn reservoir(rectifier: RectifierCircuit, device: Device, loads: Vec<Load>) -> Circuit {
    let secondary_v = if rectifier == RectifierCircuit::Doubler { 175.0 } else { 350.0 };
    circuit(rectifier, device, secondary_v, 38.0, 100e-6, loads)
}

/// A whole amplifier: bridge, three nodes, choke and resistor, output valves of law 1.5, a bleeder.
pub(super) fn amplifier() -> Circuit {
    let mut circuit = reservoir(
        RectifierCircuit::Bridge,
        Device::Silicon { forward_v: 0.85, on_ohm: 0.05 },
        vec![
            Load::Law { node: 0, idle_a: 0.16, full_a: Some(0.28), at_v: 450.0, law: 1.5 },
            Load::Law { node: 1, idle_a: 0.02, full_a: Some(0.03), at_v: 445.0, law: 1.0 },
            Load::Law { node: 2, idle_a: 0.01, full_a: Some(0.01), at_v: 390.0, law: 1.0 },
            bleeder(0, 220e3),
        ],
    );
    circuit.filter.push(Section {
        node: "screens".to_owned(),
        series: SeriesPart::Choke { henry: 5.0, ohm: 120.0 },
        capacitor: Some(capacitor(47e-6)),
    });
    circuit.filter.push(Section {
        node: "preamp".to_owned(),
        series: SeriesPart::Resistor(4700.0),
        capacitor: Some(Capacitor { esr_ohm: 0.8, ..capacitor(22e-6) }),
    });
    circuit.heater = Some(Heater { nominal_v: 6.3, tolerance_pct: 10.0, per_mains_v: 6.3 / 230.0 });
    circuit
}

/// The amplifier in every wiring, with every device and every dropper.
pub(super) fn all() -> Vec<(String, Circuit)> {
    let devices = [
        Device::Silicon { forward_v: 0.85, on_ohm: 0.05 },
        Device::Valve { perveance: 3.2e-3, type_name: None },
    ];
    let droppers = [
        None,
        Some(Dropper::ReturnMosfet { zener_v: 36.0, threshold_v: 3.5, k_a_per_v2: 1.0, half_width_v: 2.0 }),
        Some(Dropper::ReturnZener { zener_v: 39.0, zener_ohm: 8.0 }),
        Some(Dropper::ReturnResistor(60.0)),
        Some(Dropper::LineResistor(150.0)),
    ];
    let wirings = [
        RectifierCircuit::Bridge,
        RectifierCircuit::FullWave,
        RectifierCircuit::HalfWave,
        RectifierCircuit::Doubler,
    ];
    let mut all = Vec::new();
    for wiring in wirings {
        for device in &devices {
            for dropper in &droppers {
                let mut circuit = amplifier();
                let plain = reservoir(wiring, device.clone(), Vec::new());
                circuit.rectifier = wiring;
                circuit.device = device.clone();
                circuit.dropper = dropper.clone();
                circuit.transformer = plain.transformer;
                circuit.doubler_f = plain.doubler_f;
                circuit.filter[0] = plain.filter[0].clone();
                let name = format!("{wiring:?} {device:?} {dropper:?}");
                if wiring != RectifierCircuit::Doubler {
                    let mut choke = circuit.clone();
                    choke.filter[0].series = SeriesPart::Choke { henry: 5.0, ohm: 90.0 };
                    choke.transformer.leakage_h = 4e-3;
                    all.push((format!("{name} choke input"), choke));
                }
                all.push((name, circuit));
            }
        }
    }
    all
}

pub(super) fn solve(circuit: &Circuit, loading: Loading) -> SteadyState {
    steady_state(circuit, circuit.transformer.wound_for_v, loading, &SolveOptions::default())
        .expect("a steady state")
}

pub(super) fn idle(circuit: &Circuit) -> SteadyState {
    solve(circuit, Loading::Idle)
}

#[track_caller]
pub(super) fn near(what: &str, got: f64, want: f64, relative: f64) {
    assert!((got / want - 1.0).abs() <= relative, "{what}: {got} and not {want} within {relative:e}");
}
