use super::*;
use crate::alarm::CONDITIONS;
use crate::config::Surroundings;
use crate::mains::TideStep;
use crate::watch::projector;

const HALL: &str = r#"
[site]
name = "hall"
time_zone = "Europe/Berlin"
[[logger]]
name = "bench"
port = "/dev/null"
[[channel]]
name = "mains"
quantity = "mains_rms"
[[amplifier]]
name = "hall"
[amplifier.measured]
mains_v = 220
rail_v = 452
node = "reservoir"
loading = "idle"
[[amplifier.limit]]
node = "reservoir"
max_v = 480
"#;

/// 2026-12-01T18:00:00+01:00, a Tuesday.
const SIX: Utc = Utc(1_796_144_400_000);

fn interval(minutes: i64, rms_v: f64) -> Interval {
    let start = Utc(SIX.0 + 60_000 * minutes);
    Interval { start, rms_v, min_v: rms_v, max_v: rms_v, count: 600, covered: 1.0, flagged: false }
}

/// A table whose median is each of `medians` in turn.
fn table(medians: &[f64]) -> TideTable {
    let step = |(k, median_v): (usize, &f64)| TideStep {
        at: Utc(SIX.0 + 600_000 * (k as i64 + 3)),
        low_v: median_v - 2.0,
        median_v: *median_v,
        high_v: median_v + 3.0,
    };
    let steps: Vec<TideStep> = medians.iter().enumerate().map(step).collect();
    TideTable { issued_at: steps[0].at, rows: 28, steps }
}

fn profile(intervals: &[Interval], tide: &Result<TideTable, NoForecast>) -> Profile {
    let conditions: Vec<&str> = CONDITIONS.iter().map(|c| c.name).collect();
    let surroundings = Surroundings { conditions: &conditions, default_store: "hall.db".into() };
    let site = Site::parse(HALL, "railtide.toml".as_ref(), &surroundings).unwrap();
    let projectors: Vec<_> = site.amplifiers.iter().map(projector).collect();
    let to = Utc(SIX.0 + 1_800_000);
    let quarters = [interval(0, 234.5), interval(15, 236.5)];
    let known = Known { from: SIX, to, intervals, quarters: &quarters, as_of: to, tide };
    Profile::new(&site, &projectors, &known)
}

fn text(profile: &Profile) -> String {
    let mut text = String::new();
    profile_text(profile, &mut text).unwrap();
    text
}

fn evening() -> Profile {
    let intervals = [interval(0, 233.0), interval(10, 235.0), interval(20, 237.0)];
    profile(&intervals, &Ok(table(&[236.0, 238.5, 235.0])))
}

#[test]
fn the_json_holds_what_programs_were_promised() {
    insta::assert_snapshot!(serde_json::to_string_pretty(&evening()).unwrap(), @r#""#);
}

#[test]
fn people_read_the_day_the_rail_and_the_turns() {
    insta::assert_snapshot!(text(&evening()), @r#""#);
}

#[test]
fn with_nothing_recorded_and_too_little_for_a_table_it_says_so() {
    let empty = profile(&[], &Err(NoForecast::TooShort { rows: 2 }));
    insta::assert_snapshot!(text(&empty), @r#""#);
    assert_eq!(empty.tide.len(), 0);
}

#[test]
fn the_rail_and_its_band_are_the_curve_at_the_bands_edges() {
    let profile = evening();
    let rail = &profile.turns[0].rails[0];
    for (rail_v, mains_v) in [(rail.low_v, 236.5), (rail.rail_v, 238.5), (rail.high_v, 241.5)] {
        assert!((rail_v - 452.0 / 220.0 * mains_v).abs() < 1e-9);
    }
    // Above 480 V at more than 233.63 V: two of three intervals.
    assert!((profile.rails[0].days[0].over_limit_h - 1.0 / 3.0).abs() < 1e-9);
}

#[test]
fn the_csv_has_a_row_for_each_time_of_day() {
    let mut out = Vec::new();
    profile_csv(&evening(), &mut out).unwrap();
    let text = String::from_utf8(out).unwrap();
    let rows: Vec<&str> = text.split("\r\n").collect();
    assert_eq!(rows[0], "of,loading,days,time,mean_v,low_v,high_v,count");
    assert_eq!(rows[2], "mains,,working,18:10,235.000,235.000,235.000,1");
    assert_eq!(rows.len(), 1 + 3 + 3 + 1, "{text}");
}
