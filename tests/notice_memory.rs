//! What a receiver that is down for long costs in memory. Alone in its file, so that no other test shares the process.
#![cfg(target_os = "linux")]

use chrono_tz::Tz;
use railtide::alarm::{AlarmKey, Delivery, Facts, Notice, NoticeKind, Priority};
use railtide::clock::Clock;
use railtide::config::{Receiver, Route};
use railtide::notice::{CAPACITY, Waiting, Worker};
use railtide::quantity::Utc;
use tokio::sync::mpsc;

#[path = "support/receiver.rs"]
mod receiver;
use receiver::{Mode, TestReceiver};

/// About what a real notice weighs, with the bytes of an earlier attempt.
fn notice(id: u64) -> Waiting {
    let notice = Notice {
        id,
        receiver: "phone".into(),
        kind: NoticeKind::Raised,
        priority: Priority::Medium,
        at: Utc(0),
        key: AlarmKey { condition: "rail-high".into(), subject: "hall.reservoir".into() },
        raised_at: Utc(0),
        facts: Facts::default(),
        advice: "Switch the amplifier off until the mains is lower.".repeat(3),
        idempotency_key: format!("00000000-0000-{id}"),
        recorded: true,
    };
    Waiting { notice, attempts: 1, body: Some(vec![b'x'; 1_200]) }
}

/// Memory that the process holds, in bytes: the second figure of `/proc/self/statm` (proc(5)) in pages of 4 KiB.
fn resident() -> u64 {
    let statm = std::fs::read_to_string("/proc/self/statm").expect("Linux has it");
    let pages = statm.split(' ').nth(1).and_then(|figure| figure.parse::<u64>().ok());
    pages.expect("a number of pages") * 4_096
}

#[tokio::test]
async fn ten_times_twenty_thousand_notices_take_no_more_memory_than_once() {
    let receiver = TestReceiver::start(Mode::Refuse).await;
    let route = Route::Webhook { url: receiver.url(), token: None };
    let receivers = vec![Receiver { name: "phone".into(), route, min_priority: Priority::Low }];
    let (clock, _hand) = Clock::simulated(Utc(0));
    let (report, mut outcomes) = mpsc::channel(64);
    let worker = Worker::spawn(receivers, Tz::UTC, clock, report).expect("the worker starts");
    let mut after_first = 0;
    for round in 0..11 {
        worker.send((0..20_000).map(|i| notice(round * 20_000 + i)).collect());
        // As many reports of what was let go are kept; the first round has exactly so many.
        let mut given_up = 0;
        while given_up < CAPACITY {
            let outcome = outcomes.recv().await.expect("the worker lives");
            given_up += usize::from(outcome.delivery != Delivery::Waiting);
        }
        assert!(worker.status()[0].queued <= CAPACITY);
        if round == 0 {
            after_first = resident();
        }
    }
    let growth = resident().saturating_sub(after_first);
    // Ten rounds weigh over 300 MB; the allocator is left room for its own ways.
    assert!(growth < 64 << 20, "grew by {} MB from {} MB", growth >> 20, after_first >> 20);
}
