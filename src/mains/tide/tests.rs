//! Made-up days whose forecast is known beforehand.

use super::*;
use chrono::DateTime;

const STEP_MS: i64 = 600_000;
const DAY_MS: i64 = 86_400_000;

fn utc(text: &str) -> Utc {
    Utc(DateTime::parse_from_rfc3339(text).unwrap().timestamp_millis())
}

fn interval(start: Utc, rms_v: f64) -> Interval {
    Interval { start, rms_v, min_v: rms_v, max_v: rms_v, count: 600, covered: 1.0, flagged: false }
}

/// `days` days of intervals that end at `at`, each of what `volts` gives for its time.
fn past(days: i64, at: Utc, volts: impl Fn(Utc) -> f64) -> Vec<Interval> {
    let from = at.0 - days * DAY_MS;
    (from..at.0).step_by(STEP_MS as usize).map(|start| interval(Utc(start), volts(Utc(start)))).collect()
}

fn day_ahead(intervals: &[Interval], at: Utc, zone: Tz) -> Result<TideTable, NoForecast> {
    forecast(intervals, at, Duration::from_secs(86_400), zone)
}

/// A sine over the local day in Berlin: 236 V, 4 V up at 06:00, 4 V down at 18:00.
fn berlin(at: Utc) -> f64 {
    let slot = history::wall(at, Tz::Europe__Berlin).slot;
    236.0 + 4.0 * (std::f64::consts::TAU * slot as f64 / DAY as f64).sin()
}

#[test]
fn days_that_are_all_alike_come_again_with_no_band() {
    let at = utc("2026-06-10T13:40:00Z");
    let table = day_ahead(&past(30, at, berlin), at, Tz::Europe__Berlin).unwrap();
    assert_eq!((table.issued_at, table.rows, table.steps.len()), (at, 30, 144));
    for (k, step) in table.steps.iter().enumerate() {
        assert_eq!(step.at.0, at.0 + k as i64 * STEP_MS);
        assert!((step.median_v - berlin(step.at)).abs() < 0.1, "{step:?} {}", berlin(step.at));
        assert!(step.high_v - step.low_v < 0.2, "{step:?}");
    }
}

#[test]
fn the_day_follows_the_clock_on_the_wall_through_a_change_of_the_clocks() {
    // Directive 2000/84/EC: summer time ends on 2026-10-25 at 01:00 UTC.
    let at = utc("2026-10-24T22:00:00Z");
    let horizon = Duration::from_secs(48 * 3600);
    let table = forecast(&past(30, at, berlin), at, horizon, Tz::Europe__Berlin).unwrap();
    assert_eq!(table.steps.len(), 288);
    for step in &table.steps {
        assert!((step.median_v - berlin(step.at)).abs() < 0.1, "{step:?} {}", berlin(step.at));
    }
}

#[test]
fn weekends_have_a_habit_of_their_own() {
    let volts = |at: Utc| {
        let wall = history::wall(at, Tz::UTC);
        if wall.weekend && (60..72).contains(&wall.slot) { 230.0 } else { 238.0 }
    };
    // A Friday and a Sunday midnight: Saturday's and Monday's 10:00 to 12:00.
    for (at, low) in [("2026-06-13T00:00:00Z", true), ("2026-06-15T00:00:00Z", false)] {
        let table = day_ahead(&past(56, utc(at), volts), utc(at), Tz::UTC).unwrap();
        let ten = table.steps[66].median_v;
        assert_eq!(ten < 234.0, low, "{at}: {ten}");
    }
}

#[test]
fn nothing_from_the_moment_of_issue_on_is_looked_at_and_the_order_does_not_matter() {
    let at = utc("2026-06-10T13:47:00Z");
    let wavy = |at: Utc| berlin(at) + 0.8 * (at.0 as f64 / 7.3e6).sin();
    let mut known = past(20, Interval::start_of(at, INTERVAL), wavy);
    let table = day_ahead(&known, at, Tz::UTC).unwrap();
    let later = (0..200).map(|k| interval(Utc(table.issued_at.0 + k * STEP_MS), 300.0));
    known.extend(later);
    known.reverse();
    assert_eq!(day_ahead(&known, at, Tz::UTC).unwrap(), table);
}

