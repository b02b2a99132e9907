//! `railtide week` through the built binary: the open recording of a real house (tests/data/README.md) against the rules,
//! the odd cases, and the page on paper.

mod support;

use std::path::Path;
use std::process::Command;

use support::{Bench, peers};

const AMPLIFIER: &str = r#"
[[amplifier]]
name = "NAME"
[amplifier.measured]
mains_v = 230
rail_v = 472
node = "reservoir"
loading = "idle"
meter_pct = 0.5
[[amplifier.limit]]
node = "reservoir"
max_v = MAX
"#;

fn amplifier(name: &str, max_v: u32) -> String {
    AMPLIFIER.replace("NAME", name).replace("MAX", &max_v.to_string())
}

/// A desk in UTC with these parts of a config, and no logger that speaks.
fn desk(more: &str) -> Bench {
    let bench = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    bench.write_config(&format!(
        "[site]\nname = \"hall\"\ntime_zone = \"Etc/UTC\"\nsupply_rules = [\"EN 50160\", \"AS 61000.3.100\"]\n\
         [store]\npath = \"hall.db\"\n[[logger]]\nport = \"/dev/null\"\n[[channel]]\nname = \"mains\"\n\
         quantity = \"mains_rms\"\n{more}"
    ));
    bench
}

fn import(bench: &Bench, text: &str) {
    let file = bench.folder.path().join("recording.csv");
    std::fs::write(&file, text).unwrap();
    bench.say(&["import", file.to_str().unwrap(), "--channel", "mains"]);
}

/// The house's recordings: `household_1min` or `household_5min_to_2007`.
fn house(bench: &Bench, name: &str) {
    let packed = Path::new(env!("CARGO_MANIFEST_DIR")).join(format!("tests/data/{name}.csv.gz"));
    let output = Command::new("gzip").arg("-dc").arg(packed).output().expect("gzip");
    import(bench, &String::from_utf8(output.stdout).unwrap());
}

fn close(value: &serde_json::Value, expected: f64, within: f64) {
    let value_f = value.as_f64().unwrap_or(f64::NAN);
    assert!((value_f - expected).abs() <= within, "{value} is not {expected}");
}

#[test]
fn a_real_houses_week_gives_the_handbooks_figures() {
    // Handbook oracle O32, the week of 2007-01-01 by 10-minute values made of two 5-minute means: n 1008, p1 232.433,
    // p50 241.130, p95 246.144, p99 247.316, highest 10-minute value 248.416, none over 253: all pass.
    let bench = desk(&amplifier("hall", 505));
    house(&bench, "household_5min_to_2007");
    let week = bench.json(&["week", "--week", "2007-W01"]);
    assert_eq!(week["intervals"], serde_json::json!({ "expected": 1008, "valid": 1008, "flagged": 0 }));
    for (key, volts) in [("p1_v", 232.433), ("p50_v", 241.130), ("p95_v", 246.144), ("p99_v", 247.316)] {
        close(&week["percentiles"][key], volts, 0.001);
    }
    assert!(week["rules"].as_array().unwrap().iter().all(|rule| rule["held"] == true), "{}", week["rules"]);
    assert_eq!(week["days"].as_array().unwrap().len(), 7);
    let rail = &week["amplifiers"][0];
    close(&rail["highest_rail_v"], week["max_v"].as_f64().unwrap() * 472.0 / 230.0, 1e-6);
    assert!(rail["over_setpoint_h"].as_f64() > rail["over_limit_h"].as_f64());
}

