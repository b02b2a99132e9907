//! SIGKILL at random moments under load: nothing that was committed is lost, no alarm is raised twice, no notice lost.
//!
//! `RAILTIDE_KILLS` sets the number of kills (20 here; `tests/slow/kills` takes 200).

#![allow(clippy::print_stdout, reason = "what the drill met is worth reading")]

mod support;

use std::collections::BTreeMap;
use std::time::Duration;

use support::{Bench, Line, Phone, wait_for};

/// A small generator of its own (Marsaglia's xorshift, 2003), so that a run can be repeated by its seed.
struct Random(u64);

impl Random {
    fn below(&mut self, limit: u64) -> u64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        self.0 % limit
    }
}

#[test]
fn a_daemon_killed_at_random_moments_under_load_loses_nothing_that_was_committed_and_warns_once() {
    let kills: u32 = std::env::var("RAILTIDE_KILLS").ok().and_then(|n| n.parse().ok()).unwrap_or(20);
    let seed = std::env::var("RAILTIDE_SEED").ok().and_then(|n| n.parse().ok()).unwrap_or(0x5EED_1234_ABCD);
    let mut random = Random(seed);
    let receiver = Phone::start();
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), &receiver.url());
    bench.change_config(r#"commit_every = "1 s""#, r#"commit_every = "100 ms""#);
    bench.change_config("on_delay = \"1 s\"\noff_delay = \"1 s\"", "on_delay = \"0 s\"\noff_delay = \"0 s\"");

    let mut known = 0;
    for round in 0..kills {
        let mut daemon = bench.start();
        // High and low by turns, changing at a random moment within the round, so that kills meet alarms on their way.
        let lines = 20 + random.below(60);
        let turn = random.below(lines);
        for i in 0..lines {
            let high = (round % 2 == 0) == (i >= turn);
            line.send(&[("mains", if high { 240_000 } else { 224_000 } + i as i64)]);
            std::thread::sleep(Duration::from_millis(5));
        }
        std::thread::sleep(Duration::from_millis(random.below(120)));
        let committed = bench.count("SELECT count(*) FROM open").unwrap_or(0);
        assert!(daemon.is_running(), "the daemon ended by itself");
        daemon.kill();
        if committed > 0 {
            let found = bench.count("SELECT count(*) FROM open").expect("the record opens after a kill");
            assert!(
                found >= committed,
                "round {round} (seed {seed}): {found} of {committed} committed readings"
            );
            assert!(found >= known, "round {round} (seed {seed}): {found} after {known} before");
            known = found;
        }
    }
    assert!(known > 0, "the load reached the record");

    let starts = || bench.log().matches("port is open").count();
    let before = starts();
    let daemon = bench.start();
    wait_for("the last daemon reads", || (starts() > before).then_some(()));
    wait_for("every notice of the outbox is delivered", || {
        line.send(&[("mains", 224_000)]);
        let waiting = bench.count("SELECT count(*) FROM outbox WHERE state = 'waiting'")?;
        let active = bench.count("SELECT count(*) FROM alarm WHERE active")?;
        (waiting == 0 && active == 0).then_some(())
    });
    assert!(daemon.stop().success());

    let record = bench.database_connection().unwrap();
    let check: String = record.query_row("PRAGMA integrity_check", [], |row| row.get(0)).unwrap();
    assert_eq!(check, "ok");

    // The journal's numbers have no gap, and a rail-high is never raised while it stands.
    let mut entries = record.prepare("SELECT seq, condition, event FROM journal ORDER BY seq").unwrap();
    let rows: Vec<(i64, String, String)> = entries
        .query_map([], |r| Ok((r.get(0)?, r.get(1)?, r.get(2)?)))
        .unwrap()
        .map(Result::unwrap)
        .collect();
    let mut raised = false;
    let mut raises = 0;
    for (i, (seq, condition, event)) in rows.iter().enumerate() {
        assert_eq!(*seq, i as i64 + 1, "the journal has a gap");
        if condition == "rail-high" {
            match event.trim_matches('"') {
                "raise" => {
                    assert!(!raised, "rail-high raised twice at {seq}");
                    raised = true;
                    raises += 1;
                }
                "clear" => raised = false,
                _ => {}
            }
        }
    }
    assert!(raises > kills as i64 / 8, "the kills met alarms: {raises} raised");

    // Every notice of the outbox arrived; a repeat carries the key of the first.
    let mut arrived: BTreeMap<String, usize> = BTreeMap::new();
    for body in receiver.notices() {
        *arrived.entry(body["idempotency_key"].as_str().unwrap().to_owned()).or_default() += 1;
    }
    let notices = bench.count("SELECT count(*) FROM outbox").unwrap();
    assert_eq!(arrived.len() as i64, notices, "each notice arrived, and nothing that isn't in the outbox");
    let repeats: usize = arrived.values().map(|times| times - 1).sum();
    println!(
        "{kills} kills, {known} readings, {raises} raised, {notices} notices, {repeats} sent again by a restart"
    );
    assert!(
        repeats as u32 <= kills,
        "a notice is repeated only by the restart that fell between answer and commit"
    );
}
