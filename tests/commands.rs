//! The commands as a person and a program meet them: what they say, what they refuse, and how.

mod support;

use std::process::{Command, Stdio};
use std::time::Duration;

use support::{Bench, Line, Phone, wait_for};

fn railtide(arguments: &[&str]) -> Command {
    let mut command = Command::new(env!("CARGO_BIN_EXE_railtide"));
    command.args(arguments).env_remove("RAILTIDE_CONFIG").env_remove("RAILTIDE_LOG");
    command
}

/// Hides what differs from run to run: times, ages, folders, process ids.
fn settled(text: &str, bench: &Bench) -> String {
    let folder = bench.folder.path().display().to_string();
    let text = text.replace(&folder, "FOLDER");
    let mut out = String::new();
    for line in text.lines() {
        let hidden = match line.split_once("\": ") {
            Some((key, rest))
                if ["at", "since", "raised_at", "read_at", "age_s"]
                    .iter()
                    .any(|k| key.ends_with(&format!("\"{k}")))
                    && !rest.starts_with("null") =>
            {
                let comma = if rest.ends_with(',') { "," } else { "" };
                format!("{key}\": HIDDEN{comma}")
            }
            _ => line.to_owned(),
        };
        out += &hidden;
        out.push('\n');
    }
    out
}

/// A daemon that has read three lines of high mains and been stopped again; its record stays.
fn after_an_evening() -> Bench {
    let phone = Phone::start();
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), &phone.url());
    bench.change_config("on_delay = \"1 s\"", "on_delay = \"0 s\"");
    let daemon = bench.start();
    wait_for("the port is open", || bench.log().contains("port is open").then_some(()));
    line.send_at(0, &[("mains", 238_000), ("hall.reservoir", 470_000)]);
    wait_for("the notice arrives", || (!phone.notices().is_empty()).then_some(()));
    assert!(daemon.stop().success());
    bench
}

