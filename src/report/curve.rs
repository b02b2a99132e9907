//! The rail curves of one amplifier: mains to rails for each loading, with what the supply's parts bear.

use std::fmt;
use std::io;

use serde::Serialize;

use crate::quantity::Uncertain;
use crate::supply::{Circuit, Loading, Projector, SolveError, SolveOptions, SteadyState, sweep};

/// Curves at some mains voltages, for other programs: the keys are part of the tool's interface.
#[derive(Clone, Debug, Serialize)]
pub struct CurveReport {
    /// The amplifier's name.
    pub amplifier: String,
    /// Mains frequency, Hz.
    pub frequency_hz: f64,
    /// Loading after loading, by rising mains.
    pub points: Vec<CurvePoint>,
}

/// The supply at one mains voltage and loading.
#[derive(Clone, Debug, Serialize)]
pub struct CurvePoint {
    /// Mains, V r.m.s.
    pub mains_v: f64,
    /// Loading.
    pub loading: Loading,
    /// Every node, in the config's order.
    pub nodes: Vec<CurveNode>,
    /// R.m.s. current of the winding, of one half if centre-tapped, A.
    pub winding_rms_a: f64,
    /// Its peak, A.
    pub winding_peak_a: f64,
    /// Mean current of one rectifying device, A.
    pub diode_mean_a: f64,
    /// Its r.m.s. current, A.
    pub diode_rms_a: f64,
    /// Its peak, A.
    pub diode_peak_a: f64,
    /// Peak inverse voltage across it, V.
    pub inverse_peak_v: f64,
    /// Loss of the whole winding, W.
    pub winding_loss_w: f64,
    /// A fitted dropper.
    pub dropper: Option<CurveDropper>,
    /// Heater winding, V.
    pub heater_v: Option<f64>,
}

/// One node.
#[derive(Clone, Debug, Serialize)]
pub struct CurveNode {
    /// Its name.
    pub node: String,
    /// Mean, V.
    pub mean_v: f64,
    /// Ripple, peak to peak, V.
    pub ripple_vpp: f64,
    /// Expanded uncertainty (k = 2) of the mean, V.
    pub u_v: f64,
}

/// A fitted dropper.
#[derive(Clone, Copy, Debug, Serialize)]
pub struct CurveDropper {
    /// Its mean loss over its mean current, V.
    pub mean_v: f64,
    /// Its mean loss, W.
    pub loss_w: f64,
}

impl CurveReport {
    /// Solves `circuit` at each of `mains_v` under each of `loadings`; uncertainties are those of `projector`, which
    /// must be of the same circuit.
    pub fn solve(
        circuit: &Circuit,
        projector: &Projector,
        mains_v: &[f64],
        loadings: &[Loading],
    ) -> Result<Self, SolveError> {
        let mut points = Vec::new();
        for loading in loadings {
            let states = sweep(circuit, *loading, mains_v, &SolveOptions::default())?;
            points.extend(states.into_iter().map(|state| CurvePoint::new(state, projector)));
        }
        let frequency_hz = circuit.frequency_hz;
        Ok(CurveReport { amplifier: circuit.amplifier.clone(), frequency_hz, points })
    }

    /// The loadings that it holds, in their order.
    pub fn loadings(&self) -> Vec<Loading> {
        let mut loadings: Vec<Loading> = self.points.iter().map(|point| point.loading).collect();
        loadings.dedup();
        loadings
    }
}

impl CurvePoint {
    fn new(state: SteadyState, projector: &Projector) -> Self {
        let u_v = |node: &str| {
            projector.curve(node, state.loading).map_or(f64::NAN, |curve| curve.model_u(state.mains_v))
        };
        let nodes = state.nodes.iter().map(|node| CurveNode {
            node: node.node.clone(),
            mean_v: node.mean_v,
            ripple_vpp: node.ripple_vpp,
            u_v: u_v(&node.node),
        });
        CurvePoint {
            mains_v: state.mains_v,
            loading: state.loading,
            nodes: nodes.collect(),
            winding_rms_a: state.winding_rms_a,
            winding_peak_a: state.winding_peak_a,
            diode_mean_a: state.diode_mean_a,
            diode_rms_a: state.diode_rms_a,
            diode_peak_a: state.diode_peak_a,
            inverse_peak_v: state.inverse_peak_v,
            winding_loss_w: state.winding_loss_w,
            dropper: state.dropper.map(|d| CurveDropper { mean_v: d.mean_v, loss_w: d.loss_w }),
            heater_v: state.heater_v,
        }
    }
}