#[test]
fn a_step_of_the_whole_level_is_believed_within_a_day() {
    // As a transformer's tap changer does it: 5 V down, a day before.
    let at = utc("2026-06-10T12:00:00Z");
    let stepped = past(40, at, |t| berlin(t) - if t.0 >= at.0 - DAY_MS { 5.0 } else { 0.0 });
    let table = day_ahead(&stepped, at, Tz::Europe__Berlin).unwrap();
    for step in &table.steps {
        assert!((step.median_v - (berlin(step.at) - 5.0)).abs() < 1.3, "{step:?}");
    }
}

#[test]
fn gaps_and_interruptions_are_borne() {
    let at = utc("2026-06-10T12:00:00Z");
    let mut intervals = past(40, at, berlin);
    let whole = day_ahead(&intervals, at, Tz::Europe__Berlin).unwrap();
    // Every fifth interval missing, a weekend away, two hours without mains and one with half the voltage.
    let mut index = 0;
    intervals.retain(|_| {
        index += 1;
        index % 5 != 0 && !(2_000..2_400).contains(&index)
    });
    for i in &mut intervals[600..612] {
        i.rms_v = 0.3;
    }
    for i in &mut intervals[4_200..4_206] {
        i.rms_v = 115.0;
    }
    let holed = day_ahead(&intervals, at, Tz::Europe__Berlin).unwrap();
    for (holed, whole) in holed.steps.iter().zip(&whole.steps) {
        assert!((holed.median_v - whole.median_v).abs() < 0.3, "{holed:?} {whole:?}");
    }
}

#[test]
fn with_too_little_to_go_by_it_says_what_is_missing() {
    let at = utc("2026-06-10T12:00:00Z");
    let six = day_ahead(&past(6, at, berlin), at, Tz::UTC);
    assert_eq!(six, Err(NoForecast::TooShort { rows: 6 }));
    assert_eq!(day_ahead(&[], at, Tz::UTC), Err(NoForecast::TooShort { rows: 0 }));
    assert!(day_ahead(&past(7, at, berlin), at, Tz::UTC).is_ok());
    // The logger has been away for eighteen hours.
    let away = day_ahead(&past(20, Utc(at.0 - 18 * 3_600_000), berlin), at, Tz::UTC).unwrap_err();
    assert_eq!(away, NoForecast::LastDayMissing { recorded_pct: 25.0 });
    assert!(away.to_string().contains("at least 40 % of the last 24 hours, and 25 % are recorded"), "{away}");
}

#[test]
fn no_time_ahead_gives_an_empty_table() {
    let at = utc("2026-06-10T12:00:00Z");
    assert_eq!(forecast(&past(20, at, berlin), at, Duration::ZERO, Tz::UTC).unwrap().steps, []);
}

#[test]
fn highs_and_lows_take_turns_and_ripples_are_none() {
    let at = utc("2026-06-10T00:00:00Z");
    let steps: Vec<TideStep> = (0..288)
        .map(|k| {
            let start = Utc(at.0 + k * STEP_MS);
            let median_v = 236.0
                + 4.0 * (std::f64::consts::TAU * k as f64 / 144.0).sin()
                + if k % 2 == 0 { 0.3 } else { 0.0 };
            TideStep { at: start, low_v: median_v - 1.0, median_v, high_v: median_v + 1.0 }
        })
        .collect();
    let found: Vec<(TurnKind, i64)> =
        turns(&steps).iter().map(|t| (t.kind, (t.step.at.0 - at.0) / STEP_MS)).collect();
    use TurnKind::{High, Low};
    // A quarter and three quarters of each day; the second day's low is the last.
    let expected = [(High, 36), (Low, 107), (High, 180), (Low, 251)];
    assert_eq!(found.iter().map(|f| f.0).collect::<Vec<_>>(), expected.map(|e| e.0));
    for (found, expected) in found.iter().zip(expected) {
        assert!((found.1 - expected.1).abs() <= 2, "{found:?} {expected:?}");
    }
    assert_eq!(turns(&[]), []);
}
