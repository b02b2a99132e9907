//! The rail curves as a small SVG: one line a loading, its uncertainty as a band, told apart by dashes and a word at
//! the line's end, not by colour alone.

use std::fmt;

use super::curve::{CurveReport, plain};
use crate::supply::Loading;

const WIDTH: f64 = 640.0;
const HEIGHT: f64 = 400.0;
const LEFT: f64 = 64.0;
const RIGHT: f64 = 92.0;
const TOP: f64 = 40.0;
const BOTTOM: f64 = 48.0;

/// Ink on warm paper with a brass accent.
const PAPER: &str = "#faf6ee";
const INK: &str = "#2b2620";
const BRASS: &str = "#a9812f";

/// Draws the curves of `node`. Of fewer than two mains voltages there is no line, only points.
pub fn curve_svg(report: &CurveReport, node: &str, out: &mut impl fmt::Write) -> fmt::Result {
    let lines: Vec<(Loading, Vec<Dot>)> =
        report.loadings().into_iter().map(|loading| (loading, dots(report, loading, node))).collect();
    let all = || lines.iter().flat_map(|(_, dots)| dots);
    let across = Scale::over(all().map(|dot| dot.mains_v), LEFT, WIDTH - RIGHT);
    let up =
        Scale::over(all().flat_map(|dot| [dot.rail_v - dot.u_v, dot.rail_v + dot.u_v]), HEIGHT - BOTTOM, TOP);
    let name = escaped(&format!("{}, {node}: rail by mains", report.amplifier));
    writeln!(
        out,
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {HEIGHT}\" role=\"img\" aria-label=\"{name}\" \
         font-family=\"sans-serif\" font-size=\"12\" fill=\"{INK}\">"
    )?;
    writeln!(out, "<rect width=\"{WIDTH}\" height=\"{HEIGHT}\" fill=\"{PAPER}\"/>")?;
    writeln!(out, "<text x=\"{LEFT}\" y=\"24\" font-size=\"14\">{name}</text>")?;
    for tick in across.ticks() {
        let x = across.at(tick);
        let (top, bottom) = (TOP, HEIGHT - BOTTOM);
        writeln!(out, "<path d=\"M{x:.1} {top}V{bottom}\" stroke=\"{INK}\" stroke-opacity=\"0.12\"/>")?;
        writeln!(
            out,
            "<text x=\"{x:.1}\" y=\"{}\" text-anchor=\"middle\">{}</text>",
            bottom + 16.0,
            plain(tick)
        )?;
    }
    for tick in up.ticks() {
        let y = up.at(tick);
        let right = WIDTH - RIGHT;
        writeln!(out, "<path d=\"M{LEFT} {y:.1}H{right}\" stroke=\"{INK}\" stroke-opacity=\"0.12\"/>")?;
        writeln!(
            out,
            "<text x=\"{}\" y=\"{:.1}\" text-anchor=\"end\">{}</text>",
            LEFT - 6.0,
            y + 4.0,
            plain(tick)
        )?;
    }
    let middle = (LEFT + WIDTH - RIGHT) / 2.0;
    writeln!(
        out,
        "<text x=\"{middle}\" y=\"{}\" text-anchor=\"middle\">mains, V r.m.s.</text>",
        HEIGHT - 12.0
    )?;
    writeln!(
        out,
        "<text transform=\"translate(16 {}) rotate(-90)\" text-anchor=\"middle\">rail, V</text>",
        HEIGHT / 2.0
    )?;
    for (loading, dots) in &lines {
        line(*loading, dots, &across, &up, out)?;
    }
    writeln!(out, "</svg>")
}

/// One figure of a curve.
struct Dot {
    mains_v: f64,
    rail_v: f64,
    u_v: f64,
}

fn dots(report: &CurveReport, loading: Loading, node: &str) -> Vec<Dot> {
    let of = |point: &super::curve::CurvePoint| {
        let found = point.nodes.iter().find(|n| n.node == node)?;
        Some(Dot { mains_v: point.mains_v, rail_v: found.mean_v, u_v: found.u_v })
    };
    report.points.iter().filter(|point| point.loading == loading).filter_map(of).collect()
}

fn line(
    loading: Loading,
    dots: &[Dot],
    across: &Scale,
    up: &Scale,
    out: &mut impl fmt::Write,
) -> fmt::Result {
    let (dashes, colour) = match loading {
        Loading::Unloaded => ("2 4", INK),
        Loading::Idle => ("none", BRASS),
        Loading::Full => ("9 4", INK),
    };
    let path = |edge: &dyn Fn(&Dot) -> f64, backwards: bool| {
        let place = |dot: &Dot| format!("{:.1} {:.1}", across.at(dot.mains_v), up.at(edge(dot)));
        let places: Vec<String> =
            if backwards { dots.iter().rev().map(place).collect() } else { dots.iter().map(place).collect() };
        places.join("L")
    };
    let Some(last) = dots.last() else { return Ok(()) };
    let upper = path(&|dot| dot.rail_v + dot.u_v, false);
    let lower = path(&|dot| dot.rail_v - dot.u_v, true);
    writeln!(out, "<path d=\"M{upper}L{lower}Z\" fill=\"{colour}\" fill-opacity=\"0.12\"/>")?;
    let mean = path(&|dot| dot.rail_v, false);
    writeln!(
        out,
        "<path d=\"M{mean}\" fill=\"none\" stroke=\"{colour}\" stroke-width=\"2\" stroke-dasharray=\"{dashes}\"/>"
    )?;
    let (x, y) = (across.at(last.mains_v), up.at(last.rail_v));
    writeln!(out, "<circle cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"3\" fill=\"{colour}\"/>")?;
    writeln!(out, "<text x=\"{:.1}\" y=\"{:.1}\">{}</text>", x + 8.0, y + 4.0, loading.word())
}

/// A straight scale from volts to the drawing.
struct Scale {
    low: f64,
    high: f64,
    from: f64,
    to: f64,
    step: f64,
}

impl Scale {
    /// Over all of `values`, a little wider, to whole steps.
    fn over(values: impl Iterator<Item = f64>, from: f64, to: f64) -> Self {
        let (low, high) =
            values.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), v| (low.min(v), high.max(v)));
        let (low, high) = if low <= high { (low, high.max(low + 1.0)) } else { (0.0, 1.0) };
        let rough = (high - low) / 5.0;
        let ten = 10f64.powf(rough.log10().floor());
        let step = [1.0, 2.0, 5.0, 10.0].map(|m| m * ten).into_iter().find(|s| *s >= rough).unwrap_or(rough);
        Scale { low: (low / step).floor() * step, high: (high / step).ceil() * step, from, to, step }
    }

    fn at(&self, value: f64) -> f64 {
        self.from + (value - self.low) / (self.high - self.low) * (self.to - self.from)
    }

    fn ticks(&self) -> Vec<f64> {
        let count = ((self.high - self.low) / self.step).round() as usize;
        (0..=count).map(|i| self.low + i as f64 * self.step).collect()
    }
}

fn escaped(text: &str) -> String {
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;").replace('"', "&quot;")
}
