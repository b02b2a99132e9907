//! `check`, `curve` and `fit` through the built binary: what they say, what they refuse, and their JSON.

mod support;

use std::path::Path;

use insta::assert_snapshot;
use railtide::config::{Site, Surroundings};
use railtide::quantity::{Millivolts, Utc};
use railtide::reading::{ChannelQuantity, Quality, Reading};
use railtide::store::{Batch, ChannelSpec, OpenOptions, Store};
use railtide::supply::{Loading, SolveOptions, steady_state};
use serde_json::Value;
use support::Bench;

/// An amplifier stated the full way, at a site with no logger.
const FULL: &str = r#"
[site]
name = "desk"
time_zone = "Europe/Lisbon"
declared_v = 230
wave = { third_pct = 1.0, fifth_pct = -1.0 }
[store]
path = "desk.db"
[[amplifier]]
name = "hall"
[amplifier.transformer]
wound_for_v = 220
secondary_v = 350
source_ohm = 60
[amplifier.rectifier]
circuit = "bridge"
device = "silicon"
[[amplifier.filter]]
node = "reservoir"
capacitor_uf = 100
rated_v = 500
[[amplifier.filter]]
node = "screens"
series_ohm = 1000
capacitor_uf = 47
rated_v = 500
[amplifier.output]
type = "KT66"
count = 4
idle_ma_each = 40
full_ma_each = 75
at_v = 450
node = "reservoir"
bias = "winding"
[[amplifier.load]]
node = "screens"
bleeder_kohm = 220
[amplifier.heater]
nominal_v = 6.3
[[amplifier.limit]]
node = "reservoir"
max_v = 500
why = "anode supply limit"
"#;

const LOGGER: &str = r#"
[[logger]]
name = "bench"
port = "/dev/null"
[[channel]]
name = "mains"
quantity = "mains_rms"
sample_period_ms = 60000
accuracy_pct = 0.2
accuracy_v = 0.1
[[channel]]
name = "hall.reservoir"
quantity = "rail"
amplifier = "hall"
node = "reservoir"
sample_period_ms = 60000
accuracy_pct = 0.2
accuracy_v = 0.1
"#;

fn desk(config: &str) -> Bench {
    let bench = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    bench.write_config(config);
    bench
}

fn refusal(bench: &Bench, arguments: &[&str]) -> String {
    let output = bench.run(arguments);
    assert!(!output.status.success(), "{arguments:?} succeeded");
    assert!(output.stdout.is_empty(), "results alone go to standard output");
    String::from_utf8_lossy(&output.stderr).into_owned()
}

/// Figures to so many significant digits: what a later digit is may differ from machine to machine.
fn rounded(value: &Value, significant: i32) -> Value {
    match value {
        Value::Number(n) if n.is_f64() => {
            let v = n.as_f64().unwrap();
            let digits = if v == 0.0 { 0 } else { significant - 1 - v.abs().log10().floor() as i32 };
            let tens = 10f64.powi(digits);
            Value::from((v * tens).round() / tens)
        }
        Value::Array(all) => all.iter().map(|v| rounded(v, significant)).collect(),
        Value::Object(map) => map.iter().map(|(k, v)| (k.clone(), rounded(v, significant))).collect(),
        other => other.clone(),
    }
}

fn json(bench: &Bench, arguments: &[&str]) -> Value {
    serde_json::from_str(&bench.say(arguments)).unwrap()
}

/// The circuit of the config, for checks against the library.
fn circuit() -> railtide::supply::Circuit {
    let surroundings = Surroundings { conditions: &[], default_store: "desk.db".into() };
    let site = Site::parse(FULL, Path::new("f"), &surroundings).unwrap();
    site.amplifiers[0].circuit.clone().unwrap()
}

