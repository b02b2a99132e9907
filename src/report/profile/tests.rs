//! A small hall by hand: every figure of its profile can be worked out on paper.

use super::*;
use crate::alarm::CONDITIONS;
use crate::config::Surroundings;
use crate::mains::TideStep;
use crate::watch::projecting;

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
    let projectors: Vec<_> = site.amplifiers.iter().map(|a| projecting(a, None).projector).collect();
    let to = Utc(SIX.0 + 1_800_000);
    let quarters = [interval(0, 234.5), interval(15, 236.5)];
    let known = Known { from: SIX, to, before: intervals, intervals, quarters: &quarters, as_of: to, tide };
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
    insta::assert_snapshot!(serde_json::to_string_pretty(&evening()).unwrap(), @r#"
    {
      "from": "2026-12-01T18:00:00+01:00",
      "to": "2026-12-01T18:30:00+01:00",
      "time_zone": "Europe/Berlin",
      "intervals": 3,
      "mains": {
        "working": [
          {
            "at": "18:00",
            "mean_v": 233.0,
            "low_v": 233.0,
            "high_v": 233.0,
            "count": 1
          },
          {
            "at": "18:10",
            "mean_v": 235.0,
            "low_v": 235.0,
            "high_v": 235.0,
            "count": 1
          },
          {
            "at": "18:20",
            "mean_v": 237.0,
            "low_v": 237.0,
            "high_v": 237.0,
            "count": 1
          }
        ],
        "weekend": []
      },
      "highest": [
        {
          "at": "2026-12-01T18:15:00+01:00",
          "rms_v": 236.5
        },
        {
          "at": "2026-12-01T18:00:00+01:00",
          "rms_v": 234.5
        }
      ],
      "rails": [
        {
          "amplifier": "hall",
          "node": "reservoir",
          "loading": "idle",
          "u_v": 11.214098626730562,
          "limit_v": 480.0,
          "setpoint_v": 468.6325383243961,
          "working": [
            {
              "at": "18:00",
              "mean_v": 478.7090909090909,
              "low_v": 478.7090909090909,
              "high_v": 478.7090909090909,
              "count": 1
            },
            {
              "at": "18:10",
              "mean_v": 482.8181818181818,
              "low_v": 482.8181818181818,
              "high_v": 482.8181818181818,
              "count": 1
            },
            {
              "at": "18:20",
              "mean_v": 486.92727272727274,
              "low_v": 486.92727272727274,
              "high_v": 486.92727272727274,
              "count": 1
            }
          ],
          "weekend": [],
          "days": [
            {
              "date": "2026-12-01",
              "recorded_h": 0.5,
              "over_limit_h": 0.3333333333333333,
              "over_setpoint_h": 0.5
            }
          ]
        }
      ],
      "as_of": "2026-12-01T18:30:00+01:00",
      "no_tide": null,
      "tide": [
        {
          "at": "2026-12-01T18:30:00+01:00",
          "low_v": 234.0,
          "median_v": 236.0,
          "high_v": 239.0
        },
        {
          "at": "2026-12-01T18:40:00+01:00",
          "low_v": 236.5,
          "median_v": 238.5,
          "high_v": 241.5
        },
        {
          "at": "2026-12-01T18:50:00+01:00",
          "low_v": 233.0,
          "median_v": 235.0,
          "high_v": 238.0
        }
      ],
      "turns": [
        {
          "at": "2026-12-01T18:40:00+01:00",
          "kind": "high",
          "mains_v": 238.5,
          "low_v": 236.5,
          "high_v": 241.5,
          "rails": [
            {
              "amplifier": "hall",
              "node": "reservoir",
              "loading": "idle",
              "rail_v": 490.0090909090909,
              "low_v": 485.9,
              "high_v": 496.1727272727273,
              "u_v": 12.123526328217407
            }
          ]
        }
      ]
    }
    "#);
}

#[test]
fn people_read_the_day_the_rail_and_the_turns() {
    insta::assert_snapshot!(text(&evening()), @r#"
    Mains by time of day, Tue 1 Dec 18:00 to Tue 1 Dec 18:30 (Europe/Berlin), V: mean and the band of 5 to 95 % of the 10-minute values

    hour   working days             weekends
    00:00  -                        -
    01:00  -                        -
    02:00  -                        -
    03:00  -                        -
    04:00  -                        -
    05:00  -                        -
    06:00  -                        -
    07:00  -                        -
    08:00  -                        -
    09:00  -                        -
    10:00  -                        -
    11:00  -                        -
    12:00  -                        -
    13:00  -                        -
    14:00  -                        -
    15:00  -                        -
    16:00  -                        -
    17:00  -                        -
    18:00  235.0  (233.2 to 236.8)  -
    19:00  -                        -
    20:00  -                        -
    21:00  -                        -
    22:00  -                        -
    23:00  -                        -

    The highest quarter hours of the last seven days:
      Tue 1 Dec 18:15  236.5 V
      Tue 1 Dec 18:00  234.5 V

    Rail reservoir of hall (idle) would stand highest at about 18:20: 487 V, 5 to 95 % 487 to 487 V, each ± 11 V.
      above its limit of 480 V: 66.7 % of the recorded time; above its setpoint of 469 V: 100.0 %
      longest on 2026-12-01: 0.3 h above the limit

    Tide table as of Tue 1 Dec 18:30
      high  Tue 1 Dec 18:40  mains 238.5 V (236.5 to 241.5 V)
            hall.reservoir idle would stand at 490 V (486 to 496 V, each ± 12 V)
      Bands: nine of ten 10-minute values are expected within them; seconds go further.
    railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
    "#);
}

#[test]
fn with_nothing_recorded_and_too_little_for_a_table_it_says_so() {
    let empty = profile(&[], &Err(NoForecast::TooShort { rows: 2 }));
    insta::assert_snapshot!(text(&empty), @r#"
    No mains is recorded between Tue 1 Dec 18:00 and Tue 1 Dec 18:30; choose another stretch, or look whether the logger is running.

    Tide table as of Tue 1 Dec 18:30
      None: the tide table needs 7 days of 24 hours that are at least half recorded, and there are 2; it comes by itself when they are there.
    "#);
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
