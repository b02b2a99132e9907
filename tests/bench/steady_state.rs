//! One steady state against SciPy's stiff integrator on the same circuit in the same run, the three curves of a whole
//! amplifier, and one projection: `cargo bench --bench steady_state` (`tests/peers/setup` installs SciPy).
//!
//! Goals: a thousand times SciPy's speed at the same accuracy, 100 ms for the three curves, 100 ns for a projection.

#![expect(clippy::print_stdout, reason = "a benchmark reports")]

#[path = "../support/peers.rs"]
mod peers;

use std::hint::black_box;
use std::process::Command;
use std::time::{Duration, Instant};

use railtide::quantity::Uncertain;
use railtide::supply::{
    Capacitor, Circuit, Device, Doubtful, Grid, Load, Loading, MainsWave, Projector, RectifierCircuit,
    Section, SeriesPart, SolveOptions, Transformer, Winding, steady_state, sweep,
};

/// Solutions in one timed run.
const TIMES: u32 = 200;

/// Steps in half a period with which the solver is about as exact as SciPy at rtol 1e-4.
const COARSE: usize = 24;

/// The median time of five runs of `work`.
fn median(mut work: impl FnMut()) -> Duration {
    let mut times: Vec<Duration> = (0..5)
        .map(|_| {
            let start = Instant::now();
            work();
            start.elapsed()
        })
        .collect();
    times.sort();
    times[2]
}

fn section(node: &str, series: SeriesPart, farad: f64) -> Section {
    let capacitor = Some(Capacitor { farad, rated_v: None, esr_ohm: 0.0, in_series: 1, balance_ohm: None });
    Section { node: node.to_owned(), series, capacitor }
}

/// The reference's "bridge, one capacitor, resistor".
fn one_capacitor() -> Circuit {
    Circuit {
        amplifier: "bench".to_owned(),
        frequency_hz: 50.0,
        wave: MainsWave::default(),
        transformer: Transformer {
            wound_for_v: 230.0,
            wound_for_hz: 50.0,
            taps_v: vec![230.0],
            secondary_v: Doubtful { value: 350.0, half_width: 7.0 },
            winding: Winding::Single,
            source_ohm: Doubtful { value: 38.0, half_width: 3.8 },
            leakage_h: 0.0,
        },
        rectifier: RectifierCircuit::Bridge,
        device: Device::Silicon { forward_v: 0.85, on_ohm: 0.05 },
        doubler_f: None,
        filter: vec![section("reservoir", SeriesPart::None, 100e-6)],
        loads: vec![Load::Bleeder { node: 0, ohm: 3000.0 }],
        dropper: None,
        heater: None,
    }
}

/// Three nodes, a choke, output valves of law 1.5.
fn amplifier() -> Circuit {
    let mut circuit = one_capacitor();
    circuit.filter.push(section("screens", SeriesPart::Choke { henry: 5.0, ohm: 120.0 }, 47e-6));
    circuit.filter.push(section("preamp", SeriesPart::Resistor(4700.0), 22e-6));
    let law = |node, idle_a, full_a, at_v, law| Load::Law { node, idle_a, full_a: Some(full_a), at_v, law };
    circuit.loads = vec![
        law(0, 0.16, 0.28, 450.0, 1.5),
        law(1, 0.02, 0.03, 445.0, 1.0),
        law(2, 0.01, 0.01, 390.0, 1.0),
        Load::Bleeder { node: 0, ohm: 220e3 },
    ];
    circuit
}

/// Seconds and first mean of the reference's case at an integrator's tolerance; the median of five by time. `None`
/// where Python with SciPy is missing.
fn reference(rtol: &str) -> Option<(f64, f64)> {
    let script = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/reference/reference.py");
    let mut runs = Vec::new();
    for _ in 0..5 {
        let out = Command::new(peers::python()?)
            .args(["-B", script, "--time", "bridge, one capacitor, resistor", "--rtol", rtol])
            .output()
            .expect("Python starts");
        assert!(out.status.success(), "{}", String::from_utf8_lossy(&out.stderr));
        let row: serde_json::Value = serde_json::from_slice(&out.stdout).expect("a line of JSON");
        runs.push((row["seconds"].as_f64().expect("seconds"), row["mean_v"].as_f64().expect("a mean")));
    }
    runs.sort_by(|a, b| a.0.total_cmp(&b.0));
    Some(runs[2])
}

/// One steady state from nothing, ours and the reference's, each pair about equally exact.
fn one_steady_state() {
    let circuit = one_capacitor();
    let exact = reference("1e-9");
    let off = |v: f64| {
        exact.map_or(String::new(), |(_, exact_v)| {
            format!("   mean off by {:.5} %", 100.0 * (v / exact_v - 1.0).abs())
        })
    };
    println!("one steady state, one capacitor, from nothing");
    for (steps, rtol) in [(COARSE, "1e-4"), (SolveOptions::default().steps, "1e-9")] {
        let options = SolveOptions { steps, ..SolveOptions::default() };
        let mut mean_v = 0.0;
        let ours = median(|| {
            for _ in 0..TIMES {
                let found = steady_state(black_box(&circuit), 230.0, Loading::Idle, &options);
                mean_v = found.expect("a steady state").nodes[0].mean_v;
            }
        }) / TIMES;
        println!("  railtide, {steps:>3} steps {:>10.1} µs{}", ours.as_secs_f64() * 1e6, off(mean_v));
        let theirs = if rtol == "1e-9" { exact } else { reference(rtol) };
        if let Some((seconds, v)) = theirs {
            let times = seconds / ours.as_secs_f64();
            println!(
                "  SciPy, rtol {rtol}    {:>10.1} µs{}   {times:.0} times as long",
                seconds * 1e6,
                off(v)
            );
        }
    }
}

fn main() {
    let options = SolveOptions::default();
    one_steady_state();
    let circuit = amplifier();
    let mains_v: Vec<f64> = (0..91).map(|v| 185.0 + f64::from(v)).collect();
    let curves = median(|| {
        for loading in Loading::ALL {
            black_box(sweep(&circuit, loading, &mains_v, &options).expect("a sweep"));
        }
    });
    println!("three curves, 3 × 91   {:>8.1} ms", curves.as_secs_f64() * 1e3);

    let grid = Grid::about(230.0);
    let projector = || Projector::from_circuit(&circuit, grid, &options).expect("curves");
    let made = median(|| drop(black_box(projector())));
    println!("a whole projector      {:>8.1} ms, doubts and all", made.as_secs_f64() * 1e3);

    const PROJECTIONS: u32 = 1_000_000;
    let projector = projector();
    let curve = projector.curve("screens", Loading::Idle).expect("a curve");
    let all = median(|| {
        for n in 0..PROJECTIONS {
            let mains = Uncertain::new(200.0 + f64::from(n % 600) * 0.1, 0.5);
            black_box(curve.project(black_box(mains)));
        }
    });
    println!("one projection         {:>8.1} ns", all.as_nanos() as f64 / f64::from(PROJECTIONS));
}
