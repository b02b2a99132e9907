//! Recordings in, rows out: the open recording of a real house (tests/data/README.md) through the built binary, and
//! what libraries of others make of it.

mod support;

use std::io::{Read, Write};
use std::path::{Path, PathBuf};
use std::process::Command;

use railtide::mains::Distribution;
use railtide::quantity::Utc;
use railtide::store::Store;
use support::{Bench, peers, wait_for};

const DESK: &str = r#"
[site]
name = "desk"
time_zone = "Europe/Paris"
[store]
path = "hall.db"
"#;

/// A desk with no logger.
fn desk() -> Bench {
    let bench = Bench::hall("/dev/null".as_ref(), "http://127.0.0.1:1/");
    bench.write_config(DESK);
    bench
}

/// The one-minute recording, unpacked into the bench's folder.
fn house(bench: &Bench) -> PathBuf {
    let packed = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/household_1min.csv.gz");
    let output = Command::new("gzip").arg("-dc").arg(packed).output().expect("gzip");
    assert!(output.status.success());
    let file = bench.folder.path().join("house.csv");
    std::fs::write(&file, output.stdout).unwrap();
    file
}

fn import(bench: &Bench, arguments: &[&str]) -> String {
    let mut all = vec!["import"];
    all.extend(arguments);
    bench.say(&all)
}

fn import_house(bench: &Bench) -> String {
    let file = house(bench);
    let file = file.to_str().unwrap();
    import(bench, &[file, "--channel", "mains", "--zone", "UTC", "--value", "volts"])
}

fn peer(kind: &str, arguments: &[&str]) -> Option<serde_json::Value> {
    let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/peers/read_back.py");
    let output = Command::new(peers::python()?).arg(script).arg(kind).args(arguments).output().unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    Some(serde_json::from_slice(&output.stdout).unwrap())
}

