//! The solver against SciPy's stiff integrators on the full circuit equations: `tests/reference/supply.py` is written
//! for itself, shares no method with the solver, and its figures are kept in `tests/reference/reference.json`. Three of
//! them are computed again here, all by `tests/slow/run reference`.

#[path = "support/peers.rs"]
mod peers;

use std::process::Command;

use railtide::supply::{
    Capacitor, Circuit, Device, Doubtful, Dropper, Load, Loading, MainsWave, RectifierCircuit, Section,
    SeriesPart, SolveOptions, Transformer, Winding, steady_state,
};
use serde::Deserialize;

#[derive(Deserialize)]
struct Row {
    case: Case,
    result: Figures,
}

#[derive(Deserialize)]
struct Case {
    name: String,
    wiring: String,
    device: CaseDevice,
    filter: Vec<CaseSection>,
    loads: Vec<CaseLoad>,
    secondary_v: f64,
    source_ohm: f64,
    leakage_h: f64,
    hz: f64,
    harmonics: Vec<(u32, f64)>,
    dropper: Option<CaseDropper>,
    doubler_f: Option<[f64; 2]>,
    mains_v: f64,
}

#[derive(Deserialize)]
#[serde(untagged)]
enum CaseDevice {
    Silicon { forward_v: f64, on_ohm: f64 },
    Valve { perveance: f64 },
}

#[derive(Deserialize)]
struct CaseSection {
    farad: Option<f64>,
    #[serde(default)]
    esr_ohm: f64,
    series_ohm: Option<f64>,
    choke_h: Option<f64>,
    #[serde(default)]
    choke_ohm: f64,
}

#[derive(Deserialize)]
#[serde(untagged)]
enum CaseLoad {
    Bleeder { node: usize, bleeder_ohm: f64 },
    Law { node: usize, idle_a: f64, at_v: f64, law: f64 },
}

#[derive(Deserialize)]
#[serde(tag = "kind", rename_all = "kebab-case")]
enum CaseDropper {
    ReturnMosfet { zener_v: f64, threshold_v: f64, k_a_per_v2: f64 },
    ReturnZener { zener_v: f64, zener_ohm: f64 },
    ReturnResistor { ohm: f64 },
    LineResistor { ohm: f64 },
}

#[derive(Deserialize)]
struct Figures {
    nodes: Vec<NodeFigures>,
    winding_rms_a: f64,
    winding_peak_a: f64,
    diode_mean_a: f64,
    diode_rms_a: f64,
    diode_peak_a: f64,
    inverse_peak_v: f64,
    winding_loss_w: f64,
    dropper: Option<DropperFigures>,
}

#[derive(Deserialize)]
struct NodeFigures {
    mean_v: f64,
    ripple_vpp: f64,
}

#[derive(Deserialize)]
struct DropperFigures {
    mean_v: f64,
    loss_w: f64,
}

impl Case {
    fn circuit(&self) -> Circuit {
        let rectifier = match self.wiring.as_str() {
            "bridge" => RectifierCircuit::Bridge,
            "full-wave" => RectifierCircuit::FullWave,
            "half-wave" => RectifierCircuit::HalfWave,
            "doubler" => RectifierCircuit::Doubler,
            other => panic!("no wiring is called {other}"),
        };
        let centre_tapped = rectifier == RectifierCircuit::FullWave;
        let exact = |value| Doubtful { value, half_width: 0.0 };
        Circuit {
            amplifier: self.name.clone(),
            frequency_hz: self.hz,
            wave: MainsWave { harmonics: self.harmonics.clone(), known: true },
            transformer: Transformer {
                wound_for_v: 230.0,
                wound_for_hz: self.hz,
                taps_v: vec![230.0],
                secondary_v: exact(self.secondary_v),
                winding: if centre_tapped { Winding::CentreTapped } else { Winding::Single },
                source_ohm: exact(self.source_ohm),
                leakage_h: self.leakage_h,
            },
            rectifier,
            device: match self.device {
                CaseDevice::Silicon { forward_v, on_ohm } => Device::Silicon { forward_v, on_ohm },
                CaseDevice::Valve { perveance } => Device::Valve { perveance, type_name: None },
            },
            doubler_f: self.doubler_f,
            filter: self.filter.iter().enumerate().map(|(k, section)| section.section(k)).collect(),
            loads: self.loads.iter().map(CaseLoad::load).collect(),
            dropper: self.dropper.as_ref().map(CaseDropper::dropper),
            heater: None,
        }
    }
}

impl CaseSection {
    fn section(&self, k: usize) -> Section {
        let series = match (self.choke_h, self.series_ohm) {
            (Some(henry), _) => SeriesPart::Choke { henry, ohm: self.choke_ohm },
            (None, Some(ohm)) => SeriesPart::Resistor(ohm),
            (None, None) => SeriesPart::None,
        };
        let capacitor = self.farad.map(|farad| Capacitor {
            farad,
            rated_v: None,
            esr_ohm: self.esr_ohm,
            in_series: 1,
            balance_ohm: None,
        });
        Section { node: format!("node {k}"), series, capacitor }
    }
}

