//! The reading of a serial port, over real pseudo-terminals: unplugging, garbage, floods, and the orderly stop.

#![cfg(unix)]

use std::path::{Path, PathBuf};
use std::thread;
use std::time::{Duration, Instant};

use railtide::clock::{Clock, SimulatedClock};
use railtide::config::{Channel, LoggerSettings};
use railtide::logger::simulated::{Fault, Hall, LiveHall, SimulatedLogger};
use railtide::logger::{self, FromLogger, LineFault, LoggerEvent, PortHandle, crc16, write_line};
use railtide::quantity::Utc;
use railtide::reading::ChannelQuantity;
use tokio::sync::mpsc;

/// A logger that is told what to say, and the program's side of its port.
struct Scene {
    said: SimulatedLogger,
    heard: Heard,
    _folder: tempfile::TempDir,
}

/// The program's side of a port.
struct Heard {
    port: PortHandle,
    events: mpsc::Receiver<FromLogger>,
    hand: SimulatedClock,
}

impl Scene {
    fn new() -> Self {
        Self::with_capacity(64)
    }

    fn with_capacity(capacity: usize) -> Self {
        let folder = tempfile::tempdir().unwrap();
        let link = folder.path().join("logger");
        let said = SimulatedLogger::by_hand(1, Some(link.clone()), Clock::system()).unwrap();
        let mut heard = Heard::start(&link, capacity);
        let device = said.device().unwrap().display().to_string();
        assert_eq!(heard.next(), LoggerEvent::Connected { port: device });
        // What stands before the first line end may be the rest of a line, and counts for nothing.
        said.send(b"\n").unwrap();
        Scene { said, heard, _folder: folder }
    }

    /// Says a line of `mains` and expects it to be heard after `before`.
    fn expect_line(&mut self, volts: i32, before: &[LoggerEvent]) {
        self.said.say(&[("mains", Some(volts * 1000))]).unwrap();
        for expected in before {
            assert_eq!(&self.heard.next(), expected);
        }
        assert_eq!(self.heard.next_values(), [(0, f64::from(volts))]);
    }
}

impl Heard {
    fn start(path: &Path, capacity: usize) -> Self {
        let (clock, hand) = Clock::simulated(Utc(1_000));
        let (sender, events) = mpsc::channel(capacity);
        let port = logger::spawn(0, &settings(path), clock, sender).unwrap();
        Heard { port, events, hand }
    }

    /// Waits for the next event; the clock stands still.
    fn next(&mut self) -> LoggerEvent {
        self.events.blocking_recv().expect("the reading goes on").what
    }

    fn next_values(&mut self) -> Vec<(usize, f64)> {
        match self.next() {
            LoggerEvent::Sample(sample) => sample.values,
            other => panic!("expected a sample, got {other:?}"),
        }
    }

    /// Waits for the next event while the clock runs, so that back-offs pass.
    fn next_later(&mut self) -> LoggerEvent {
        loop {
            match self.events.try_recv() {
                Ok(event) => return event.what,
                Err(mpsc::error::TryRecvError::Empty) => {
                    thread::sleep(Duration::from_millis(5));
                    self.hand.advance(Duration::from_millis(100));
                }
                Err(mpsc::error::TryRecvError::Disconnected) => panic!("the reading ended early"),
            }
        }
    }

    fn next_reason(&mut self) -> String {
        match self.next_later() {
            LoggerEvent::Disconnected { why } => why,
            other => panic!("expected a disconnection, got {other:?}"),
        }
    }
}

fn settings(path: &Path) -> LoggerSettings {
    let channel = |name: &str, quantity| Channel {
        name: name.to_owned(),
        was: None,
        quantity,
        sample_period: Duration::from_secs(1),
        gain: 1.0,
        offset_v: 0.0,
        accuracy_pct: 0.5,
        accuracy_v: 0.2,
        rail: None,
    };
    LoggerSettings {
        name: "bench".to_owned(),
        port: path.to_owned(),
        baud: 115_200,
        channels: vec![
            channel("mains", ChannelQuantity::MainsRms),
            channel("hall.reservoir", ChannelQuantity::Rail),
        ],
    }
}

