//! The two-scale curve: one line for mains, read on the left in mains volts and on the right in rail volts, because the
//! supply model ties the two.

use chrono::{DateTime, Timelike};
use chrono_tz::Tz;

use super::scale::{Scale, tick_text, ticks};
use super::svg::Pen;
use crate::mains::{INTERVAL, Interval};
use crate::quantity::Utc;
use crate::supply::RailCurve;

const WIDTH: f64 = 560.0;
const LEFT: f64 = 44.0;
const RIGHT: f64 = 54.0;
const TOP: f64 = 26.0;
const BOTTOM: f64 = 24.0;

/// A figure at a time with the range it moved in, V.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BandPoint {
    /// When.
    pub at: Utc,
    /// The lowest.
    pub low_v: f64,
    /// The middle: where the line runs.
    pub mid_v: f64,
    /// The highest.
    pub high_v: f64,
}

impl From<&Interval> for BandPoint {
    /// An interval in its middle.
    fn from(interval: &Interval) -> Self {
        let at = Utc(interval.start.0 + INTERVAL.as_millis() as i64 / 2);
        BandPoint { at, low_v: interval.min_v, mid_v: interval.rms_v, high_v: interval.max_v }
    }
}

/// The right-hand scale: a rail that follows the mains.
#[derive(Clone, Debug)]
pub struct RailScale<'a> {
    /// What it's called, for example `hall.reservoir, idle`.
    pub name: &'a str,
    /// Mains to rail.
    pub curve: &'a RailCurve,
    /// Its limit, V.
    pub limit_v: f64,
    /// The alarm's setpoint, V.
    pub setpoint_v: Option<f64>,
}

/// A two-scale curve to be drawn.
#[derive(Clone, Debug)]
pub struct TwoScale<'a> {
    /// Unique on its page.
    pub id: &'a str,
    /// What it shows, written above it.
    pub title: &'a str,
    /// In the zone of whose clocks the hours are named.
    pub zone: Tz,
    /// From when.
    pub from: Utc,
    /// Until when.
    pub to: Utc,
    /// What was recorded, in order of time; further apart than two intervals it's a gap.
    pub recorded: &'a [BandPoint],
    /// What is expected.
    pub expected: &'a [BandPoint],
    /// The right-hand scale.
    pub rail: Option<RailScale<'a>>,
    /// The mains' range, where several drawings share it.
    pub mains_v: Option<(f64, f64)>,
    /// The drawing's height; its width is 560.
    pub height: f64,
}

/// The range that holds all of `points` and, so that one sees how far it is, the limit of `rail` where it lies near.
pub fn mains_range<'p>(
    points: impl IntoIterator<Item = &'p BandPoint>,
    rail: Option<&RailScale<'_>>,
) -> Option<(f64, f64)> {
    let range = points.into_iter().fold(None, |range: Option<(f64, f64)>, point| {
        let (low, high) = range.unwrap_or((point.low_v, point.high_v));
        Some((low.min(point.low_v), high.max(point.high_v)))
    });
    let (low, high) = range?;
    let limit = rail.and_then(|rail| rail.curve.mains_for(rail.limit_v));
    let width = (high - low).max(4.0);
    let high = limit.filter(|limit| *limit > high && *limit < high + width).unwrap_or(high);
    Some(((low - 1.0).floor(), (high + 1.0).ceil()))
}

