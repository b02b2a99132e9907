//! The record against its peers: size on disk, a week as CSV, a year's statistics, an import.
//!
//! `cargo bench --bench record`; `RAILTIDE_BENCH_DAYS` sets the length of the year (365). Peers in the same run: the
//! sqlite3 shell on plain rows, DuckDB on Parquet with one thread (`tests/peers/setup` installs both).

#![allow(clippy::print_stdout, reason = "a benchmark's result is what it prints")]

#[path = "../support/peers.rs"]
mod peers;

use std::io::{BufWriter, Write};
use std::path::Path;
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

use railtide::mains::{Aggregator, Histogram};
use railtide::quantity::{Millivolts, Utc};
use railtide::reading::{ChannelId, ChannelQuantity, Quality, Reading};
use railtide::store::{ChannelSpec, OpenOptions, Store};

/// 2026-01-01T00:00:00Z.
const START: i64 = 1_767_225_600_000;
const DAY_S: i64 = 86_400;

/// A made-up mains: a daily swing, slow wander, and the noise of a 16-bit converter.
struct Mains {
    state: u64,
    wander: f64,
}

impl Mains {
    fn uniform(&mut self) -> f64 {
        self.state ^= self.state >> 12;
        self.state ^= self.state << 25;
        self.state ^= self.state >> 27;
        (self.state.wrapping_mul(0x2545_F491_4F6C_DD1D) >> 11) as f64 / (1_u64 << 53) as f64
    }

    fn noise(&mut self) -> f64 {
        (0..12).map(|_| self.uniform()).sum::<f64>() - 6.0
    }

    /// Mains and rail at second `s`, mV.
    fn at(&mut self, s: i64) -> [i32; 2] {
        self.wander += 0.000_02 * (0.0 - self.wander) + 0.006 * self.noise();
        let day = (s % DAY_S) as f64 / DAY_S as f64 * std::f64::consts::TAU;
        let volts = 236.0 + 3.0 * (day - 1.0).sin() + self.wander + 0.03 * self.noise();
        let rail = volts * 2.05 + 0.1 * self.noise();
        [(volts * 1000.0) as i32, (rail * 1000.0) as i32]
    }
}

fn spec(name: &str, quantity: ChannelQuantity) -> ChannelSpec {
    ChannelSpec {
        name: name.into(),
        was: None,
        quantity,
        sample_period_ms: 1000,
        amplifier: None,
        node: None,
    }
}

/// The median of five runs.
fn median(mut work: impl FnMut()) -> Duration {
    let mut times: Vec<Duration> = (0..5)
        .map(|_| {
            let begun = Instant::now();
            work();
            begun.elapsed()
        })
        .collect();
    times.sort();
    times[2]
}

fn once(work: impl FnOnce()) -> Duration {
    let begun = Instant::now();
    work();
    begun.elapsed()
}

fn show(what: &str, ours: Duration, peer: Option<(&str, Duration)>) {
    let ours_s = ours.as_secs_f64();
    match peer {
        Some((name, theirs)) => println!(
            "{what}: {ours_s:.3} s; {name} {:.3} s; ratio {:.1}",
            theirs.as_secs_f64(),
            theirs.as_secs_f64() / ours_s
        ),
        None => println!("{what}: {ours_s:.3} s"),
    }
}

fn sqlite3(shell: &Path, database: &Path, sql: &str) {
    let mut child = Command::new(shell)
        .arg(database)
        .env("TZ", "Europe/Lisbon")
        .stdin(Stdio::piped())
        .stdout(Stdio::null())
        .spawn()
        .expect("sqlite3");
    child.stdin.take().unwrap().write_all(sql.as_bytes()).unwrap();
    assert!(child.wait().unwrap().success());
}

