//! Figures of the mains against general-purpose libraries (numpy, pandas) on the open recording, to the last printed
//! digit, and the tide table against the same method written in numpy.

#[path = "support/peers.rs"]
mod peers;
#[path = "support/recording.rs"]
mod recording;

use std::path::Path;
use std::process::Command;
use std::time::Duration;

use chrono_tz::Tz;
use railtide::mains::{Distribution, Interval, SupplyRule, Verdict, by_time_of_day, forecast, intervals};
use railtide::reading::Reading;
use serde_json::Value;

/// What a script of `tests/reference` prints; `None` without Python.
fn reference(script: &str, arguments: &[&str]) -> Option<Value> {
    let python = peers::python()?;
    let here = Path::new(env!("CARGO_MANIFEST_DIR"));
    let out = Command::new(python)
        .arg(here.join("tests/reference").join(script))
        .args(arguments)
        .current_dir(here.join("tests/data"))
        .output()
        .expect("Python runs");
    assert!(out.status.success(), "{script}: {}", String::from_utf8_lossy(&out.stderr));
    Some(serde_json::from_slice(&out.stdout).expect("JSON"))
}

fn text(value: &Value) -> &str {
    value.as_str().unwrap_or_else(|| panic!("no text: {value}"))
}

fn figures_agree(file: &str, period_s: u64, readings: Vec<Reading>) {
    let Some(theirs) = reference("mains_figures.py", &[file, &period_s.to_string()]) else { return };
    let ours = intervals(readings, Duration::from_secs(period_s));
    let rows = theirs["intervals"].as_array().expect("intervals");
    assert_eq!(ours.len(), rows.len());
    for (ours, theirs) in ours.iter().zip(rows) {
        assert_eq!(Some(ours.start.0 / 1000), theirs[0].as_i64());
        assert_eq!(format!("{:.3}", ours.rms_v), text(&theirs[1]), "{ours:?}");
        assert_eq!(Some(u64::from(ours.count)), theirs[2].as_u64(), "{ours:?}");
    }
    let whole: Vec<&Interval> = ours.iter().filter(|i| i.covered > 0.999).collect();
    let values = Distribution::new(whole.iter().map(|i| i.rms_v));
    for (pct, theirs) in theirs["percentiles"].as_object().expect("percentiles") {
        let ours = values.percentile(pct.parse().expect("a number")).expect("a percentile");
        assert_eq!(format!("{ours:.3}"), text(theirs), "percentile {pct}");
    }
    let share = |share: Option<f64>| format!("{:.3}", 100.0 * share.expect("a share"));
    assert_eq!(share(values.share_within(235.0, 245.0)), text(&theirs["within_pct"]));
    assert_eq!(share(values.share_above(245.0)), text(&theirs["above_pct"]));
    assert_eq!(format!("{:.3}", values.max().expect("a highest")), text(&theirs["max"]));

    let hours = by_time_of_day(whole.iter().map(|i| (i.start, i.rms_v)), Tz::UTC, Duration::from_secs(3600));
    let rows = theirs["hours"].as_array().expect("hours");
    assert_eq!(hours.len(), rows.len());
    for (ours, theirs) in hours.iter().zip(rows) {
        assert_eq!(Some(u64::from(ours.minute / 60)), theirs[0].as_u64());
        for (ours, theirs) in [(ours.mean_v, &theirs[1]), (ours.low_v, &theirs[2]), (ours.high_v, &theirs[3])]
        {
            assert_eq!(format!("{ours:.3}"), text(theirs));
        }
    }
    let highest = hours.iter().max_by(|a, b| a.mean_v.total_cmp(&b.mean_v)).expect("an hour");
    assert_eq!(Some(u64::from(highest.minute / 60)), theirs["highest_hour"].as_u64());
}

#[test]
fn figures_of_a_year_of_five_minute_means_equal_numpys_and_pandas() {
    figures_agree("household_5min_to_2007.csv.gz", 300, recording::year());
}

#[test]
fn figures_of_a_month_of_one_minute_means_equal_numpys_and_pandas() {
    figures_agree("household_1min.csv.gz", 60, recording::month());
}

#[test]
fn a_real_week_has_the_figures_that_were_computed_for_it_elsewhere() {
    // Handbook oracle O32: 2007-01-01 to 07 of the open recording, computed outside this project, within 1 mV.
    let (from, to) = (recording::utc("2007-01-01T00:00:00Z"), recording::utc("2007-01-08T00:00:00Z"));
    let all = recording::year_of_intervals();
    let week: Vec<Interval> = all.into_iter().filter(|i| (from..to).contains(&i.start)).collect();
    let values = Distribution::new(week.iter().map(|i| i.rms_v));
    assert_eq!(values.len(), 1008);
    let mean = week.iter().map(|i| i.rms_v).sum::<f64>() / 1008.0;
    let percentile = |pct| values.percentile(pct).unwrap();
    for (ours, theirs) in [
        (mean, 240.922),
        (percentile(1.0), 232.433),
        (percentile(50.0), 241.130),
        (percentile(95.0), 246.144),
        (percentile(99.0), 247.316),
        (values.max().unwrap(), 248.416),
    ] {
        assert!((ours - theirs).abs() < 1e-3, "{ours} {theirs}");
    }
    assert_eq!(values.share_above(253.0), Some(0.0));
    for rule in ["EN 50160", "IEC 60038", "UK ESQCR", "AS 61000.3.100"] {
        let rule = SupplyRule::named(rule).unwrap();
        let verdicts = rule.judge(230.0, from, to, &week);
        assert!(verdicts.iter().all(|v| v.verdict == Verdict::Held), "{verdicts:?}");
    }
}

#[test]
fn the_tide_table_equals_the_same_method_written_in_numpy() {
    let moments =
        ["2007-02-03T00:00:00Z", "2007-05-09T18:00:00Z", "2007-08-14T07:30:00Z", "2007-12-20T20:10:00Z"];
    let mut arguments = vec!["household_5min_to_2007.csv.gz"];
    arguments.extend(moments);
    let Some(theirs) = reference("tide_table.py", &arguments) else { return };
    let all = recording::year_of_intervals();
    for (moment, theirs) in moments.iter().zip(theirs.as_array().expect("tables")) {
        let table = forecast(&all, recording::utc(moment), Duration::from_secs(86_400), Tz::UTC).unwrap();
        assert_eq!(theirs.as_array().map(Vec::len), Some(table.steps.len()));
        for (step, theirs) in table.steps.iter().zip(theirs.as_array().expect("a table")) {
            for (ours, theirs) in
                [step.low_v, step.median_v, step.high_v].iter().zip(theirs.as_array().expect("three"))
            {
                let theirs = theirs.as_f64().expect("volts");
                assert!((ours - theirs).abs() < 1e-6, "{moment}: {step:?} {theirs}");
            }
        }
    }
}
