//! The main job, whole: the built binary on a real pseudo-terminal, a scripted evening, one notice at a real local
//! receiver, and the commands that tell the same story.

mod support;

use std::time::Duration;

use support::{Bench, Line, Phone, wait_for};

/// Sends mains at 20 lines a second until `until` holds.
fn keep_sending(line: &mut Line, mains_mv: i64, what: &str, mut until: impl FnMut() -> bool) -> u64 {
    let mut sent = 0;
    wait_for(what, || {
        for _ in 0..5 {
            line.send(&[("mains", mains_mv + (sent as i64 % 7))]);
            sent += 1;
            std::thread::sleep(Duration::from_millis(20));
        }
        until().then_some(())
    });
    sent
}

#[test]
fn a_scripted_evening_is_stored_warned_of_once_acknowledged_and_over() {
    let receiver = Phone::start();
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), &receiver.url());
    let daemon = bench.start();
    let mut sent = 0;

    sent += keep_sending(&mut line, 226_000, "the first readings are stored", || {
        bench.count("SELECT count(*) FROM open").is_some_and(|n| n > 0)
    });
    assert_eq!(bench.alarm_state("rail-high:hall.reservoir").as_deref().unwrap_or("normal"), "normal");

    sent += keep_sending(&mut line, 238_000, "a notice arrives", || !receiver.notices().is_empty());
    let notice = receiver.notices().remove(0);
    assert_eq!((&notice["condition"], &notice["subject"]), (&"rail-high".into(), &"hall.reservoir".into()));
    assert_eq!(notice["kind"], "raised");
    assert_eq!(bench.alarm_state("rail-high:hall.reservoir").as_deref(), Some("unacknowledged"));

    sent += keep_sending(&mut line, 238_000, "now shows mains and rail", || {
        bench.json(&["now"])["rails"][0]["projected_v"].is_number()
    });
    let now = bench.json(&["now"]);
    let mains_v = now["channels"][0]["value_v"].as_f64().unwrap();
    let rail_v = now["rails"][0]["projected_v"].as_f64().unwrap();
    // Proportion through the measured pair: common practice, no source.
    assert!((rail_v - mains_v * 452.0 / 220.0).abs() < 1e-6, "{rail_v} at {mains_v}");
    assert!(now["rails"][0]["headroom_v"].as_f64().unwrap() < 0.0);
    assert_eq!(
        now["alarms"][0]["alarm"], "rail-high:hall.reservoir",
        "now and the notice tell the same story"
    );
    assert_eq!(now["rails"][0]["projected_setpoint_v"], notice["setpoint_v"]);

    let answer = bench.say(&["alarm", "ack", "rail-high"]);
    assert!(answer.contains("acknowledged"), "{answer}");
    assert_eq!(bench.alarm_state("rail-high:hall.reservoir").as_deref(), Some("acknowledged"));

    sent += keep_sending(&mut line, 226_000, "the alarm returns to normal", || {
        bench.alarm_state("rail-high:hall.reservoir").as_deref() == Some("normal")
    });
    wait_for("the all-clear arrives", || (receiver.notices().len() == 2).then_some(()));
    assert!(daemon.stop().success());

    let kinds: Vec<_> = receiver.notices().iter().map(|b| b["kind"].as_str().unwrap().to_owned()).collect();
    assert_eq!(kinds, ["raised", "returned"], "one warning and one all-clear");
    assert_eq!(bench.count("SELECT count(*) FROM open"), Some(sent as i64), "every reading is stored");
    assert_eq!(bench.count("SELECT count(*) FROM open WHERE quality <> 0"), Some(0));
    assert_eq!(bench.count("SELECT count(*) FROM journal"), Some(3), "raised, acknowledged, cleared");
}