impl CaseLoad {
    fn load(&self) -> Load {
        match *self {
            CaseLoad::Bleeder { node, bleeder_ohm } => Load::Bleeder { node, ohm: bleeder_ohm },
            CaseLoad::Law { node, idle_a, at_v, law } => Load::Law { node, idle_a, full_a: None, at_v, law },
        }
    }
}

impl CaseDropper {
    fn dropper(&self) -> Dropper {
        match *self {
            CaseDropper::ReturnMosfet { zener_v, threshold_v, k_a_per_v2 } => {
                Dropper::ReturnMosfet { zener_v, threshold_v, k_a_per_v2, half_width_v: 0.0 }
            }
            CaseDropper::ReturnZener { zener_v, zener_ohm } => Dropper::ReturnZener { zener_v, zener_ohm },
            CaseDropper::ReturnResistor { ohm } => Dropper::ReturnResistor(ohm),
            CaseDropper::LineResistor { ohm } => Dropper::LineResistor(ohm),
        }
    }
}

fn rows() -> Vec<Row> {
    serde_json::from_str(include_str!("reference/reference.json")).expect("the kept figures")
}

#[test]
fn the_reference_covers_every_wiring_device_and_dropper() {
    let rows = rows();
    let count = |fits: &dyn Fn(&Case) -> bool| rows.iter().filter(|row| fits(&row.case)).count();
    assert!(rows.len() >= 40, "{} circuits", rows.len());
    for wiring in ["bridge", "full-wave", "half-wave", "doubler"] {
        assert!(count(&|case| case.wiring == wiring) >= 20, "{wiring}");
    }
    assert!(count(&|case| matches!(case.device, CaseDevice::Valve { .. })) >= 10);
    assert!(count(&|case| case.leakage_h > 0.0) >= 10);
    assert!(count(&|case| case.filter[0].choke_h.is_some()) >= 10);
    let of = |kind: fn(&CaseDropper) -> bool| count(&|case| case.dropper.as_ref().is_some_and(kind));
    assert!(of(|d| matches!(d, CaseDropper::ReturnMosfet { .. })) >= 10);
    assert!(of(|d| matches!(d, CaseDropper::ReturnZener { .. })) >= 10);
    assert!(of(|d| matches!(d, CaseDropper::ReturnResistor { .. })) >= 10);
    assert!(of(|d| matches!(d, CaseDropper::LineResistor { .. })) >= 10);
}

#[test]
fn every_circuit_agrees_with_the_reference() {
    // Means within 0.1 %, ripple, r.m.s. and peaks within 1 %, losses within 1 %.
    const MEAN: f64 = 1e-3;
    const SHAPE: f64 = 1e-2;
    let mut wrong = Vec::new();
    for Row { case, result: want } in rows() {
        let got = match steady_state(&case.circuit(), case.mains_v, Loading::Idle, &SolveOptions::default()) {
            Ok(got) => got,
            Err(why) => {
                wrong.push(format!("{}: {why}", case.name));
                continue;
            }
        };
        let mut check = |what: String, got: f64, want: f64, within: f64| {
            if (got - want).abs() > within * want.abs() {
                wrong.push(format!(
                    "{}: {what} {got} and not {want} ({:+.3} %)",
                    case.name,
                    100.0 * (got / want - 1.0)
                ));
            }
        };
        assert_eq!(got.nodes.len(), want.nodes.len());
        for (got, want) in got.nodes.iter().zip(&want.nodes) {
            check(format!("{} mean", got.node), got.mean_v, want.mean_v, MEAN);
            check(format!("{} ripple", got.node), got.ripple_vpp, want.ripple_vpp, SHAPE);
        }
        check("winding r.m.s.".to_owned(), got.winding_rms_a, want.winding_rms_a, SHAPE);
        check("winding peak".to_owned(), got.winding_peak_a, want.winding_peak_a, SHAPE);
        check("diode mean".to_owned(), got.diode_mean_a, want.diode_mean_a, MEAN);
        check("diode r.m.s.".to_owned(), got.diode_rms_a, want.diode_rms_a, SHAPE);
        check("diode peak".to_owned(), got.diode_peak_a, want.diode_peak_a, SHAPE);
        check("inverse peak".to_owned(), got.inverse_peak_v, want.inverse_peak_v, SHAPE);
        check("winding loss".to_owned(), got.winding_loss_w, want.winding_loss_w, SHAPE);
        assert_eq!(got.dropper.is_some(), want.dropper.is_some(), "{}", case.name);
        if let (Some(got), Some(want)) = (got.dropper, want.dropper) {
            check("dropper mean".to_owned(), got.mean_v, want.mean_v, MEAN);
            check("dropper loss".to_owned(), got.loss_w, want.loss_w, SHAPE);
        }
    }
    assert!(wrong.is_empty(), "{} figures are off:\n{}", wrong.len(), wrong.join("\n"));
}

#[test]
fn three_figures_of_the_reference_come_out_again() {
    let Some(python) = peers::python() else { return };
    let script = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/reference/reference.py");
    let output =
        Command::new(python).args(["-B", script, "--check", "--cases", "3"]).output().expect("it starts");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    // One line a case: what was asked for was done.
    assert_eq!(String::from_utf8_lossy(&output.stderr).lines().count(), 3);
}
