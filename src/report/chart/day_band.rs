//! A day by its clock: mean and band by the time of day, working days and weekends in one drawing.

use super::scale::{Scale, tick_text, ticks};
use super::svg::Pen;
use crate::mains::Slot;

const WIDTH: f64 = 560.0;
const HEIGHT: f64 = 246.0;
const LEFT: f64 = 44.0;
const RIGHT: f64 = 14.0;
const TOP: f64 = 46.0;
const BOTTOM: f64 = 24.0;

/// Working days as a line with its 5–95 % band, weekends as a dashed line.
pub fn day_band_svg(id: &str, title: &str, working: &[Slot], weekend: &[Slot]) -> String {
    let all = || working.iter().chain(weekend);
    let low = all().map(|slot| slot.low_v).fold(f64::INFINITY, f64::min);
    let high = all().map(|slot| slot.high_v).fold(f64::NEG_INFINITY, f64::max);
    let description = match all().max_by(|a, b| a.mean_v.total_cmp(&b.mean_v)) {
        Some(top) => format!(
            "Between {low:.1} V and {high:.1} V (5 % and 95 %); highest on average at {:02}:{:02} with {:.1} V.",
            top.minute / 60,
            top.minute % 60,
            top.mean_v
        ),
        None => "Nothing was recorded.".to_owned(),
    };
    let mut pen = Pen::begin(id, WIDTH, HEIGHT, title, &description);
    pen.text("", (LEFT, 16.0), "start", title);
    let x = Scale::new((0.0, 1440.0), (LEFT, WIDTH - RIGHT));
    for hour in (0..=24).step_by(3) {
        let here = x.at(f64::from(hour * 60));
        pen.line("grid", (here, TOP), (here, HEIGHT - BOTTOM));
        pen.text("soft", (here, HEIGHT - 8.0), "middle", &format!("{hour:02}"));
    }
    if low > high {
        pen.text("soft", (WIDTH / 2.0, HEIGHT / 2.0), "middle", "nothing recorded");
        return pen.end();
    }
    let y = Scale::new((low.floor(), high.ceil()), (HEIGHT - BOTTOM, TOP));
    let marks = ticks(y.domain(), 4);
    let step = marks.windows(2).next().map_or(1.0, |pair| pair[1] - pair[0]);
    for volts in marks {
        pen.line("grid", (LEFT, y.at(volts)), (WIDTH - RIGHT, y.at(volts)));
        pen.text("", (LEFT - 5.0, y.at(volts) + 4.0), "end", &tick_text(volts, step));
    }
    pen.text("soft", (LEFT - 5.0, TOP - 4.0), "end", "V");
    let line = |slots: &[Slot], volts: fn(&Slot) -> f64| -> Vec<(f64, f64)> {
        slots.iter().map(|slot| (x.at(f64::from(slot.minute)), y.at(volts(slot)))).collect()
    };
    pen.area("band", &line(working, |s| s.low_v), &line(working, |s| s.high_v));
    pen.polyline("second", &line(weekend, |s| s.mean_v));
    pen.polyline("line", &line(working, |s| s.mean_v));
    let key = |pen: &mut Pen, left: f64, class: &str, name: &str| {
        pen.line(class, (left, TOP - 8.0), (left + 26.0, TOP - 8.0));
        pen.text("soft", (left + 31.0, TOP - 4.0), "start", name);
    };
    key(&mut pen, LEFT, "line", "working days, band 5–95 %");
    key(&mut pen, LEFT + 230.0, "second", "weekends");
    pen.end()
}