fn main() {
    let days: i64 = std::env::var("RAILTIDE_BENCH_DAYS").ok().map_or(365, |n| n.parse().expect("days"));
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("house.db");
    let mut store = Store::open(&database, &OpenOptions::default()).unwrap();
    let ids = store
        .register_channels(&[
            spec("mains", ChannelQuantity::MainsRms),
            spec("hall.reservoir", ChannelQuantity::Rail),
        ])
        .unwrap();
    let end = Utc(START + days * DAY_S * 1000);

    let mut mains = Mains { state: 0x7a1d_e000_0000_0001, wander: 0.0 };
    let mut count = 0.0;
    let begun = Instant::now();
    let mut making = Duration::ZERO;
    for day in 0..days {
        let made = Instant::now();
        let mut of_day: [Vec<Reading>; 2] = Default::default();
        for s in day * DAY_S..(day + 1) * DAY_S {
            for (i, mv) in mains.at(s).into_iter().enumerate() {
                let reading = Reading {
                    channel: ids[i],
                    at: Utc(START + s * 1000),
                    value: Millivolts(mv),
                    quality: Quality::Good,
                };
                of_day[i].push(reading);
            }
        }
        making += made.elapsed();
        for (i, readings) in of_day.into_iter().enumerate() {
            count += readings.len() as f64;
            store.merge_recording(ids[i], 1000, readings).unwrap();
        }
    }
    let written = begun.elapsed().saturating_sub(making);
    println!("{days} days of two channels at 1 Hz: {:.1} million readings", count / 1e6);
    println!("merged into blocks: {:.2} million readings a second", count / 1e6 / written.as_secs_f64());
    drop(store);
    let bytes = std::fs::metadata(&database).unwrap().len();
    println!("on disk: {:.2} bytes a reading (goal 2.0)", bytes as f64 / count);

    let store = Store::open_read_only(&database).unwrap();
    year(&store, ids[0], end, folder.path());
    week(&database, folder.path(), &store, &ids, end);
    import(folder.path(), days.min(365));
}

fn year(store: &Store, channel: ChannelId, end: Utc, folder: &Path) {
    let ours = median(|| {
        let mut aggregator = Aggregator::new(Duration::from_secs(1));
        let mut histogram = Histogram::default();
        let mut intervals = 0_usize;
        store
            .each_hour(channel, Utc(START), end, |readings| {
                for reading in readings {
                    histogram.add(reading.value);
                    intervals += usize::from(aggregator.push(*reading).is_some());
                }
            })
            .unwrap();
        let p: Vec<_> =
            [1.0, 5.0, 50.0, 95.0, 99.0].iter().map(|p| histogram.percentile(*p).unwrap()).collect();
        assert!(intervals > 0 && p[0] < p[4]);
    });
    let peer = peers::python().map(|python| {
        let csv = folder.join("year.csv");
        let mut out = BufWriter::new(std::fs::File::create(&csv).unwrap());
        writeln!(out, "t,mv").unwrap();
        store
            .each_hour(channel, Utc(START), end, |readings| {
                for r in readings {
                    writeln!(out, "{},{}", r.at.0, r.value.0).unwrap();
                }
            })
            .unwrap();
        out.flush().unwrap();
        let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/bench/column_store.py");
        let output = Command::new(python).arg(script).arg(&csv).output().unwrap();
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let seconds: f64 = String::from_utf8_lossy(&output.stdout).trim().parse().unwrap();
        ("DuckDB on Parquet, one thread", Duration::from_secs_f64(seconds))
    });
    show("a year's 10-minute statistics and exact percentiles, from readings (goal 2)", ours, peer);
    let from_rows = median(|| {
        assert!(!store.intervals(channel, Utc(START), end).unwrap().is_empty());
    });
    show("a year's statistics, from intervals (goal 0.05 s)", from_rows, None);
}