fn with_crc(body: &str) -> Vec<u8> {
    format!("@{body}*{:04X}\r\n", crc16(body.as_bytes())).into_bytes()
}

/// Bytes as even as any, the same at each run (xorshift64, by Marsaglia).
fn random_bytes(count: usize) -> Vec<u8> {
    let mut state = 0x1234_5678_9ABC_DEF1u64;
    let mut next = || {
        state ^= state << 13;
        state ^= state >> 7;
        state ^= state << 17;
        state
    };
    (0..count).map(|_| (next() >> 32) as u8).collect()
}

#[test]
fn an_unplugged_logger_is_found_again_behind_its_link() {
    let mut scene = Scene::new();
    scene.expect_line(230, &[]);
    scene.said.unplug();
    let lost = scene.heard.next_reason();
    assert!(lost.contains("was lost"), "{lost}");
    // Said while nobody could hear it.
    scene.said.say(&[("mains", Some(231_000))]).unwrap_err();
    // The device is gone, and the link with it.
    let missing = scene.heard.next_reason();
    assert!(missing.contains("is not there") && missing.contains("railtide ports"), "{missing}");
    scene.said.plug_in().unwrap();
    let again = scene.said.device().unwrap();
    assert_eq!(scene.heard.next_later(), LoggerEvent::Connected { port: again.display().to_string() });
    scene.said.send(b"\n").unwrap();
    scene.expect_line(232, &[LoggerEvent::Lost { lines: 1 }]);
    scene.heard.port.stop().unwrap();
}

#[test]
fn a_link_that_points_elsewhere_is_followed() {
    let mut scene = Scene::new();
    scene.expect_line(230, &[]);
    let first = scene.said.device().unwrap();
    // The new device is there, and the link points to it, before the old one hangs up.
    scene.said.plug_in().unwrap();
    let second = scene.said.device().unwrap();
    assert_ne!(first, second);
    let lost = scene.heard.next_reason();
    assert!(lost.contains("was lost"), "{lost}");
    assert_eq!(scene.heard.next_later(), LoggerEvent::Connected { port: second.display().to_string() });
    scene.expect_line(231, &[]);
}

#[test]
fn a_logger_that_is_not_yet_plugged_in_is_waited_for_and_its_absence_said_once() {
    let folder = tempfile::tempdir().unwrap();
    let link = folder.path().join("later");
    let mut heard = Heard::start(&link, 64);
    let missing = heard.next_reason();
    assert!(missing.contains("later is not there"), "{missing}");
    // A quarter of an hour of tries: a dozen seconds at first, then each half minute.
    for _ in 0..300 {
        heard.hand.advance(Duration::from_secs(3));
        thread::sleep(Duration::from_millis(1));
    }
    assert!(heard.events.try_recv().is_err(), "the same reason is said once");
    let said = SimulatedLogger::by_hand(1, Some(link), Clock::system()).unwrap();
    let device = said.device().unwrap().display().to_string();
    assert_eq!(heard.next_later(), LoggerEvent::Connected { port: device });
    said.say(&[("mains", Some(230_000))]).unwrap();
    assert_eq!(heard.next_values(), [(0, 230.0)]);
    heard.port.stop().unwrap();
}

#[test]
fn a_port_that_another_program_reads_is_not_shared() {
    let mut scene = Scene::new();
    let mut second = Heard::start(&scene.said.port().unwrap(), 64);
    let in_use = second.next_reason();
    assert!(in_use.contains("in use by another program"), "{in_use}");
    scene.expect_line(230, &[]);
    // Once the first lets go, the second one gets it.
    scene.heard.port.stop().unwrap();
    assert!(matches!(second.next_later(), LoggerEvent::Connected { .. }));
    second.port.stop().unwrap();
}

