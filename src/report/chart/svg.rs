//! The pen: elements of SVG written into a string, text escaped, numbers short.

use std::fmt::Write as _;

/// What every chart has in common: ink on warm paper with a brass accent, in light and dark, on paper without colour.
/// Colour never says anything alone: lines differ by their dashes and bear their names.
pub(super) const STYLE: &str = "\
.rt-chart{--paper:#fbf7ef;--ink:#2b2620;--faint:#d9cfbd;--soft:#6d6455;--brass:#8a6414;--band:#e3d2a6;--danger:#a3231c;\
font:13px system-ui,sans-serif;background:var(--paper);color:var(--ink)}\
@media(prefers-color-scheme:dark){.rt-chart{--paper:#211d18;--ink:#efe6d6;--faint:#4a4235;--soft:#b5a88f;--brass:#dcb45c;\
--band:#5d4c24;--danger:#ff9a8f}}\
@media print{.rt-chart{--paper:#fff;--ink:#000;--faint:#ccc;--soft:#444;--brass:#5b4210;--band:#ddd;--danger:#000}}\
.rt-chart text{fill:var(--ink)}.rt-chart .soft{fill:var(--soft)}.rt-chart .grid{stroke:var(--faint);stroke-width:1}\
.rt-chart .line{fill:none;stroke:var(--brass);stroke-width:2;stroke-linejoin:round}\
.rt-chart .second{fill:none;stroke:var(--ink);stroke-width:1.6;stroke-dasharray:7 3}\
.rt-chart .third{fill:none;stroke:var(--soft);stroke-width:1.6;stroke-dasharray:2 3}\
.rt-chart .ahead{stroke-dasharray:4 4}.rt-chart .band{fill:var(--band);stroke:none}\
.rt-chart .limit{stroke:var(--danger);stroke-width:1.6}.rt-chart .setpoint{stroke:var(--danger);stroke-width:1.2;stroke-dasharray:6 4}\
.rt-chart .limit-name{fill:var(--danger);stroke:var(--paper);stroke-width:3;paint-order:stroke}.rt-chart .gap{fill:var(--faint);opacity:.35}.rt-chart .dot{fill:var(--ink)}";

/// A drawing being made.
#[derive(Debug)]
pub(super) struct Pen {
    out: String,
}

impl Pen {
    /// Begins a drawing of this size with its name and description for those who don't see it. `id` must be unique on
    /// its page.
    pub(super) fn begin(id: &str, width: f64, height: f64, title: &str, description: &str) -> Self {
        let mut pen = Pen { out: String::new() };
        let id = escape(id);
        let _ = write!(
            pen.out,
            "<svg xmlns=\"http://www.w3.org/2000/svg\" class=\"rt-chart\" id=\"{id}\" role=\"img\" viewBox=\"0 0 {} {}\" \
             aria-labelledby=\"{id}-title {id}-desc\"><title id=\"{id}-title\">{}</title><desc id=\"{id}-desc\">{}</desc>\
             <style>{STYLE}</style><rect width=\"100%\" height=\"100%\" fill=\"var(--paper)\"/>",
            short(width),
            short(height),
            escape(title),
            escape(description)
        );
        pen
    }

    /// The drawing, whole.
    pub(super) fn end(mut self) -> String {
        self.out.push_str("</svg>\n");
        self.out
    }

    pub(super) fn line(&mut self, class: &str, from: (f64, f64), to: (f64, f64)) {
        let _ = write!(
            self.out,
            "<line class=\"{class}\" x1=\"{}\" y1=\"{}\" x2=\"{}\" y2=\"{}\"/>",
            short(from.0),
            short(from.1),
            short(to.0),
            short(to.1)
        );
    }

    pub(super) fn rect(&mut self, class: &str, corner: (f64, f64), size: (f64, f64)) {
        let _ = write!(
            self.out,
            "<rect class=\"{class}\" x=\"{}\" y=\"{}\" width=\"{}\" height=\"{}\"/>",
            short(corner.0),
            short(corner.1),
            short(size.0),
            short(size.1)
        );
    }

    pub(super) fn dot(&mut self, class: &str, at: (f64, f64), radius: f64) {
        let _ = write!(
            self.out,
            "<circle class=\"{class}\" cx=\"{}\" cy=\"{}\" r=\"{}\"/>",
            short(at.0),
            short(at.1),
            short(radius)
        );
    }

    /// Text; `anchor` is `start`, `middle` or `end`.
    pub(super) fn text(&mut self, class: &str, at: (f64, f64), anchor: &str, text: &str) {
        let _ = write!(
            self.out,
            "<text class=\"{class}\" x=\"{}\" y=\"{}\" text-anchor=\"{anchor}\">{}</text>",
            short(at.0),
            short(at.1),
            escape(text)
        );
    }

    /// A line through points; fewer than two draw a dot, so that a single figure between two gaps is seen.
    pub(super) fn polyline(&mut self, class: &str, points: &[(f64, f64)]) {
        match points {
            [] => {}
            [only] => self.dot("dot", *only, 1.5),
            _ => {
                let _ = write!(self.out, "<polyline class=\"{class}\" points=\"{}\"/>", joined(points));
            }
        }
    }

    /// The area between two lines of the same abscissae.
    pub(super) fn area(&mut self, class: &str, low: &[(f64, f64)], high: &[(f64, f64)]) {
        if low.len() < 2 {
            return;
        }
        let round: Vec<_> = high.iter().chain(low.iter().rev()).copied().collect();
        let _ = write!(self.out, "<polygon class=\"{class}\" points=\"{}\"/>", joined(&round));
    }
}

fn joined(points: &[(f64, f64)]) -> String {
    let words: Vec<_> = points.iter().map(|(x, y)| format!("{},{}", short(*x), short(*y))).collect();
    words.join(" ")
}

/// A coordinate to a tenth, without a tail of zeros.
fn short(value: f64) -> String {
    let text = format!("{value:.1}");
    text.strip_suffix(".0").map_or(text.clone(), str::to_owned)
}

/// Text for the inside of an element or of an attribute in double quotes.
pub fn escape(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&#39;"),
            // No character that XML forbids, whatever a name from outside holds.
            c if c.is_control() && c != '\n' && c != '\t' => out.push('\u{fffd}'),
            c => out.push(c),
        }
    }
    out
}