#[test]
fn check_says_back_the_whole_supply_and_what_is_wrong_with_it() {
    let bench = desk(FULL);
    let said = bench.say(&["check"]).replace(&bench.folder.path().display().to_string(), "FOLDER");
    assert_snapshot!(said, @r#"
    The site "desk" keeps the time of Europe/Lisbon; its mains is declared 230 V at 50 Hz.
    The record is FOLDER/desk.db; readings are written to it every 10 s, alarms at once.
    No logger: `run` has nothing to read; the commands that need none work.
    The amplifier "hall":
      Transformer wound for 220 V at 50 Hz: 350.0 V ± 7.0 V open-circuit, 60.0 Ω ± 6.0 Ω in one path.
      The mains wave has a crest factor of 1.386.
      Rectifier: bridge, silicon, 0.85 V and 0.05 Ω each.
      Filter: "reservoir" (100 µF, 500 V), then 1000 Ω to "screens" (47 µF, 500 V).
      It draws 160 mA at idle, 300 mA at full output from "reservoir" at 450 V (by the power 1.5 of the rail); what 220 kΩ take from "screens".
      At 230 V of mains its rails stand, by the circuit, solved, at
        unloaded: reservoir 503 V ± 13 V, screens 500 V ± 13 V
        idle: reservoir 458 V ± 11 V, screens 456 V ± 11 V
        full: reservoir 436 V ± 12 V, screens 434 V ± 12 V
      "reservoir" must stay under 500 V (anode supply limit): projected at idle, it is reached at 251.8 V of mains; the alarm's setpoint is 488 V (less its uncertainty), reached at 245.4 V of mains.
      Findings at 230 V of mains:
               100 µF at "reservoir": 1 min 9 s from 503 V (13 J) to 60 V through what is there; measure, do not trust time.
               47 µF at "screens": 1 min 9 s from 500 V (6 J) to 60 V through what is there; measure, do not trust time.
               The 220 kΩ from "screens" to 0 V bear 500 V and 1.14 W without load: rate them for more than that voltage, and for twice that heat.
               The heaters get 6.59 V; 6.3 V ± 10 % is 5.67 to 6.93 V.
               The core is driven at 1.045 times what it was wound for.
               With cold valves the capacitor at "reservoir" meets 503 V ± 13 V; its surge voltage (the warm-up is brief) is 550 V.
               With cold valves the capacitor at "screens" meets 500 V ± 13 V; its surge voltage (the warm-up is brief) is 550 V.
               Each KT66 turns 18.8 W into heat at idle; its sheet allows 25 W.
    No receiver: alarms are seen only by whoever asks (`railtide alarm`).
    "#);
}

#[test]
fn one_point_of_the_curve_as_json_has_the_keys_that_other_programs_rely_on() {
    let bench = desk(FULL);
    let point = json(
        &bench,
        &["curve", "hall", "--from", "230", "--to", "230", "--loading", "idle", "--format", "json"],
    );
    assert_snapshot!(serde_json::to_string_pretty(&rounded(&point, 4)).unwrap(), @r#"
    {
      "amplifier": "hall",
      "frequency_hz": 50.0,
      "points": [
        {
          "diode_mean_a": 0.08318,
          "diode_peak_a": 0.7821,
          "diode_rms_a": 0.2293,
          "dropper": null,
          "heater_v": 6.586,
          "inverse_peak_v": 464.7,
          "loading": "idle",
          "mains_v": 230.0,
          "nodes": [
            {
              "mean_v": 458.0,
              "node": "reservoir",
              "ripple_vpp": 11.69,
              "u_v": 11.19
            },
            {
              "mean_v": 455.9,
              "node": "screens",
              "ripple_vpp": 0.3369,
              "u_v": 11.16
            }
          ],
          "winding_loss_w": 6.308,
          "winding_peak_a": 0.7821,
          "winding_rms_a": 0.3242
        }
      ]
    }
    "#);
    let exact = steady_state(&circuit(), 230.0, Loading::Idle, &SolveOptions::default()).unwrap();
    let mean_v = point["points"][0]["nodes"][0]["mean_v"].as_f64().unwrap();
    assert!((mean_v - exact.nodes[0].mean_v).abs() < 1e-6);
}

#[test]
fn a_curve_holds_every_loading_and_mains_in_order_and_its_csv_and_chart_the_same_figures() {
    let bench = desk(FULL);
    let range = ["--from", "220", "--to", "240", "--step", "10"];
    fn curve<'a>(range: &[&'a str], more: &[&'a str]) -> Vec<&'a str> {
        [&["curve", "hall"][..], range, more].concat()
    }
    let report = json(&bench, &curve(&range, &["--format", "json"]));
    let points: Vec<(f64, &str)> = report["points"]
        .as_array()
        .unwrap()
        .iter()
        .map(|p| (p["mains_v"].as_f64().unwrap(), p["loading"].as_str().unwrap()))
        .collect();
    let expected: Vec<(f64, &str)> = ["unloaded", "idle", "full"]
        .into_iter()
        .flat_map(|loading| [220.0, 230.0, 240.0].map(|mains_v| (mains_v, loading)))
        .collect();
    assert_eq!(points, expected);

    let csv = bench.say(&curve(&range, &["--format", "csv"]));
    let rows: Vec<&str> = csv.split("\r\n").filter(|row| !row.is_empty()).collect();
    assert_eq!(rows.len(), 1 + 9 * 2, "a row a node, and their names");
    assert!(rows[0].starts_with("mains_v,loading,node,mean_v,ripple_vpp,u_v,"));
    let mean_v = report["points"][3]["nodes"][0]["mean_v"].as_f64().unwrap();
    let cells: Vec<&str> = rows[7].split(',').collect();
    assert_eq!(cells[..3], ["220", "idle", "reservoir"]);
    assert!((cells[3].parse::<f64>().unwrap() - mean_v).abs() < 1e-9, "{}", rows[7]);

    let svg = bench.say(&curve(&range, &["--format", "svg"]));
    assert_eq!(svg.matches("stroke-dasharray").count(), 3, "a line a loading");
    for word in ["unloaded", "idle", "full", "mains, V r.m.s.", "rail, V"] {
        assert!(svg.contains(word), "{word}");
    }
    let text = bench.say(&curve(&range, &[]));
    assert!(text.contains("Idle\n") && text.contains("240 V"), "{text}");
}

#[test]
fn what_makes_no_curve_is_refused_with_what_to_do() {
    let bench = desk(FULL);
    assert_snapshot!(refusal(&bench, &["curve", "hal"]), @r#"railtide: the config has no amplifier hal; there are hall"#);
    assert_snapshot!(refusal(&bench, &["curve", "hall", "--from", "240", "--to", "220"]), @r#"railtide: --to 220 is less than --from 240; give the lower mains first"#);
    assert_snapshot!(refusal(&bench, &["curve", "hall", "--step", "0"]), @r#"railtide: --step 0: expected volts above 0"#);
    assert_snapshot!(refusal(&bench, &["curve", "hall", "--format", "svg", "--node", "drivers"]), @r#"railtide: hall has no node drivers; there are reservoir, screens"#);
    assert!(refusal(&bench, &["curve", "hall", "--loading", "loud"]).contains("unloaded, idle or full"));
    let unknown = desk(&FULL.replace("full_ma_each = 75\n", ""));
    assert!(refusal(&unknown, &["curve", "hall", "--loading", "full"]).contains("full"));
    let short = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    assert_snapshot!(refusal(&short, &["curve", "hall"]), @r#"railtide: the config states no circuit of hall, and a measured pair alone gives no curve; state its supply the full way ([amplifier.transformer], [amplifier.rectifier], [[amplifier.filter]])"#);
}

/// 2026-11-02T00:00:00Z, a Monday.
const MONDAY: i64 = 1_793_577_600_000;

/// Fills the record with a day of minutes whose truth is known: the secondary 1.5 % over the config's, the source
/// 15 % under; off until 17:00, standby until 18:00, then at rest.
fn record_a_day(bench: &Bench) {
    let mut truth = circuit();
    truth.transformer.secondary_v.value *= 1.015;
    truth.transformer.source_ohm.value *= 0.85;
    let rails = [Loading::Unloaded, Loading::Idle].map(|loading| {
        let mains: Vec<f64> = (0..13).map(|i| 218.0 + 2.0 * f64::from(i)).collect();
        let states = railtide::supply::sweep(&truth, loading, &mains, &SolveOptions::default()).unwrap();
        mains.into_iter().zip(states).map(|(m, s)| (m, s.nodes[0].mean_v)).collect::<Vec<_>>()
    });
    let rail_v = |of: usize, mains_v: f64| {
        let above = rails[of].partition_point(|(m, _)| *m < mains_v).clamp(1, 12);
        let ((m0, v0), (m1, v1)) = (rails[of][above - 1], rails[of][above]);
        v0 + (v1 - v0) * (mains_v - m0) / (m1 - m0)
    };
    let mut store = Store::open(&bench.folder.path().join("desk.db"), &OpenOptions::default()).unwrap();
    let spec = |name: &str, quantity, node: Option<&str>| ChannelSpec {
        name: name.into(),
        was: None,
        quantity,
        sample_period_ms: 60_000,
        amplifier: node.map(|_| "hall".into()),
        node: node.map(str::to_owned),
    };
    let specs = [
        spec("mains", ChannelQuantity::MainsRms, None),
        spec("hall.reservoir", ChannelQuantity::Rail, Some("reservoir")),
    ];
    let ids = store.register_channels(&specs).unwrap();
    let mut readings = Vec::new();
    for minute in 0..1440i64 {
        let turn = minute as f64 / 1440.0 * std::f64::consts::TAU;
        let mains_v = 231.0 + 5.0 * turn.cos() + 1.5 * (37.0 * turn).sin();
        let noise_v = 0.3 * (minute as f64 * 2.399).sin();
        let rail_v = match minute {
            0..1020 => 0.2,
            1020..1080 => rail_v(0, mains_v) + noise_v,
            _ => rail_v(1, mains_v) + noise_v,
        };
        for (channel, volts) in ids.iter().zip([mains_v, rail_v]) {
            readings.push(Reading {
                channel: *channel,
                at: Utc(MONDAY + minute * 60_000),
                value: Millivolts::from_volts(volts).unwrap(),
                quality: Quality::Good,
            });
        }
    }
    store.commit(&Batch { readings, ..Batch::default() }).unwrap();
}

#[test]
fn a_fit_finds_the_truth_is_kept_and_the_curve_follows_it() {
    let bench = desk(&format!("{FULL}{LOGGER}"));
    record_a_day(&bench);
    let before = json(&bench, &["curve", "hall", "--from", "230", "--to", "230", "--format", "json"]);
    let tried = json(&bench, &["fit", "hall", "--dry-run", "--format", "json"]);
    assert_eq!((&tried["kept"], &tried["used"]), (&Value::from(false), &Value::from(false)));
    let mut made = json(&bench, &["fit", "hall", "--format", "json"]);
    let off = |of: &Value, unit: &str, truth: f64| {
        let figure = |key: &str| of[format!("{key}_{unit}")].as_f64().unwrap();
        ((figure("fitted") - truth) / figure("fitted_u"), figure("fitted_u") / figure("nameplate_u"))
    };
    for (off, shrunk) in
        [off(&made["secondary"], "v", 350.0 * 1.015), off(&made["source"], "ohm", 60.0 * 0.85)]
    {
        assert!(off.abs() < 1.0 && shrunk < 0.6, "{off} {shrunk}");
    }
    assert_eq!(made["told_apart"], true);
    made["made_at"] = "HIDDEN".into();
    assert_snapshot!(serde_json::to_string_pretty(&rounded(&made, 3)).unwrap(), @r#"
    {
      "amplifier": "hall",
      "from": "2026-11-02T00:00:00+00:00",
      "idle": null,
      "independent_pairs": 401.0,
      "kept": true,
      "made_at": "HIDDEN",
      "mains_max_v": 237.0,
      "mains_min_v": 229.0,
      "node": "reservoir",
      "not_before": null,
      "pairs": {
        "all": 1440,
        "idle": 345,
        "loaded": 0,
        "off": 1020,
        "outliers": 0,
        "unloaded": 56,
        "warming_up": 19
      },
      "residual_v": 0.314,
      "secondary": {
        "fitted_u_v": 1.32,
        "fitted_v": 355.0,
        "nameplate_u_v": 8.08,
        "nameplate_v": 350.0
      },
      "source": {
        "fitted_ohm": 51.0,
        "fitted_u_ohm": 0.345,
        "nameplate_ohm": 60.0,
        "nameplate_u_ohm": 6.93
      },
      "to": "2026-11-03T00:00:00+00:00",
      "told_apart": true,
      "used": true
    }
    "#);

    let after = json(&bench, &["curve", "hall", "--from", "230", "--to", "230", "--format", "json"]);
    let idle = |report: &Value, key: &str| report["points"][1]["nodes"][0][key].as_f64().unwrap();
    let mut truth = circuit();
    truth.transformer.secondary_v.value *= 1.015;
    truth.transformer.source_ohm.value *= 0.85;
    let truth_v =
        steady_state(&truth, 230.0, Loading::Idle, &SolveOptions::default()).unwrap().nodes[0].mean_v;
    assert!((idle(&after, "mean_v") - truth_v).abs() < idle(&after, "u_v"));
    assert!((idle(&before, "mean_v") - truth_v).abs() > 3.0, "the nameplate is some volts off");
    assert!(idle(&after, "u_v") < idle(&before, "u_v"));
    assert!(bench.say(&["check"]).contains("by the circuit, fitted to the record"));

    // After an entry of the service log the fit no longer holds, and nothing before it is taken.
    let event = "[[amplifier.event]]\non = 2026-11-02\nwhat = \"output valves changed\"\n";
    bench.write_config(&format!("{FULL}{event}{LOGGER}"));
    assert!(bench.say(&["check"]).contains("by the circuit, solved"));
    assert!(refusal(&bench, &["fit", "hall"]).contains("no time at which both"));
}

#[test]
fn a_fit_is_said_in_plain_words_and_without_standby_tells_that_it_cannot_tell() {
    let bench = desk(&format!("{FULL}{LOGGER}"));
    record_a_day(&bench);
    let text = bench.say(&[
        "fit",
        "hall",
        "--from",
        "2026-11-02 18:20",
        "--to",
        "2026-11-02 23:00",
        "--loading",
        "idle",
    ]);
    assert_snapshot!(text, @r#"
    The supply of the hall, fitted to 280 pairs of mains and "reservoir" from Mon 2 Nov 18:20:00 to Mon 2 Nov 23:00:00.
      seen       unloaded 0, idle 280, loaded 0, warming up or switching 0, off 0; 0 outliers
      mains      230.3 to 237.3 V
      secondary  358.6 V ± 3.0 V  (config: 350.0 V ± 8.1 V)
      source     60.0 Ω ± 6.9 Ω  (config: 60.0 Ω ± 6.9 Ω)
      residuals  0.31 V (one pair, robust); worth 280 independent pairs
    The record cannot tell secondary and source resistance apart: the config's source resistance stands, and the secondary alone was fitted. A record with both standby and idle would tell them.
    It is kept, and the rails are projected by it from now on (by a running daemon from its next start).
    "#);
}

#[test]
fn what_cannot_be_fitted_is_refused_with_what_to_do() {
    let bench = desk(FULL);
    assert_snapshot!(refusal(&bench, &["fit", "hall"]), @r#"railtide: the config has no mains channel, and a fit needs recorded pairs of mains and rail; add one"#);
    let with_logger = desk(&format!("{FULL}{LOGGER}"));
    assert!(refusal(&with_logger, &["fit", "hall"]).contains("there is no database"));
    record_a_day(&with_logger);
    let off = refusal(&with_logger, &["fit", "hall", "--to", "2026-11-02 16:00"]);
    assert_snapshot!(off, @r#"railtide: a fit needs at least 20 pairs with the amplifier unloaded or idle, and the record has 0 of 960 (960 with it off, 0 warming up or switching, 0 loaded): record more, or say what it did with --loading"#);
}

#[test]
fn two_limits_on_one_node_at_one_loading_are_one_alarm_and_a_mistake() {
    let twice = "[[amplifier.limit]]\nnode = \"reservoir\"\nmax_v = 480\n";
    let bench = desk(&format!("{FULL}{twice}"));
    let said = refusal(&bench, &["check"]);
    assert_snapshot!(said.replace(&bench.folder.path().display().to_string(), "FOLDER"), @r#"
    railtide: the config has mistakes, and nothing was done:
    FOLDER/railtide.toml:45: node = "reservoir": the limit of line 41 is on the same node at loading idle; expected another node or loading, or only the stricter of the two
    "#);
    let other = desk(&format!("{FULL}{twice}loading = \"unloaded\"\n"));
    assert!(other.say(&["check"]).contains("480 V"));
}

#[test]
fn a_valve_rectifier_used_beyond_its_sheet_is_said_from_the_solved_supply() {
    let config = FULL
        .replace(
            "secondary_v = 350\nsource_ohm = 60",
            "winding = \"centre-tapped\"\nsecondary_v = 380\nsource_ohm = 40",
        )
        .replace("circuit = \"bridge\"\ndevice = \"silicon\"", "circuit = \"full-wave\"\ndevice = \"EZ80\"")
        .replace("capacitor_uf = 100", "capacitor_uf = 220");
    let said = desk(&config).say(&["check"]);
    let wrong: Vec<&str> =
        said.lines().filter(|line| line.contains("EZ80") && line.contains("WRONG")).collect();
    assert_snapshot!(wrong.join("\n"), @r#"
    WRONG  The EZ80 charges 220 µF first; its sheet allows 50 µF.
    WRONG  The EZ80 has 40 Ω in each path; its sheet asks for 300 Ω at 397 V.
    WRONG  The EZ80 meets 1090 V of inverse voltage unloaded; its sheet allows 1000 V.
    WRONG  The EZ80 gives 161 mA (idle); its sheet allows 90 mA.
    WRONG  The EZ80's charging pulses reach 595 mA in each anode (idle); its sheet allows 270 mA.
    WRONG  The EZ80 gives 267 mA (full); its sheet allows 90 mA.
    WRONG  The EZ80's charging pulses reach 866 mA in each anode (full); its sheet allows 270 mA.
    "#);
}