#[test]
fn a_recording_is_taken_once_however_often_it_is_imported() {
    let bench = desk();
    insta::assert_snapshot!(import_house(&bench), @r#"48419 readings of "mains", each standing for 1 min, are in the record."#);
    let store = Store::open_read_only(&bench.database()).unwrap();
    let id = store.channels().unwrap()[0].id;
    let all = || store.readings(id, Utc(0), Utc(i64::MAX)).collect::<Result<Vec<_>, _>>().unwrap();
    let (once, intervals) = (all(), store.intervals(id, Utc(0), Utc(i64::MAX)).unwrap());
    assert_eq!(once.len(), 48_419);
    import_house(&bench);
    assert_eq!(all(), once);
    assert_eq!(store.intervals(id, Utc(0), Utc(i64::MAX)).unwrap(), intervals);
}

#[test]
fn a_dry_run_shows_the_first_rows_as_understood_and_stores_nothing() {
    let bench = desk();
    let file = bench.folder.path().join("other.txt");
    let text = "made by a recorder\nDate;Time;U / mV\n16/12/2006;17:24:00;234840,0\n16/12/2006;17:25:00;233630,0\n\
                16/12/2006;17:26:00;?\n16/12/2006;17:27:00;233290,0\n";
    std::fs::write(&file, text).unwrap();
    let arguments = [
        file.to_str().unwrap(),
        "--channel",
        "mains",
        "--skip-lines",
        "1",
        "--date",
        "Date",
        "--time",
        "Time",
        "--value",
        "U / mV",
        "--scale",
        "0.001",
        "--time-format",
        "%d/%m/%Y %H:%M:%S",
        "--marks",
        "end",
    ];
    let mut dry = arguments.to_vec();
    dry.push("--dry-run");
    insta::assert_snapshot!(import(&bench, &dry), @r#"
Understood as readings of "mains", each standing for 1 min; nothing is stored.
  2006-12-16T17:23:00+01:00  234.840 V
  2006-12-16T17:24:00+01:00  233.630 V
  2006-12-16T17:26:00+01:00  233.290 V
1 row was left out: the value is no possible figure (line 5).
"#);
    assert!(!bench.database().exists());
    insta::assert_snapshot!(import(&bench, &arguments), @r#"
3 readings of "mains", each standing for 1 min, are in the record.
1 row was left out: the value is no possible figure (line 5).
"#);
    insta::assert_snapshot!(bench.say(&["export"]), @r#"
time,channel,value_v,quality
2006-12-16T17:23:00.000+01:00,mains,234.840,good
2006-12-16T17:24:00.000+01:00,mains,233.630,good
2006-12-16T17:26:00.000+01:00,mains,233.290,good
"#);
}

#[test]
fn what_an_import_cannot_understand_is_said_with_what_to_give() {
    let bench = desk();
    let file = bench.folder.path().join("other.csv");
    std::fs::write(&file, "when,volts\n01/02/2026 10:00,230\n").unwrap();
    let said = |arguments: &[&str]| {
        let mut all = vec!["import", file.to_str().unwrap(), "--channel", "mains"];
        all.extend(arguments);
        let output = bench.run(&all);
        assert!(!output.status.success());
        String::from_utf8_lossy(&output.stderr).into_owned()
    };
    assert!(said(&[]).contains("--time-format"));
    assert!(said(&["--value", "amps"]).contains("when, volts"));
    assert!(said(&["--time-format", "%d/%m/%Y %H:%M"]).contains("--sample-period"));
}

#[test]
fn the_hour_shown_twice_is_imported_in_order_and_said() {
    let bench = desk();
    let file = bench.folder.path().join("autumn.csv");
    let mut text = String::from("time,volts\n");
    // Paris, 2026-10-25: 02:00 to 02:59 comes twice (IANA time zone data).
    for hour in ["01", "02", "02", "03"] {
        for minute in (0..60).step_by(10) {
            text += &format!("2026-10-25 {hour}:{minute:02}:00,230.{minute:02}\n");
        }
    }
    std::fs::write(&file, text).unwrap();
    let said = import(&bench, &[file.to_str().unwrap(), "--channel", "mains"]);
    assert!(said.contains("24 readings"), "{said}");
    assert!(said.contains("12 times fell into the hour that the clocks show twice"), "{said}");
    let rows = bench.say(&["export", "--from", "2026-10-25", "--to", "2026-10-25"]);
    assert!(
        rows.contains("2026-10-25T02:50:00.000+02:00,mains,230.500,good\r\n2026-10-25T02:00:00.000+01:00"),
        "{rows}"
    );
}

#[test]
fn an_import_beside_the_running_daemon_is_merged_and_raises_no_alarm() {
    let mut line = support::Line::new();
    let bench = Bench::hall(&line.device(), "http://127.0.0.1:1/");
    let daemon = bench.start();
    wait_for("a live reading", || {
        line.send(&[("mains", 229_000)]);
        (bench.count("SELECT count(*) FROM open")? > 0).then_some(())
    });
    let file = bench.folder.path().join("high.csv");
    let mut text = String::from("time,volts\n");
    for minute in 0..60 {
        text += &format!("2026-01-05T10:{minute:02}:00Z,250.0\n");
    }
    std::fs::write(&file, text).unwrap();
    let said = import(&bench, &[file.to_str().unwrap(), "--channel", "mains"]);
    assert!(said.contains("60 readings"), "{said}");
    assert_eq!(bench.count("SELECT count(*) FROM interval WHERE rms_mv = 250000.0"), Some(6));
    assert!(daemon.stop().success());
    assert_eq!(bench.count("SELECT count(*) FROM journal"), Some(0), "250 V of long ago alarms nobody");
}

#[test]
fn csv_and_its_manifest_are_what_two_other_readers_and_a_hash_say() {
    let bench = desk();
    import_house(&bench);
    let file = bench.folder.path().join("week.csv");
    bench.say(&["export", "--week", "2007-W01", "--out", file.to_str().unwrap()]);
    let manifest: serde_json::Value =
        serde_json::from_slice(&std::fs::read(bench.folder.path().join("week.csv.manifest.json")).unwrap())
            .unwrap();
    assert_eq!(manifest["rows"][0]["rows"], 10_080);
    let output = Command::new("sha256sum").arg(&file).output().expect("sha256sum");
    let sum = String::from_utf8_lossy(&output.stdout).into_owned();
    assert!(sum.starts_with(manifest["sha256"].as_str().unwrap()), "{sum} {manifest}");
    let Some(found) = peer("csv", &[file.to_str().unwrap()]) else { return };
    assert_eq!(found["rows"], 10_080);
    assert_eq!(found["columns"], serde_json::json!(["time", "channel", "value_v", "quality"]));
    // 2007-01-01T00:00 in Paris, and a minute before the next week.
    assert_eq!(found["first_ms"], 1_167_606_000_000_i64);
    assert_eq!(found["last_ms"], 1_168_210_740_000_i64);
}

#[test]
fn a_workbook_has_typed_columns_and_a_sheet_for_each_kind() {
    let bench = desk();
    import_house(&bench);
    let file = bench.folder.path().join("day.xlsx");
    let name = file.to_str().unwrap();
    bench.say(&[
        "export",
        "readings",
        "intervals",
        "alarms",
        "--from",
        "2007-01-02",
        "--to",
        "2007-01-02",
        "--format",
        "xlsx",
        "--out",
        name,
    ]);
    let Some(found) = peer("xlsx", &[name]) else { return };
    assert_eq!(found["readings"]["rows"], 1440);
    assert_eq!(found["intervals"]["rows"], 144);
    assert_eq!(found["alarms"]["rows"], 0);
    assert_eq!(found["readings"]["types"], serde_json::json!(["datetime", "str", "str", "float", "str"]));
    assert_eq!(found["readings"]["first"][0], "2007-01-02 00:00:00");
    assert_eq!(found["readings"]["first"][1], "+01:00");
}

#[test]
fn too_many_rows_for_a_sheet_are_refused_with_the_command_to_use() {
    let bench = desk();
    let file = bench.folder.path().join("many.csv");
    let mut out = std::io::BufWriter::new(std::fs::File::create(&file).unwrap());
    writeln!(out, "time,volts").unwrap();
    for i in 0..1_048_576_i64 {
        writeln!(out, "{},{}.{:03}", 1_700_000_000 + i, 229 + i % 3, i % 1000).unwrap();
    }
    drop(out);
    import(&bench, &[file.to_str().unwrap(), "--channel", "mains"]);
    let output = bench.run(&["export", "--format", "xlsx", "--out", "many.xlsx"]);
    assert!(!output.status.success());
    let said = String::from_utf8_lossy(&output.stderr).into_owned();
    assert!(said.contains("1048576 readings are too many") && said.contains("--format csv"), "{said}");
    assert!(!bench.folder.path().join("many.xlsx").exists());
}

#[test]
fn blocks_are_read_by_the_formats_own_python_package_and_give_the_same_statistics() {
    let bench = desk();
    import_house(&bench);
    let Some(found) = peer("blocks", &[bench.database().to_str().unwrap(), "mains"]) else { return };
    let store = Store::open_read_only(&bench.database()).unwrap();
    let id = store.channels().unwrap()[0].id;
    let readings: Vec<_> = store.readings(id, Utc(0), Utc(i64::MAX)).collect::<Result<_, _>>().unwrap();
    assert_eq!(found["rows"], readings.len());
    assert_eq!(found["sum_mv"], readings.iter().map(|r| i64::from(r.value.0)).sum::<i64>());
    let intervals = store.intervals(id, Utc(0), Utc(i64::MAX)).unwrap();
    let starts: Vec<i64> = intervals.iter().map(|i| i.start.0).collect();
    assert_eq!(found["starts_ms"], serde_json::json!(starts));
    for (ours, numpys) in intervals.iter().zip(found["rms_v"].as_array().unwrap()) {
        assert!((ours.rms_v - numpys.as_f64().unwrap()).abs() < 1e-9, "{ours:?} {numpys}");
    }
    let volts = Distribution::new(readings.iter().map(|r| r.value.volts()));
    for (p, numpys) in
        [1.0, 5.0, 50.0, 95.0, 99.0].into_iter().zip(found["percentiles_v"].as_array().unwrap())
    {
        let ours = volts.percentile(p).unwrap();
        assert!((ours - numpys.as_f64().unwrap()).abs() < 1e-9, "{p}: {ours} {numpys}");
    }
}

#[test]
fn a_backup_is_made_while_the_daemon_writes_and_is_whole() {
    let mut line = support::Line::new();
    let bench = Bench::hall(&line.device(), "http://127.0.0.1:1/");
    let daemon = bench.start();
    wait_for("some readings", || {
        line.send(&[("mains", 229_000)]);
        (bench.count("SELECT count(*) FROM open")? > 3).then_some(())
    });
    let copy = bench.folder.path().join("copy.db");
    let output = bench.run(&["export", "--backup", copy.to_str().unwrap()]);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    assert!(
        !bench.run(&["export", "--backup", copy.to_str().unwrap()]).status.success(),
        "nothing is written over"
    );
    assert!(daemon.stop().success());
    let copied = rusqlite::Connection::open(&copy).unwrap();
    let check: String = copied.query_row("PRAGMA integrity_check", [], |row| row.get(0)).unwrap();
    assert_eq!(check, "ok");
    let rows: i64 = copied.query_row("SELECT count(*) FROM open", [], |row| row.get(0)).unwrap();
    assert!(rows > 3);
}

#[test]
fn json_lines_and_intervals_and_the_journal_are_given_out() {
    let bench = desk();
    import_house(&bench);
    let day = ["--from", "2007-01-02 10:00", "--to", "2007-01-02 10:20"];
    let say = |what: &str, format: &str| {
        let mut arguments = vec!["export", what, "--format", format];
        arguments.extend(day);
        bench.say(&arguments)
    };
    insta::assert_snapshot!(say("readings", "json").lines().next().unwrap(), @r#"{"channel":"mains","quality":"good","time":"2007-01-02T10:00:00.000+01:00","value_v":240.42}"#);
    insta::assert_snapshot!(say("intervals", "json"), @r#"
{"channel":"mains","covered_pct":100.0,"flagged":false,"max_v":241.9,"min_v":240.16,"readings":10,"rms_v":241.02881147281957,"start":"2007-01-02T10:00:00.000+01:00"}
{"channel":"mains","covered_pct":100.0,"flagged":false,"max_v":241.46,"min_v":239.12,"readings":10,"rms_v":240.15917059317138,"start":"2007-01-02T10:10:00.000+01:00"}
"#);
    insta::assert_snapshot!(say("intervals", "csv"), @r#"
start,channel,rms_v,min_v,max_v,readings,covered_pct,flagged
2007-01-02T10:00:00.000+01:00,mains,241.029,240.160,241.900,10,100.0,no
2007-01-02T10:10:00.000+01:00,mains,240.159,239.120,241.460,10,100.0,no
"#);
    insta::assert_snapshot!(say("alarms", "csv"), @r#"time,number,alarm,event,from,to,priority,by,value,setpoint,limit,unit,mains_v"#);
    let unknown = bench.run(&["export", "--channel", "attic"]);
    assert!(String::from_utf8_lossy(&unknown.stderr).contains("it has mains"));
    let mut nothing = String::new();
    bench
        .run(&["export", "--from", "2020-01-01", "--to", "2020-01-02"])
        .stdout
        .as_slice()
        .read_to_string(&mut nothing)
        .unwrap();
    assert_eq!(nothing, "time,channel,value_v,quality\r\n", "no rows is an answer too");
}

#[test]
fn a_damaged_record_says_what_cannot_be_read_and_gives_out_the_rest() {
    let bench = desk();
    import_house(&bench);
    let plain = rusqlite::Connection::open(bench.database()).unwrap();
    plain.execute("UPDATE block SET millivolts = x'00' WHERE key = (SELECT min(key) + 24 * 3600000 * 256 FROM block)", []).unwrap();
    assert_eq!(plain.changes(), 1);
    drop(plain);
    let output = bench.run(&["export"]);
    assert!(output.status.success());
    let said = String::from_utf8_lossy(&output.stderr).into_owned();
    insta::assert_snapshot!(said.replace(&bench.folder.path().display().to_string(), "FOLDER"), @r#"passed over: FOLDER/hall.db is damaged (the readings of channel 1 in the hour from 2006-12-17T17:00:00Z: pco InsufficientData error: [BitReader] out of bounds at bit 32 / 8): keep it as it is, set `[store] path` to a new file to go on recording, and save what can be read with `railtide export`"#);
    let rows = String::from_utf8_lossy(&output.stdout).lines().count();
    assert_eq!(rows, 48_419 - 60 + 1);

    // Where not even the first page can be read there is nothing to save, and the daemon makes no new file by itself.
    let mut bytes = std::fs::read(bench.database()).unwrap();
    bytes[..4096].fill(0x5a);
    std::fs::write(bench.database(), bytes).unwrap();
    let refused = bench.run(&["export"]);
    assert!(!refused.status.success());
    let said = String::from_utf8_lossy(&refused.stderr).into_owned();
    assert!(said.contains("hall.db"), "{said}");
    insta::assert_snapshot!(said.replace(&bench.folder.path().display().to_string(), "FOLDER"), @r#"railtide: FOLDER/hall.db is not a railtide database, or its first page is damaged: set `[store] path` to another file, or put a backup in its place"#);
}