impl TwoScale<'_> {
    /// The drawing as SVG.
    pub fn svg(&self) -> String {
        let range = self
            .mains_v
            .or_else(|| mains_range(self.recorded.iter().chain(self.expected), self.rail.as_ref()));
        let mut pen = Pen::begin(self.id, WIDTH, self.height, self.title, &self.description());
        pen.text("", (LEFT, 16.0), "start", self.title);
        let x = Scale::new((self.from.0 as f64, self.to.0 as f64), (LEFT, WIDTH - RIGHT));
        let y = Scale::new(range.unwrap_or((220.0, 240.0)), (self.height - BOTTOM, TOP));
        self.hours(&mut pen, &x);
        self.gaps(&mut pen, &x);
        self.left_scale(&mut pen, &y);
        if let Some(rail) = &self.rail {
            self.right_scale(&mut pen, &y, rail);
        }
        draw_band(&mut pen, &x, &y, self.expected, "line ahead");
        draw_band(&mut pen, &x, &y, self.recorded, "line");
        if let Some(rail) = &self.rail {
            self.limits(&mut pen, &y, rail);
        }
        if self.recorded.is_empty() && self.expected.is_empty() {
            pen.text("soft", ((LEFT + WIDTH - RIGHT) / 2.0, self.height / 2.0), "middle", "nothing recorded");
        }
        pen.end()
    }

    /// For those who don't see the drawing: what can be read off it.
    fn description(&self) -> String {
        let all = |points: &[BandPoint], what: &str| {
            let low = points.iter().min_by(|a, b| a.low_v.total_cmp(&b.low_v))?;
            let high = points.iter().max_by(|a, b| a.high_v.total_cmp(&b.high_v))?;
            let (l, h) = (self.clock(low.at), self.clock(high.at));
            Some(format!("Mains {what} from {:.1} V at {l} to {:.1} V at {h}.", low.low_v, high.high_v))
        };
        let mut text: Vec<String> = all(self.recorded, "ran").into_iter().collect();
        text.extend(all(self.expected, "is expected"));
        if text.is_empty() {
            text.push("Nothing was recorded.".to_owned());
        }
        if let Some(rail) = &self.rail {
            let at = rail.curve.mains_for(rail.limit_v);
            let at = at.map_or_else(String::new, |v| format!(", reached at {v:.1} V of mains"));
            text.push(format!(
                "The right-hand scale is {}; its limit is {:.0} V{at}.",
                rail.name, rail.limit_v
            ));
        }
        text.join(" ")
    }

    fn clock(&self, at: Utc) -> String {
        self.local(at).format("%H:%M").to_string()
    }

    fn local(&self, at: Utc) -> DateTime<Tz> {
        DateTime::from_timestamp_millis(at.0).unwrap_or_default().with_timezone(&self.zone)
    }

    /// Every third hour of the zone's clocks; days of 23 and 25 hours have theirs where they are.
    fn hours(&self, pen: &mut Pen, x: &Scale) {
        const QUARTER_MS: i64 = 900_000;
        let step = if self.to.0 - self.from.0 > 30 * 3_600_000 { 6 } else { 3 };
        let first = self.from.0.div_euclid(QUARTER_MS) * QUARTER_MS;
        let mut at = first;
        let mut last_x = f64::NEG_INFINITY;
        while at <= self.to.0 {
            let local = self.local(Utc(at));
            if at >= self.from.0 && local.minute() == 0 && local.hour().is_multiple_of(step) {
                let here = x.at(at as f64);
                pen.line("grid", (here, TOP), (here, self.height - BOTTOM));
                if here - last_x > 30.0 {
                    // The last midnight of a day is its end.
                    let name = if at == self.to.0 && local.hour() == 0 {
                        "24".to_owned()
                    } else {
                        local.format("%H").to_string()
                    };
                    pen.text("soft", (here, self.height - 8.0), "middle", &name);
                    last_x = here;
                }
            }
            at += QUARTER_MS;
        }
    }

    fn left_scale(&self, pen: &mut Pen, y: &Scale) {
        let marks = ticks(y.domain(), 4);
        let step = marks.windows(2).next().map_or(1.0, |pair| pair[1] - pair[0]);
        for volts in marks {
            pen.line("grid", (LEFT, y.at(volts)), (WIDTH - RIGHT, y.at(volts)));
            pen.text("", (LEFT - 5.0, y.at(volts) + 4.0), "end", &tick_text(volts, step));
        }
        pen.text("soft", (4.0, TOP - 10.0), "start", "V~");
    }

    fn right_scale(&self, pen: &mut Pen, y: &Scale, rail: &RailScale<'_>) {
        let (low, high) = y.domain();
        let right = WIDTH - RIGHT;
        let marks = ticks((rail.curve.rail_v(low), rail.curve.rail_v(high)), 4);
        let step = marks.windows(2).next().map_or(1.0, |pair| pair[1] - pair[0]);
        for volts in marks {
            let Some(mains) = rail.curve.mains_for(volts).filter(|mains| y.holds(*mains)) else { continue };
            pen.line("grid", (right, y.at(mains)), (right + 4.0, y.at(mains)));
            pen.text("", (right + 7.0, y.at(mains) + 4.0), "start", &tick_text(volts, step));
        }
        pen.text("soft", (WIDTH - 4.0, TOP - 10.0), "end", &format!("{}, V", rail.name));
    }

    /// Over the curve, so that neither hides the other.
    fn limits(&self, pen: &mut Pen, y: &Scale, rail: &RailScale<'_>) {
        let right = WIDTH - RIGHT;
        let level =
            |volts: f64| rail.curve.mains_for(volts).filter(|mains| y.holds(*mains)).map(|mains| y.at(mains));
        if let Some(setpoint) = rail.setpoint_v.and_then(level) {
            pen.line("setpoint", (LEFT, setpoint), (right, setpoint));
        }
        if let Some(limit) = level(rail.limit_v) {
            pen.line("limit", (LEFT, limit), (right, limit));
            pen.text(
                "limit-name",
                (LEFT + 4.0, limit - 4.0),
                "start",
                &format!("limit {:.0} V", rail.limit_v),
            );
        }
    }

    /// Stretches without a figure, shaded and named.
    fn gaps(&self, pen: &mut Pen, x: &Scale) {
        if self.recorded.is_empty() {
            return;
        }
        let half = INTERVAL.as_millis() as i64 / 2;
        let ends = self.recorded.iter().map(|p| (p.at.0 - half, p.at.0 + half));
        // What lies ahead of the record's end is no gap where it's expected.
        let until = if self.expected.is_empty() { self.to.0 } else { self.from.0 };
        let mut covered = self.from.0;
        for (from, to) in ends.chain(std::iter::once((until, until))) {
            if from - covered > half {
                let (left, right) = (x.at(covered as f64), x.at(from as f64));
                pen.rect("gap", (left, TOP), (right - left, self.height - TOP - BOTTOM));
                if right - left > 70.0 {
                    pen.text("soft", ((left + right) / 2.0, self.height / 2.0), "middle", "no data");
                }
            }
            covered = covered.max(to);
        }
    }
}

/// The band and the line within it, broken where points are further apart than two intervals.
fn draw_band(pen: &mut Pen, x: &Scale, y: &Scale, points: &[BandPoint], class: &str) {
    let apart = 2 * INTERVAL.as_millis() as i64;
    for run in points.chunk_by(|a, b| b.at.0 - a.at.0 < apart) {
        let line = |volts: fn(&BandPoint) -> f64| -> Vec<(f64, f64)> {
            run.iter().map(|p| (x.at(p.at.0 as f64), y.at(volts(p)))).collect()
        };
        pen.area("band", &line(|p| p.low_v), &line(|p| p.high_v));
        pen.polyline(class, &line(|p| p.mid_v));
    }
}