#[test]
fn a_megabyte_of_random_bytes_spoils_no_line_after_it() {
    let mut scene = Scene::new();
    let noise = random_bytes(1 << 20);
    let counted = thread::scope(|scope| {
        let said = &scene.said;
        scope.spawn(move || {
            said.send(&noise).unwrap();
            said.say(&[("mains", Some(230_000))]).unwrap();
        });
        let mut counted = 0;
        loop {
            match scene.heard.next() {
                LoggerEvent::Fault(LineFault::Garbage | LineFault::TooLong) => counted += 1,
                LoggerEvent::Sample(sample) => {
                    assert_eq!(sample.values, [(0, 230.0)]);
                    break counted;
                }
                other => panic!("no such thing was sent: {other:?}"),
            }
        }
    });
    // A line end or a start mark comes every 128 bytes on average, so there are about 8,192 runs.
    assert!((7_000..9_500).contains(&counted), "{counted} runs of garbage");
    scene.expect_line(231, &[]);
}

#[test]
fn a_line_without_an_end_is_counted_once_and_the_next_line_is_read() {
    let mut scene = Scene::new();
    let endless = [&b"@1 2 mains="[..], &[b'7'; 1 << 20]].concat();
    scene.said.send(&endless).unwrap();
    scene.expect_line(230, &[LoggerEvent::Fault(LineFault::TooLong)]);
    let long_line = [&endless[..], b"*0000\r\n"].concat();
    scene.said.send(&long_line).unwrap();
    scene.expect_line(231, &[LoggerEvent::Fault(LineFault::TooLong)]);
}

#[test]
fn what_a_line_cannot_mean_is_counted_by_reason_and_stored_nowhere() {
    let mut scene = Scene::new();
    let cases = [
        ("5 50 mains=230000 nobody=1", LineFault::UnknownChannel, Some(230.0)),
        ("6 60 mains=230000 hall.reservoir=NaN", LineFault::BadValue, Some(230.0)),
        ("7 70 mains=1e99", LineFault::BadValue, None),
        ("8 80 mains=", LineFault::BadValue, None),
        ("9 90 mains", LineFault::Malformed, None),
    ];
    for (body, fault, mains) in cases {
        scene.said.send(&with_crc(body)).unwrap();
        assert_eq!(scene.heard.next(), LoggerEvent::Fault(fault), "{body}");
        if fault != LineFault::Malformed {
            assert_eq!(scene.heard.next_values(), mains.map(|v| (0, v)).into_iter().collect::<Vec<_>>());
        }
    }
    scene.said.send(b"@10 100 mains=230000*0000\n").unwrap();
    assert_eq!(scene.heard.next(), LoggerEvent::Fault(LineFault::Checksum));
    // Negative is for those to judge who know what the channel measures.
    scene.said.send(&with_crc("9 90 mains=-1500")).unwrap();
    assert_eq!(scene.heard.next_values(), [(0, -1.5)]);
}

#[test]
fn a_logger_that_starts_again_is_noticed() {
    let mut scene = Scene::new();
    scene.expect_line(230, &[]);
    scene.expect_line(231, &[]);
    scene.said.inject(Fault::Restart);
    scene.expect_line(232, &[LoggerEvent::Restarted]);
}

#[test]
fn a_flood_loses_nothing() {
    const LINES: u32 = 60_000;
    let scene = Scene::new();
    let mut heard = scene.heard;
    let started = Instant::now();
    let (samples, others) = thread::scope(|scope| {
        let said = &scene.said;
        scope.spawn(move || {
            let mut lines = Vec::new();
            for n in 0..LINES {
                let values = [("mains", Some(n as i32)), ("hall.reservoir", Some(471_200))];
                write_line(&mut lines, n, u64::from(n) / 20, values).unwrap();
                if lines.len() > 2_000 {
                    said.send(&lines).unwrap();
                    lines.clear();
                }
            }
            said.send(&lines).unwrap();
        });
        let (mut samples, mut others) = (0, Vec::new());
        while samples < LINES && others.is_empty() {
            match heard.next() {
                LoggerEvent::Sample(sample) => {
                    assert_eq!(sample.values[0], (0, f64::from(samples) / 1000.0));
                    samples += 1;
                }
                other => others.push(other),
            }
        }
        (samples, others)
    });
    report(&format!(
        "{:.0} lines/s through a pseudo-terminal",
        f64::from(LINES) / started.elapsed().as_secs_f64()
    ));
    assert_eq!((samples, others), (LINES, vec![]));
}