fn week(database: &Path, folder: &Path, store: &Store, ids: &[ChannelId], end: Utc) {
    let from = Utc(end.0 - 7 * DAY_S * 1000);
    std::fs::write(
        folder.join("railtide.toml"),
        format!(
            "[site]\nname = \"bench\"\ntime_zone = \"Europe/Lisbon\"\n[store]\npath = \"{}\"\n",
            database.display()
        ),
    )
    .unwrap();
    let day = |at: Utc| chrono::DateTime::from_timestamp_millis(at.0).unwrap().to_rfc3339();
    let ours = median(|| {
        let status = Command::new(env!("CARGO_BIN_EXE_railtide"))
            .args(["export", "--from", &day(from), "--to", &day(end), "--config"])
            .arg(folder.join("railtide.toml"))
            .stdout(std::fs::File::create(folder.join("ours.csv")).unwrap())
            .status()
            .unwrap();
        assert!(status.success());
    });
    let peer = peers::program("sqlite3").map(|shell| {
        let plain = folder.join("plain.db");
        let mut conn = rusqlite::Connection::open(&plain).unwrap();
        conn.execute_batch("CREATE TABLE reading (key INTEGER PRIMARY KEY, mv INTEGER NOT NULL, quality INTEGER NOT NULL)")
            .unwrap();
        let tx = conn.transaction().unwrap();
        for id in ids {
            store
                .each_hour(*id, from, end, |readings| {
                    let mut put = tx.prepare_cached("INSERT INTO reading VALUES (?1, ?2, 0)").unwrap();
                    for r in readings {
                        put.execute((r.at.0 * 256 + i64::from(r.channel.0), r.value.0)).unwrap();
                    }
                })
                .unwrap();
        }
        tx.commit().unwrap();
        drop(conn);
        let sql = ".mode csv\nSELECT strftime('%Y-%m-%dT%H:%M:%f', (key >> 8) / 1000.0, 'unixepoch', 'localtime'), \
                   CASE key & 255 WHEN 1 THEN 'mains' ELSE 'hall.reservoir' END, mv / 1000.0, 'good' FROM reading ORDER BY key;\n";
        ("the sqlite3 shell on plain rows", median(|| sqlite3(&shell, &plain, sql)))
    });
    show("a week of two channels as CSV with local times (goal 8)", ours, peer);
    for (what, command) in [
        (
            "a week's report from a year's record (goal 0.5 s)",
            vec!["week", "--from", &day(from), "--to", &day(end)],
        ),
        ("a profile of a year (goal 1 s)", vec!["profile", "--from", &day(Utc(START)), "--to", &day(end)]),
    ] {
        let taken = median(|| {
            let status = Command::new(env!("CARGO_BIN_EXE_railtide"))
                .args(&command)
                .arg("--config")
                .arg(folder.join("railtide.toml"))
                .stdout(Stdio::null())
                .status()
                .unwrap();
            assert!(status.success());
        });
        show(what, taken, None);
    }
}

fn import(folder: &Path, days: i64) {
    let csv = folder.join("recording.csv");
    let mut out = BufWriter::new(std::fs::File::create(&csv).unwrap());
    writeln!(out, "time,volts").unwrap();
    let mut mains = Mains { state: 0x7a1d_e000_0000_0007, wander: 0.0 };
    let rows = days * DAY_S;
    for s in 0..rows {
        writeln!(out, "{},{:.3}", START / 1000 + s, f64::from(mains.at(s)[0]) / 1000.0).unwrap();
    }
    out.flush().unwrap();
    std::fs::write(
        folder.join("import.toml"),
        "[site]\nname = \"bench\"\ntime_zone = \"Europe/Lisbon\"\n[store]\npath = \"imported.db\"\n",
    )
    .unwrap();
    let ours = once(|| {
        let status = Command::new(env!("CARGO_BIN_EXE_railtide"))
            .args(["import", "--channel", "mains", "--config"])
            .arg(folder.join("import.toml"))
            .arg(&csv)
            .stdout(Stdio::null())
            .status()
            .unwrap();
        assert!(status.success());
    });
    println!("import: {:.2} million readings a second (goal 1)", rows as f64 / 1e6 / ours.as_secs_f64());
    let peer = peers::program("sqlite3").map(|shell| {
        let sql = format!(
            "CREATE TABLE reading (t INTEGER, volts REAL);\n.mode csv\n.import --skip 1 {} reading\n",
            csv.display()
        );
        ("the sqlite3 shell's .import", once(|| sqlite3(&shell, &folder.join("shell.db"), &sql)))
    });
    show("import of the year as CSV (goal: never slower)", ours, peer);
}
