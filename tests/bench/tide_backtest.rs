//! The tide table against plain guesses, walking forward over the open recording and over a simulated hall's year.
//!
//! `cargo bench --bench tide_backtest`. The goal: at each midnight for the next 144 ten-minute values, an average
//! pinball loss at least 10 % under the best plain guess's, with 85 to 95 % of the values within the band; and a
//! further gain at other hours. The tide table's constants were chosen on the open recording up to 28 August 2007;
//! from 29 August on it is judged.

#![allow(clippy::print_stdout, reason = "a benchmark's result is what it prints")]

#[path = "../support/backtest.rs"]
mod backtest;
#[path = "../support/recording.rs"]
mod recording;

use std::time::{Duration, Instant};

use backtest::{DAY, GUESSES, Method, OURS, Recording, judge, judge_with};
use railtide::logger::simulated::Hall;
use railtide::mains::{INTERVAL, Interval, forecast};
use railtide::quantity::Utc;

const HOUR: usize = 6;

fn main() {
    let house = Recording::new(recording::year_of_intervals());
    let split = house.day_of(recording::utc("2007-08-29T00:00:00Z"));
    table("open recording, tuned on", &house, 28..split);
    table("open recording, held out", &house, split..house.days());
    second_day("open recording, held out", &house, split..house.days());
    hours("open recording, held out", &house, split..house.days());

    let hall = Recording::new(hall_year(&Hall::new(1)));
    table("simulated hall's year", &hall, 28..hall.days());
    hours("simulated hall's year", &hall, 28..hall.days());
    speed(&house);
}

/// A year of a hall in ten-minute values, from a value every 20 s.
fn hall_year(hall: &Hall) -> Vec<Interval> {
    let start = recording::utc("2026-01-01T00:00:00Z").0;
    (0..365 * DAY as i64)
        .map(|i| {
            let start = start + i * INTERVAL.as_millis() as i64;
            let volts: Vec<f64> = (0..30).map(|n| hall.at(Utc(start + n * 20_000)).mains_v).collect();
            let fold = |f: fn(f64, f64) -> f64| volts.iter().copied().reduce(f).unwrap_or(f64::NAN);
            let rms_v = (volts.iter().map(|v| v * v).sum::<f64>() / volts.len() as f64).sqrt();
            Interval {
                start: Utc(start),
                rms_v,
                min_v: fold(f64::min),
                max_v: fold(f64::max),
                count: 30,
                covered: 1.0,
                flagged: false,
            }
        })
        .collect()
}

fn table(what: &str, recording: &Recording, days: std::ops::Range<usize>) {
    println!("\n{what}: issued at midnight for 24 h");
    let methods: Vec<&Method> = [&OURS].into_iter().chain(GUESSES).collect();
    let scores = judge(recording, &methods, days, Duration::ZERO, DAY);
    let best = scores[1..].iter().map(|s| s.loss).fold(f64::MAX, f64::min);
    for (method, score) in methods.iter().zip(&scores) {
        println!(
            "  {:36} loss {:.4} V  {:+5.1} % of the best guess  coverage {:4.1} %  {} days",
            method.name,
            score.loss,
            100.0 * (score.loss / best - 1.0),
            100.0 * score.coverage,
            score.days
        );
    }
}

fn second_day(what: &str, recording: &Recording, days: std::ops::Range<usize>) {
    let methods: Vec<&Method> = [&OURS].into_iter().chain(GUESSES).collect();
    let scores =
        judge_with(recording, &methods, days, |_, midnight| (midnight, midnight + DAY..midnight + 2 * DAY));
    let best = scores[1..].iter().map(|s| s.loss).fold(f64::MAX, f64::min);
    println!(
        "\n{what}: the second day of 48 h: loss {:.4} V, best guess {best:.4} V ({:+.1} %), coverage {:.1} %",
        scores[0].loss,
        100.0 * (scores[0].loss / best - 1.0),
        100.0 * scores[0].coverage
    );
}

/// What knowing the last hours gains: the same intervals, once from midnight and once from the hour itself.
fn hours(what: &str, recording: &Recording, days: std::ops::Range<usize>) {
    println!("\n{what}: the same hours from midnight and from their beginning");
    for (hour, length) in [(6, 6), (12, 6), (18, 6), (18, 2), (20, 1)] {
        let window = |midnight: usize| midnight + hour * HOUR..midnight + (hour + length) * HOUR;
        let late = judge_with(recording, &[&OURS], days.clone(), |_, m| (m + hour * HOUR, window(m)))[0];
        let early = judge_with(recording, &[&OURS], days.clone(), |_, m| (m, window(m)))[0];
        println!(
            "  {hour:02}:00 for {length} h: loss {:.4} V against {:.4} V from midnight ({:+.1} %), coverage {:.1} %",
            late.loss,
            early.loss,
            100.0 * (late.loss / early.loss - 1.0),
            100.0 * late.coverage
        );
    }
}

fn speed(recording: &Recording) {
    let all = recording::year_of_intervals();
    for (weeks, hours) in [(8, 24), (8, 48), (12, 48)] {
        let at = recording.time(recording.volts.len() - 30 * DAY);
        let since = Utc(at.0 - weeks * 7 * 86_400_000);
        let some: Vec<Interval> = all.iter().filter(|i| i.start >= since).copied().collect();
        let mut times: Vec<f64> = (0..11)
            .map(|_| {
                let start = Instant::now();
                let table = forecast(&some, at, Duration::from_secs(3_600 * hours), chrono_tz::Europe::Paris);
                assert!(table.is_ok_and(|t| t.steps.len() == 6 * hours as usize));
                start.elapsed().as_secs_f64() * 1e3
            })
            .collect();
        times.sort_by(f64::total_cmp);
        println!(
            "\n{weeks} weeks of history, {hours} h ahead: {:.1} ms (median of {})",
            times[5],
            times.len()
        );
    }
}