#[test]
fn the_json_is_that_of_the_description() {
    let bench = desk(&amplifier("hall", 505));
    // Two hours of 240 V a minute, one minute of 254 V in it.
    let mut text = String::from("time,volts\n");
    for minute in 0..120 {
        let volts = if minute == 65 { 254.0 } else { 240.0 };
        text += &format!("2026-11-24T{:02}:{:02}:00Z,{volts}\n", 18 + minute / 60, minute % 60);
    }
    import(&bench, &text);
    let week =
        bench.say(&["week", "--from", "2026-11-24 18:00", "--to", "2026-11-24 20:00", "--format", "json"]);
    insta::assert_snapshot!(week, @r#"
{
  "site": "hall",
  "from": "2026-11-24T18:00:00+00:00",
  "to": "2026-11-24T20:00:00+00:00",
  "time_zone": "Etc/UTC",
  "declared_v": 230.0,
  "intervals": {
    "expected": 12,
    "valid": 12,
    "flagged": 0
  },
  "percentiles": {
    "p1_v": 240.0,
    "p5_v": 240.0,
    "p50_v": 240.0,
    "p95_v": 240.64644034665838,
    "p99_v": 241.27851535227992
  },
  "min_v": 240.0,
  "max_v": 254.0,
  "rules": [
    {
      "rule": "EN 50160",
      "statistic": "share within",
      "low_v": 207.0,
      "high_v": 253.0,
      "share_pct": 100.0,
      "required_pct": 95.0,
      "held": null
    },
    {
      "rule": "EN 50160",
      "statistic": "all",
      "low_v": 195.5,
      "high_v": 253.0,
      "share_pct": 100.0,
      "required_pct": 100.0,
      "held": null
    },
    {
      "rule": "AS 61000.3.100",
      "statistic": "share within",
      "low_v": 216.0,
      "high_v": null,
      "share_pct": 100.0,
      "required_pct": 99.0,
      "held": null
    },
    {
      "rule": "AS 61000.3.100",
      "statistic": "share within",
      "low_v": null,
      "high_v": 253.0,
      "share_pct": 100.0,
      "required_pct": 99.0,
      "held": null
    }
  ],
  "days": [
    {
      "date": "2026-11-24",
      "intervals": {
        "expected": 12,
        "valid": 12,
        "flagged": 0
      },
      "min_v": 240.0,
      "rms_v": 240.12003942472884,
      "max_v": 254.0
    }
  ],
  "amplifiers": [
    {
      "name": "hall",
      "node": "reservoir",
      "loading": "idle",
      "limit_v": 505.0,
      "setpoint_v": 495.00540171791494,
      "over_limit_h": 0.016666666666666666,
      "over_setpoint_h": 0.016666666666666666,
      "highest_rail_v": 521.2521739130435,
      "highest_rail_u_v": 12.459047419355407,
      "at": "2026-11-24T19:05:00+00:00",
      "reduction_v": 26.246772195128585,
      "basis": "measured_pair",
      "excursions": [
        {
          "from": "2026-11-24T19:05:00+00:00",
          "length_s": 3300.0,
          "highest_v": 521.2521739130435
        }
      ]
    }
  ],
  "events": [
    {
      "kind": "swell",
      "from": "2026-11-24T19:05:00+00:00",
      "length_s": 60.0,
      "extreme_v": 254.0
    }
  ],
  "findings": [],
  "instrument": "channel \"mains\", one r.m.s. reading every 1 min, accuracy ±(0.5 % + 0.2 V) by the config"
}
"#);
    let text = bench.say(&["week", "--from", "2026-11-24 18:00", "--to", "2026-11-24 20:00"]);
    insta::assert_snapshot!(text, @r#"
hall: mains from Tue 24 Nov 18:00:00 to Tue 24 Nov 20:00:00 (Etc/UTC)
Measured by channel "mains", one r.m.s. reading every 1 min, accuracy ±(0.5 % + 0.2 V) by the config.
12 of 12 ten-minute intervals are valid, 0 flagged, 0 missing.

Mains, V: 1 % 240.0   5 % 240.0   median 240.0   95 % 240.6   99 % 241.3
Lowest reading 240.0 V, highest 254.0 V; declared 230 V.

 rule            statistic     limits, V       within    required  verdict         
 EN 50160        share within  207.0 to 253.0  100.00 %  95 %      not enough data 
 EN 50160        all           195.5 to 253.0  100.00 %  100 %     not enough data 
 AS 61000.3.100  share within  from 216.0      100.00 %  99 %      not enough data 
 AS 61000.3.100  share within  up to 253.0     100.00 %  99 %      not enough data 

 day         lowest V  r.m.s. V  highest V     valid 
 Tue 24 Nov     240.0     240.1      254.0  12 of 12 

The hall's reservoir (idle, in proportion from one measured pair): over its limit of 505 V for 1 min, over its setpoint of 495 V for 1 min; highest 521 V ± 12 V on Tue 24 Nov 19:05:00. A rail lower by 26 V (5.0 %) would have stayed under its setpoint throughout.
  Tue 24 Nov 19:05:00 for 55 min, up to 521 V

swell on Tue 24 Nov 19:05:00, 1 min: 254.0 V

10-minute r.m.s. values after the method of IEC 61000-4-30, from readings that are no half-cycle values: no class of that standard is claimed. Percentiles by linear interpolation (type 7) over valid intervals. Rails are projected: where each would have stood, had its amplifier been on all the time.
railtide warns; it is no protective device. Mains and the rails of a valve amplifier kill, and capacitors stay charged after the plug is pulled. Work inside an amplifier is for people trained and authorised for it; local codes and licensed practice come first.
"#);
}

#[test]
fn every_odd_stretch_gets_a_clear_answer() {
    let bench = desk("");
    let missing = bench.run(&["week"]);
    assert!(!missing.status.success());
    assert!(String::from_utf8_lossy(&missing.stderr).contains("there is no database"));

    let mut text = String::from("time,volts\n");
    for minute in 0..60 {
        text += &format!("2026-11-24T18:{minute:02}:00Z,231.5\n");
    }
    import(&bench, &text);
    let hour = bench.json(&["week", "--week", "2026-W48"]);
    assert_eq!(hour["intervals"], serde_json::json!({ "expected": 1008, "valid": 6, "flagged": 0 }));
    assert!(
        hour["rules"].as_array().unwrap().iter().all(|rule| rule["held"].is_null()),
        "an hour proves no week"
    );
    assert_eq!(hour["amplifiers"], serde_json::json!([]));
    assert!(bench.say(&["week", "--week", "2026-W48"]).contains("not enough data"));
    let future = bench.say(&["week", "--week", "2030-W10"]);
    assert!(future.contains("Nothing was recorded in this time"), "{future}");
    let page = bench.say(&["week", "--week", "2030-W10", "--format", "html"]);
    assert!(page.contains("Nothing was recorded") && !page.contains("<svg"), "{page}");
}

#[test]
fn two_amplifiers_are_each_said_and_a_week_with_a_change_of_clocks_has_an_hour_more() {
    let bench = desk(&(amplifier("hall", 505) + &amplifier("attic", 480)));
    bench.change_config("Etc/UTC", "Europe/Lisbon");
    house(&bench, "household_5min_to_2007");
    // Lisbon left summer time on 2007-10-28 (IANA time zone data).
    let week = bench.json(&["week", "--week", "2007-W43"]);
    assert_eq!(week["intervals"]["expected"], 169 * 6);
    assert_eq!(week["days"][6]["intervals"]["expected"], 150);
    let names: Vec<_> =
        week["amplifiers"].as_array().unwrap().iter().map(|rail| rail["name"].clone()).collect();
    assert_eq!(names, ["hall", "attic"]);
}

#[test]
fn a_broken_rule_says_by_how_many_and_an_owners_own_rule_is_judged_too() {
    let own = "[[rule]]\nname = \"house\"\nperiod = \"day\"\nsource = \"the owner\"\nstatus = \"own\"\n\
               [[rule.clause]]\nstatistic = \"all\"\nhigh_v = 242\n";
    let bench = desk(own);
    bench.change_config("[\"EN 50160\", \"AS 61000.3.100\"]", "[\"EN 50160\", \"house\"]");
    house(&bench, "household_1min");
    let text = bench.say(&["week", "--week", "2007-W01"]);
    assert!(text.contains("house") && text.contains("BROKEN"), "{text}");
    bench.change_config("\"house\"]", "\"hose\"]");
    let refused = bench.run(&["week"]);
    let said = String::from_utf8_lossy(&refused.stderr).into_owned();
    assert!(said.contains("did you mean \"house\""), "{said}");
}

#[test]
fn a_gap_is_shown_as_a_gap_and_markup_from_outside_is_text() {
    let bench = desk("");
    bench.change_config("name = \"hall\"", "name = \"<b>hall & home</b>\"");
    // Two days and nearly a half are missing from 2007-04-28 00:20 on.
    house(&bench, "household_5min_to_2007");
    let page = bench.say(&["week", "--week", "2007-W17", "--format", "html"]);
    assert!(page.contains("no data") && page.contains("class=\"gap\""));
    assert!(page.contains("&lt;b&gt;hall &amp; home&lt;/b&gt;") && !page.contains("<b>hall"));
    for outside in ["<script", "http://", "https://", "@import", "url("] {
        let found = page.replace("http://www.w3.org/2000/svg", "").contains(outside);
        assert!(!found, "the page asks for nothing: {outside}");
    }
}

#[test]
fn on_paper_the_week_is_two_sheets_of_a4() {
    let (Some(chromium), Some(pdfinfo)) = (peers::program("chromium"), peers::program("pdfinfo")) else {
        return;
    };
    let bench = desk(&(amplifier("hall", 505) + &amplifier("attic", 480)));
    house(&bench, "household_1min");
    let folder = bench.folder.path();
    let (page, pdf) = (folder.join("week.html"), folder.join("week.pdf"));
    bench.say(&["week", "--week", "2007-W01", "--format", "html", "--out", page.to_str().unwrap()]);
    let printed = Command::new(chromium)
        .args([
            "--headless",
            "--no-sandbox",
            "--disable-gpu",
            "--no-first-run",
            "--disable-background-networking",
        ])
        .args(["--disable-component-update", "--disable-sync", "--no-pdf-header-footer"])
        .arg(format!("--user-data-dir={}", folder.join("browser").display()))
        .arg(format!("--print-to-pdf={}", pdf.display()))
        .arg(&page)
        .output()
        .unwrap();
    assert!(printed.status.success(), "{}", String::from_utf8_lossy(&printed.stderr));
    let about = Command::new(pdfinfo).arg(&pdf).output().unwrap();
    let about = String::from_utf8_lossy(&about.stdout).into_owned();
    assert!(about.lines().any(|line| line.starts_with("Pages:") && line.ends_with(" 2")), "{about}");
    assert!(about.contains("A4"), "{about}");
}

#[test]
fn the_workbook_has_the_same_tables() {
    let Some(python) = peers::python() else { return };
    let bench = desk(&amplifier("hall", 505));
    house(&bench, "household_1min");
    let book = bench.folder.path().join("week.xlsx");
    bench.say(&["week", "--week", "2007-W01", "--format", "xlsx", "--out", book.to_str().unwrap()]);
    let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/peers/read_back.py");
    let output = Command::new(python).arg(script).arg("xlsx").arg(&book).output().unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let found: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    let rows = |sheet: &str| found[sheet]["rows"].as_u64().unwrap();
    assert_eq!((rows("rules"), rows("days"), rows("rails"), rows("intervals")), (4, 7, 1, 1008));
}