/// Says the curves as tables for people, one a loading. `source` says in a sentence what they rest on.
pub fn curve_text(report: &CurveReport, source: &str, out: &mut impl fmt::Write) -> fmt::Result {
    writeln!(out, "The rails of the {} by mains, at {} Hz. {source}", report.amplifier, report.frequency_hz)?;
    for loading in report.loadings() {
        let points: Vec<&CurvePoint> = report.points.iter().filter(|p| p.loading == loading).collect();
        writeln!(out, "\n{}", loading_heading(loading))?;
        table(&points, out)?;
    }
    writeln!(
        out,
        "\nRails: mean ± expanded uncertainty (k = 2), ripple peak to peak. Winding and diode: r.m.s. and peak; of one \
         half and one device."
    )
}

fn loading_heading(loading: Loading) -> &'static str {
    match loading {
        Loading::Unloaded => "Unloaded (valves cold, or standby)",
        Loading::Idle => "Idle",
        Loading::Full => "Full output",
    }
}

fn table(points: &[&CurvePoint], out: &mut impl fmt::Write) -> fmt::Result {
    let Some(first) = points.first() else { return Ok(()) };
    let mut head = vec!["mains".to_owned()];
    for node in &first.nodes {
        head.extend([node.node.clone(), "ripple".to_owned()]);
    }
    head.extend(["winding", "diode", "inverse", "lost in winding"].map(str::to_owned));
    head.extend(first.dropper.map(|_| "dropper".to_owned()));
    head.extend(first.heater_v.map(|_| "heaters".to_owned()));
    let mut rows = vec![head];
    for point in points {
        let mut row = vec![format!("{} V", plain(point.mains_v))];
        for node in &point.nodes {
            row.extend([
                Uncertain::new(node.mean_v, node.u_v).to_string(),
                format!("{:.1} V", node.ripple_vpp),
            ]);
        }
        row.push(format!("{:.0} / {:.0} mA", 1e3 * point.winding_rms_a, 1e3 * point.winding_peak_a));
        row.push(format!("{:.0} / {:.0} mA", 1e3 * point.diode_rms_a, 1e3 * point.diode_peak_a));
        row.push(format!("{:.0} V", point.inverse_peak_v));
        row.push(format!("{:.1} W", point.winding_loss_w));
        row.extend(point.dropper.map(|d| format!("{:.1} V, {:.1} W", d.mean_v, d.loss_w)));
        row.extend(point.heater_v.map(|v| format!("{v:.2} V")));
        rows.push(row);
    }
    let widths: Vec<usize> = (0..rows[0].len())
        .map(|i| rows.iter().map(|row| row[i].chars().count()).max().unwrap_or(0))
        .collect();
    for row in rows {
        let cells: Vec<String> =
            row.iter().zip(&widths).map(|(cell, width)| format!("{cell:>width$}", width = *width)).collect();
        writeln!(out, "  {}", cells.join("  "))?;
    }
    Ok(())
}

/// Mains without digits that say nothing: 230, 232.5.
pub(super) fn plain(volts: f64) -> String {
    let text = format!("{volts:.2}");
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}

/// One row a node by RFC 4180.
pub fn curve_csv(report: &CurveReport, out: impl io::Write) -> csv::Result<()> {
    let mut rows = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(out);
    rows.write_record([
        "mains_v",
        "loading",
        "node",
        "mean_v",
        "ripple_vpp",
        "u_v",
        "winding_rms_a",
        "winding_peak_a",
        "diode_mean_a",
        "diode_rms_a",
        "diode_peak_a",
        "inverse_peak_v",
        "winding_loss_w",
        "dropper_mean_v",
        "dropper_loss_w",
        "heater_v",
    ])?;
    for point in &report.points {
        let or_nothing = |value: Option<f64>| value.map_or(String::new(), |v| v.to_string());
        for node in &point.nodes {
            rows.write_record([
                point.mains_v.to_string(),
                point.loading.word().to_owned(),
                node.node.clone(),
                node.mean_v.to_string(),
                node.ripple_vpp.to_string(),
                node.u_v.to_string(),
                point.winding_rms_a.to_string(),
                point.winding_peak_a.to_string(),
                point.diode_mean_a.to_string(),
                point.diode_rms_a.to_string(),
                point.diode_peak_a.to_string(),
                point.inverse_peak_v.to_string(),
                point.winding_loss_w.to_string(),
                or_nothing(point.dropper.map(|d| d.mean_v)),
                or_nothing(point.dropper.map(|d| d.loss_w)),
                or_nothing(point.heater_v),
            ])?;
        }
    }
    Ok(rows.flush()?)
}