#[test]
fn a_full_channel_makes_the_reading_wait_and_drops_nothing() {
    let mut scene = Scene::with_capacity(1);
    for volts in 200..260 {
        scene.said.say(&[("mains", Some(volts * 1000))]).unwrap();
    }
    for volts in 200..260 {
        assert_eq!(scene.heard.next_values(), [(0, f64::from(volts))]);
    }
}

#[test]
fn a_stop_ends_the_threads_whatever_they_are_doing() {
    // Reading.
    let scene = Scene::new();
    expect_end(scene.heard);
    // Waiting for a logger that isn't there, by a clock that stands still.
    let mut heard = Heard::start(&PathBuf::from("/nowhere/logger"), 64);
    heard.next_reason();
    expect_end(heard);
    // Waiting for room that nobody makes.
    let scene = Scene::with_capacity(1);
    for _ in 0..10 {
        scene.said.say(&[]).unwrap();
    }
    expect_end(scene.heard);
}

/// Stops the reading and sees that the last sender is gone, and with it the last thread.
fn expect_end(mut heard: Heard) {
    heard.port.stop().unwrap();
    while let Some(event) = heard.events.blocking_recv() {
        assert!(matches!(event.what, LoggerEvent::Sample(_)), "{event:?}");
    }
}

#[test]
fn the_reading_ends_when_nobody_listens_any_more() {
    let scene = Scene::new();
    drop(scene.heard.events);
    // The port is free again, though nobody stopped the reading.
    let mut second = Heard::start(&scene.said.port().unwrap(), 64);
    while !matches!(second.next_later(), LoggerEvent::Connected { .. }) {}
    scene.heard.port.stop().unwrap();
}

#[test]
fn a_live_hall_is_heard_from_end_to_end() {
    let (clock, hand) = Clock::simulated(Utc(0));
    let hall = Hall::new(3);
    let live = LiveHall {
        speed: 60.0,
        faults: vec![Fault::TornLine],
        fault_every: 10,
        ..LiveHall::new(hall.clone(), Utc(77_000_000))
    };
    let said = SimulatedLogger::start(live, None, clock).unwrap();
    let mut heard = Heard::start(&said.port().unwrap(), 1_000);
    assert!(matches!(heard.next(), LoggerEvent::Connected { .. }));
    let mut lost = 0;
    let mut samples = 0;
    while samples < 50 {
        // The next line is due only when the last one was heard, so none is told while nobody listens.
        match heard.events.try_recv().map(|event| event.what) {
            Ok(LoggerEvent::Sample(sample)) => {
                let at = Utc(77_000_000 + 60 * sample.logger_ms.unwrap() as i64);
                let state = hall.at(at);
                assert!((sample.values[0].1 - state.mains_v).abs() < 0.001, "{sample:?} {state:?}");
                assert!((sample.values[1].1 - state.rail_v).abs() < 0.001, "{sample:?} {state:?}");
                samples += 1;
            }
            Ok(LoggerEvent::Lost { lines }) => lost += lines,
            Ok(LoggerEvent::Fault(LineFault::Garbage)) => {}
            Ok(other) => panic!("{other:?}"),
            Err(_) => {
                hand.advance(Duration::from_millis(500));
                thread::sleep(Duration::from_millis(2));
            }
        }
    }
    assert!((4..=6).contains(&lost), "each tenth of some 55 lines was torn: {lost}");
}

/// Shown by `cargo test -- --nocapture`.
#[expect(clippy::print_stderr, reason = "a speed is to be read, not asserted")]
fn report(text: &str) {
    eprintln!("{text}");
}