#[test]
fn check_says_back_what_it_understood_and_where_each_limit_is_reached() {
    let bench = Bench::hall("/dev/serial/by-id/usb-logger".as_ref(), "http://127.0.0.1:1/?key=secret");
    insta::assert_snapshot!(settled(&bench.say(&["check"]), &bench), @r#"
The site "hall" keeps the time of Europe/Lisbon; its mains is declared 230 V at 50 Hz.
The record is FOLDER/hall.db; readings are written to it every 1 s, alarms at once.
The logger "bench" speaks tide lines at 115200 baud on /dev/serial/by-id/usb-logger:
  "mains" is the mains, V r.m.s., a reading every 100 ms, ±(0.2 % + 0.1 V).
  "hall.reservoir" is the rail of "hall" at "reservoir", V, a reading every 100 ms, ±(0.5 % + 0.2 V).
The amplifier "hall": "reservoir" follows mains in proportion, from 452 V measured at 220 V of mains (idle, meter ±0.5 %). Other loadings and nodes are unknown.
  "reservoir" must stay under 480 V (anode supply limit): projected at idle, it is reached at 233.6 V of mains; the alarm's setpoint is 471 V (less its uncertainty), reached at 229.4 V of mains; measured, its setpoint is 477 V.
The condition rail-high is changed by the config.
Notices of priority low and above go to "phone" by webhook, http://127.0.0.1:1/?….
"#);
}

#[test]
fn check_shows_every_mistake_with_its_line_and_fails() {
    let bench = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    bench.change_config("declared_v = 230", "declared_v = \"230\"");
    bench.change_config("meter_pct", "metre_pct");
    let output = bench.run(&["check"]);
    assert!(!output.status.success());
    assert!(output.stdout.is_empty(), "results alone go to standard output");
    insta::assert_snapshot!(settled(&String::from_utf8_lossy(&output.stderr), &bench), @r#"
railtide: the config has mistakes, and nothing was done:
FOLDER/railtide.toml:5: declared_v = "230": expected a number such as 230
FOLDER/railtide.toml:36: metre_pct: no key of [amplifier.measured]; did you mean meter_pct, for example meter_pct = 1.0?
"#);
}

#[test]
fn now_and_alarm_tell_the_same_story_as_text_and_as_json() {
    let bench = after_an_evening();
    insta::assert_snapshot!(settled(&bench.say(&["now", "--format", "json"]), &bench), @r#"
{
  "site": "hall",
  "at": HIDDEN,
  "channels": [
    {
      "channel": "mains",
      "quantity": "mains_rms",
      "value_v": 238.0,
      "value_u_v": 0.665107510106449,
      "read_at": HIDDEN,
      "age_s": HIDDEN,
      "quality": "good",
      "fresh": true
    },
    {
      "channel": "hall.reservoir",
      "quantity": "rail",
      "value_v": 470.0,
      "value_u_v": 2.944486372867092,
      "read_at": HIDDEN,
      "age_s": HIDDEN,
      "quality": "good",
      "fresh": true
    }
  ],
  "rails": [
    {
      "amplifier": "hall",
      "node": "reservoir",
      "loading": "idle",
      "limit_v": 480.0,
      "why": "anode supply limit",
      "basis": "measured_pair",
      "projected_v": 488.9818181818182,
      "projected_u_v": 9.884644564242825,
      "projected_setpoint_v": 471.3735706042489,
      "headroom_v": -17.608247577569273,
      "measured_v": 470.0,
      "measured_u_v": 2.944486372867092,
      "measured_setpoint_v": 476.99777860021396,
      "proved_on": true,
      "setpoint_at_mains_v": 229.42961401091762
    }
  ],
  "alarms": [
    {
      "alarm": "rail-high:hall.reservoir",
      "state": "unacknowledged",
      "active": true,
      "priority": "high",
      "since": HIDDEN,
      "raised_at": HIDDEN,
      "facts": {
        "value": 488.9818181818182,
        "value_u": 9.884644564242825,
        "setpoint": 471.3735706042489,
        "limit": 480.0,
        "unit": "V",
        "mains_v": 238.0,
        "source": "projected",
        "loading": "idle",
        "proved_on": true
      },
      "advice": "Switch the amplifier off now if it is on, and leave it off until the mains has come down. Its capacitors stay charged after that: nobody opens it without training."
    }
  ]
}
"#);
    insta::assert_snapshot!(settled(&bench.say(&["alarm", "list", "--format", "json"]), &bench), @r#"
{
  "at": HIDDEN,
  "alarms": [
    {
      "alarm": "rail-high:hall.reservoir",
      "state": "unacknowledged",
      "active": true,
      "priority": "high",
      "since": HIDDEN,
      "raised_at": HIDDEN,
      "facts": {
        "value": 488.9818181818182,
        "value_u": 9.884644564242825,
        "setpoint": 471.3735706042489,
        "limit": 480.0,
        "unit": "V",
        "mains_v": 238.0,
        "source": "projected",
        "loading": "idle",
        "proved_on": true
      },
      "advice": "Switch the amplifier off now if it is on, and leave it off until the mains has come down. Its capacitors stay charged after that: nobody opens it without training."
    }
  ]
}
"#);
    let text = bench.say(&["now"]);
    assert!(text.contains("mains"), "{text}");
    let text = bench.say(&["alarm"]);
    assert!(text.contains("rail-high:hall.reservoir  UNACKNOWLEDGED, priority high"), "{text}");
    assert!(text.contains("Switch the amplifier off now"), "{text}");
}

#[test]
fn an_alarm_is_acknowledged_without_a_daemon_too() {
    let bench = after_an_evening();
    let answer = bench.say(&["alarm", "ack", "rail-high:hall.reservoir"]);
    insta::assert_snapshot!(answer, @r#"rail-high:hall.reservoir is acknowledged; it stays active until its condition goes away."#);
    let again = bench.run(&["alarm", "ack", "rail-high"]);
    assert!(!again.status.success());
    insta::assert_snapshot!(String::from_utf8_lossy(&again.stderr), @r#"railtide: the alarm rail-high:hall.reservoir is acknowledged: that can't be done to it now"#);
    assert_eq!(bench.count("SELECT count(*) FROM journal WHERE done_by IS NOT NULL"), Some(1));
}

#[test]
fn before_the_first_run_now_says_that_there_is_no_record_yet() {
    let bench = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    let output = bench.run(&["now"]);
    assert!(!output.status.success());
    insta::assert_snapshot!(settled(&String::from_utf8_lossy(&output.stderr), &bench), @r#"railtide: there is no database at FOLDER/hall.db: start `railtide run` once, or set `[store] path` to where it is"#);
}

#[test]
fn a_second_daemon_on_one_record_is_refused_with_the_first_ones_process_id() {
    let line = Line::new();
    let bench = Bench::hall(&line.device(), "http://127.0.0.1:1/");
    let first = bench.start();
    wait_for("the first runs", || bench.log().contains("port is open").then_some(()));
    let second = bench.run(&["run"]);
    assert!(!second.status.success());
    let said = String::from_utf8_lossy(&second.stderr).into_owned();
    assert!(said.contains(&format!("in use by process {}", first.pid())), "{said}");
    first.signal("INT");
    assert!(first.wait().success(), "SIGINT stops it in an orderly way");
    assert!(bench.log().contains("stopped"));
}

#[test]
fn a_config_that_names_no_logger_runs_nothing_and_says_so() {
    let bench = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    bench.write_config("[site]\nname = \"desk\"\ntime_zone = \"UTC\"\n[store]\npath = \"desk.db\"\n");
    let output = bench.run(&["run"]);
    assert!(!output.status.success());
    assert!(String::from_utf8_lossy(&output.stderr).contains("names no [[logger]]"));
    assert!(bench.run(&["check"]).status.success(), "a config without a logger is a good one");
}

#[test]
fn a_missing_config_names_the_places_that_were_looked_at() {
    let empty = tempfile::tempdir().unwrap();
    let output = railtide(&["now"])
        .current_dir(empty.path())
        .env("XDG_CONFIG_HOME", empty.path())
        .env("HOME", empty.path())
        .output()
        .unwrap();
    let said = String::from_utf8_lossy(&output.stderr).into_owned();
    if !std::path::Path::new("/etc/railtide/railtide.toml").exists() {
        assert!(!output.status.success());
        assert!(said.contains("railtide.toml") && said.contains("--config"), "{said}");
    }
}

#[test]
fn ports_answers_as_json() {
    let output = railtide(&["ports", "--format", "json"]).output().unwrap();
    assert!(output.status.success());
    let list: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert!(list.is_array());
}

#[test]
fn listen_tallies_the_simulated_logger_and_stores_nothing() {
    let folder = tempfile::tempdir().unwrap();
    let link = folder.path().join("logger");
    let mut simulated = railtide(&["simulate", "--period", "20ms", "--link"])
        .arg(&link)
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn()
        .unwrap();
    wait_for("the simulated logger has its link", || link.exists().then_some(()));
    let bench = Bench::hall(&link, "http://127.0.0.1:1/");
    let said = bench.say(&["listen", "--for", "3s", "--format", "json"]);
    simulated.kill().unwrap();
    simulated.wait().unwrap();
    let last: serde_json::Value = serde_json::from_str(said.lines().last().unwrap()).unwrap();
    assert!(last["lines"].as_u64().unwrap() > 10, "{last}");
    assert_eq!(last["channels"][0]["name"], "mains");
    let mains_v = last["channels"][0]["last_v"].as_f64().unwrap();
    assert!((200.0..260.0).contains(&mains_v), "{mains_v}");
    assert!(!bench.database().exists(), "listening stores nothing");
}

#[test]
fn garbage_and_strange_values_on_the_line_are_counted_said_once_and_store_nothing_wrong() {
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), "http://127.0.0.1:1/");
    let daemon = bench.start();
    wait_for("the port is open", || bench.log().contains("port is open").then_some(()));
    line.raw(b"\n");
    for i in 0..200_u32 {
        let noise: Vec<u8> =
            (0..64).map(|j| (i.wrapping_mul(2_654_435_761).wrapping_add(j * 40_503) >> 13) as u8).collect();
        line.raw(&noise);
        line.raw(b"\n");
    }
    line.raw(b"@1 100 mains=229000*0000\n");
    for body in
        ["2 200 mains=NaN", "3 300 mains=1e99", "4 400 mains=", "5 500 mains=-3000", "6 600 attic=230000"]
    {
        line.raw(format!("@{body}*{:04X}\n", support::crc_ccitt_false(body.as_bytes())).as_bytes());
    }
    let good = "7 700 mains=230500";
    line.raw(format!("@{good}*{:04X}\n", support::crc_ccitt_false(good.as_bytes())).as_bytes());
    wait_for("the good line is stored", || {
        (bench.count("SELECT count(*) FROM open WHERE mv = 230500 AND quality = 0")? == 1).then_some(())
    });
    assert!(daemon.stop().success());
    assert_eq!(
        bench.count("SELECT count(*) FROM open WHERE quality = 0"),
        Some(1),
        "only the good value is good"
    );
    assert_eq!(
        bench.count("SELECT count(*) FROM open WHERE quality <> 0"),
        Some(1),
        "the negative one is out of range"
    );
    let log = bench.log();
    for reason in ["wrong check sum", "no possible figure", "doesn't name"] {
        assert_eq!(log.matches(reason).count(), 1, "{reason} is said once:\n{log}");
    }
}

#[test]
fn an_unplugged_logger_is_found_again_where_its_link_then_points() {
    let mut first = Line::new();
    let folder = tempfile::tempdir().unwrap();
    let link = folder.path().join("usb-logger");
    std::os::unix::fs::symlink(first.device(), &link).unwrap();
    let bench = Bench::hall(&link, "http://127.0.0.1:1/");
    let daemon = bench.start();
    wait_for("a reading by the first device", || {
        first.send(&[("mains", 229_000)]);
        std::thread::sleep(Duration::from_millis(20));
        (bench.count("SELECT count(*) FROM open WHERE mv = 229000")? > 0).then_some(())
    });
    std::fs::remove_file(&link).unwrap();
    drop(first);
    wait_for("the loss is said", || bench.log().contains("not connected").then_some(()));
    let mut second = Line::new();
    std::os::unix::fs::symlink(second.device(), &link).unwrap();
    wait_for("a reading by the second device", || {
        second.send(&[("mains", 231_000)]);
        std::thread::sleep(Duration::from_millis(20));
        (bench.count("SELECT count(*) FROM open WHERE mv = 231000")? > 0).then_some(())
    });
    assert!(daemon.stop().success());
}
