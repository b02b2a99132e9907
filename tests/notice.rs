//! Notices to a real HTTP receiver on 127.0.0.1 that misbehaves, on our own simulated clock.

use std::collections::HashMap;
use std::time::Duration;

use chrono_tz::Tz;
use railtide::alarm::{AlarmKey, Delivery, Facts, Notice, NoticeKind, Outcome, Priority};
use railtide::clock::{Clock, SimulatedClock};
use railtide::config::{Receiver, Route, SecretSource};
use railtide::notice::{CAPACITY, ReceiverStatus, Waiting, Worker, WorkerHandle};
use railtide::quantity::{Mono, Utc};
use tokio::sync::mpsc;

#[path = "support/receiver.rs"]
mod receiver;
use receiver::{Mode, Recorded, TestReceiver};

const START: Utc = Utc(1_791_304_930_000); // 2026-10-06T16:42:10Z

fn notice(id: u64, priority: Priority) -> Waiting {
    let notice = Notice {
        id,
        receiver: "phone".into(),
        kind: NoticeKind::Raised,
        priority,
        at: START,
        key: AlarmKey { condition: "rail-high".into(), subject: format!("hall.node{id}") },
        raised_at: START,
        facts: Facts {
            value: Some(491.6),
            value_u: Some(4.2),
            unit: "V".into(),
            source: "projected".into(),
            ..Facts::default()
        },
        advice: "Switch the amplifier off.".into(),
        idempotency_key: format!("key-{id}"),
        recorded: true,
    };
    Waiting { notice, attempts: 0, body: None }
}

fn to(name: &str, mut waiting: Waiting) -> Waiting {
    waiting.notice.receiver = name.into();
    waiting
}

fn webhook(name: &str, url: String, token: Option<SecretSource>) -> Receiver {
    Receiver { name: name.into(), route: Route::Webhook { url, token }, min_priority: Priority::Low }
}

/// A worker, the hand of its clock, and what it reports.
struct Scene {
    worker: WorkerHandle,
    hand: SimulatedClock,
    outcomes: mpsc::Receiver<Outcome>,
}

impl Scene {
    fn of(receivers: Vec<Receiver>) -> Self {
        let (clock, hand) = Clock::simulated(START);
        let (report, outcomes) = mpsc::channel(64);
        let worker = Worker::spawn(receivers, Tz::Europe__Berlin, clock, report).expect("the worker starts");
        Scene { worker, hand, outcomes }
    }

    fn with(receiver: &TestReceiver) -> Self {
        Scene::of(vec![webhook("phone", receiver.url(), None)])
    }

    async fn outcome(&mut self) -> Outcome {
        self.outcomes.recv().await.expect("the worker lives")
    }

    fn status(&self) -> ReceiverStatus {
        self.worker.status().remove(0)
    }

    fn now(&self) -> Mono {
        self.hand.now().mono
    }

    /// Moves the clock to `until` if that is later.
    fn advance_to(&self, until: Mono) {
        self.hand.advance(until.since(self.now()));
    }

    /// Moves the clock until the receiver is tried again.
    fn to_next_attempt(&self) {
        self.advance_to(self.status().next_attempt.expect("the receiver is backed off"));
    }

    /// Sends one notice and gives back what came of its first attempt, and how long the receiver is then left alone.
    async fn first_attempt(&mut self, waiting: Waiting) -> (Outcome, Duration) {
        self.worker.send(vec![waiting]);
        let outcome = self.outcome().await;
        let wait = self.status().next_attempt.map_or(Duration::ZERO, |next| next.since(self.now()));
        (outcome, wait)
    }
}

/// Answers that never come: the clock must be moved to the time limit, once the request is there.
fn never_answers(mode: &Mode) -> bool {
    matches!(mode, Mode::Hang | Mode::SlowHeaders)
}

#[tokio::test]
async fn a_notice_is_posted_once_with_its_key_its_token_and_its_text() {
    let token = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(token.path(), "tk-secret\n").unwrap();
    let receiver = TestReceiver::start(Mode::Ok).await;
    let source = SecretSource::File(token.path().to_owned());
    let mut scene = Scene::of(vec![webhook("phone", receiver.url(), Some(source))]);

    let (outcome, _) = scene.first_attempt(notice(1, Priority::High)).await;

    assert_eq!(outcome.delivery, Delivery::Delivered { at: START });
    assert_eq!((outcome.notice_id, outcome.attempts, outcome.said.as_str()), (1, 1, "204 No Content"));
    let requests = receiver.requests();
    assert_eq!(requests.len(), 1);
    let request = &requests[0];
    assert_eq!(request.line, "POST /notice HTTP/1.1");
    assert_eq!(request.header("authorization"), Some("Bearer tk-secret"));
    assert_eq!(request.header("idempotency-key"), Some("key-1"));
    assert_eq!(request.header("content-type"), Some("application/json"));
    assert_eq!(request.header("accept-encoding"), None, "no answer may come compressed");
    assert_eq!(request.body, outcome.body);
    let json = request.json();
    assert_eq!((&json["version"], &json["idempotency_key"]), (&1.into(), &"key-1".into()));
    assert!(json["text"].as_str().unwrap().contains("It would stand at 492 V ± 4 V"), "{json}");
}

/// The receiver misbehaves in each of `modes` for an equal share of an hour while notices keep coming, then works
/// again: everything must be there, once, in order.
async fn an_hour_of(modes: Vec<Mode>) {
    let hour = Duration::from_secs(3_600);
    let mut receiver = TestReceiver::start(modes[0].clone()).await;
    let mut scene = Scene::with(&receiver);
    let priorities = [Priority::Low, Priority::High, Priority::Medium, Priority::Low, Priority::High];
    let mut next_id = 1;
    let mut attempts = 0;
    for (turn, mode) in modes.iter().enumerate() {
        receiver.set(mode.clone()).await;
        let end = Mono(0) + hour * (turn as u32 + 1) / modes.len() as u32;
        while scene.now() < end {
            let seen = receiver.requests().len();
            for _ in 0..3 {
                scene.worker.send(vec![notice(next_id, priorities[next_id as usize % priorities.len()])]);
                next_id += 1;
            }
            // One attempt: due at once at the very start, else at the end of the wait.
            if let Some(next) = scene.status().next_attempt {
                scene.advance_to(next);
            }
            if never_answers(mode) {
                receiver.wait_for(seen + 1).await;
                scene.hand.advance(Duration::from_secs(10));
            }
            let outcome = scene.outcome().await;
            attempts += 1;
            assert_eq!(outcome.delivery, Delivery::Waiting, "{mode:?}: {}", outcome.said);
        }
    }
    assert!(attempts >= 8, "only {attempts} attempts in an hour");
    assert_eq!(scene.status().queued as u64, next_id - 1);
    let failed_requests = receiver.requests().len();

    receiver.set(Mode::Ok).await;
    scene.to_next_attempt();
    let mut order = Vec::new();
    for _ in 1..next_id {
        let outcome = scene.outcome().await;
        assert!(matches!(outcome.delivery, Delivery::Delivered { .. }), "{}", outcome.said);
        order.push(outcome.notice_id);
    }

    let priority = |id: u64| priorities[id as usize % priorities.len()];
    let mut expected: Vec<_> = (1..next_id).collect();
    expected.sort_by_key(|id| (priority(*id), *id));
    assert_eq!(order, expected, "most urgent first, then as they came");
    let taken = &receiver.requests()[failed_requests..];
    assert_eq!(taken.len(), order.len(), "nothing is sent twice after it was delivered");
    assert_each_notice_kept_its_bytes_and_key(&receiver.requests());
    assert_eq!((scene.status().queued, scene.status().failures), (0, 0));
}

fn assert_each_notice_kept_its_bytes_and_key(requests: &[Recorded]) {
    let mut bytes: HashMap<u64, (&[u8], &str)> = HashMap::new();
    for request in requests {
        let id = request.json()["notice_id"].as_u64().expect("a number");
        let key = request.header("idempotency-key").expect("a key");
        assert_eq!(request.json()["idempotency_key"], key);
        let first = *bytes.entry(id).or_insert((&request.body, key));
        assert_eq!(first, (request.body.as_slice(), key), "notice {id} changed between attempts");
    }
}

#[tokio::test]
async fn after_an_hour_without_a_receiver_every_notice_arrives_in_order() {
    an_hour_of(vec![Mode::Refuse]).await;
}

#[tokio::test]
async fn after_an_hour_of_a_hanging_receiver_every_notice_arrives_in_order() {
    an_hour_of(vec![Mode::Hang]).await;
}

#[tokio::test]
async fn after_an_hour_of_500_every_notice_arrives_in_order() {
    an_hour_of(vec![Mode::status(500)]).await;
}

#[tokio::test]
async fn after_an_hour_of_closing_early_every_notice_arrives_in_order() {
    an_hour_of(vec![Mode::CloseEarly]).await;
}

#[tokio::test]
async fn after_an_hour_of_everything_in_turn_every_notice_arrives_in_order() {
    let modes = vec![Mode::Refuse, Mode::Hang, Mode::status(500), Mode::CloseEarly, Mode::SlowHeaders];
    an_hour_of(modes).await;
}

#[tokio::test]
async fn a_restart_sends_the_same_bytes_and_nothing_that_was_delivered() {
    let mut receiver = TestReceiver::start(Mode::Ok).await;
    let mut first = Scene::with(&receiver);
    let (delivered, _) = first.first_attempt(notice(1, Priority::High)).await;
    assert!(matches!(delivered.delivery, Delivery::Delivered { .. }));
    receiver.set(Mode::status(503)).await;
    let (failed, _) = first.first_attempt(notice(2, Priority::High)).await;
    assert_eq!((failed.delivery, failed.attempts), (Delivery::Waiting, 1));
    first.worker.stop().await;

    receiver.set(Mode::Ok).await;
    let mut second = Scene::with(&receiver);
    // What the record holds by now has other facts than the bytes that went out: the bytes must win.
    let mut waiting = notice(2, Priority::High);
    waiting.notice.advice = "Rewritten since.".into();
    let waiting = Waiting { attempts: failed.attempts, body: Some(failed.body.clone()), ..waiting };
    let (again, _) = second.first_attempt(waiting.clone()).await;
    assert_eq!((again.attempts, again.body), (2, failed.body));

    // Handed over again by mistake, it isn't sent again; the one behind it is.
    second.worker.send(vec![waiting, notice(3, Priority::Low)]);
    assert_eq!(second.outcome().await.notice_id, 3);
    let sent: Vec<_> = receiver.requests().iter().map(|r| r.json()["notice_id"].as_u64().unwrap()).collect();
    assert_eq!(sent, [1, 2, 2, 3]);
    assert_each_notice_kept_its_bytes_and_key(&receiver.requests());
}

#[tokio::test]
async fn every_misbehaviour_ends_the_attempt_with_one_line_for_people() {
    let said_of = [
        (Mode::Refuse, "Connection refused"),
        (Mode::Hang, "no answer within 10 s"),
        (Mode::SlowHeaders, "no answer within 10 s"),
        (Mode::CloseEarly, "connection closed before message completed"),
        (Mode::CloseInHeaders, "connection closed before message completed"),
        (Mode::EndlessHeaders, "message head is too large"),
        (Mode::status(500), "500 Internal Server Error"),
        (Mode::with_body(503, "\r\n<b>down</b>\r\nfor repair"), "503 Service Unavailable: <b>down</b>"),
        (Mode::CloseInBody { status: 502 }, "502 Bad Gateway"),
        (Mode::EndlessBody { status: 500 }, "500 Internal Server Error: xxx"),
        (Mode::bomb(500), "500 Internal Server Error"),
        (Mode::with_body(500, "\u{1b}[2Jgone"), "500 Internal Server Error: [2Jgone"),
        (Mode::status(408), "408 Request Timeout"),
        (Mode::status(425), "425 Too Early"),
        (Mode::status(401), "401 Unauthorized"),
        (Mode::status(404), "404 Not Found"),
        (Mode::status(400), "400 Bad Request"),
    ];
    for (mode, expected) in said_of {
        let receiver = TestReceiver::start(mode.clone()).await;
        let mut scene = Scene::with(&receiver);
        scene.worker.send(vec![notice(1, Priority::High)]);
        if never_answers(&mode) {
            receiver.wait_for(1).await;
            scene.hand.advance(Duration::from_secs(10));
        }
        let outcome = scene.outcome().await;
        assert_eq!((&outcome.delivery, outcome.attempts), (&Delivery::Waiting, 1), "{mode:?}");
        assert!(outcome.said.contains(expected), "{mode:?}: {}", outcome.said);
        assert!(
            outcome.said.chars().count() < 200 && !outcome.said.contains('\n'),
            "{mode:?}: {}",
            outcome.said
        );
        assert!(!outcome.said.contains("/notice"), "the URL may hold a secret: {}", outcome.said);
        assert_eq!(scene.status().last_said, Some(outcome.said));
        assert_eq!(
            receiver.requests().len(),
            usize::from(mode != Mode::Refuse),
            "{mode:?}: one attempt, one request"
        );
    }
}

#[tokio::test]
async fn a_success_is_one_whatever_follows_its_status() {
    for mode in [Mode::CloseInBody { status: 200 }, Mode::EndlessBody { status: 200 }, Mode::bomb(200)] {
        let receiver = TestReceiver::start(mode.clone()).await;
        let mut scene = Scene::with(&receiver);
        let (outcome, _) = scene.first_attempt(notice(1, Priority::High)).await;
        assert_eq!(outcome.delivery, Delivery::Delivered { at: START }, "{mode:?}: {}", outcome.said);
    }
}

#[tokio::test]
async fn a_redirect_to_another_host_is_not_followed() {
    let elsewhere = TestReceiver::start(Mode::Ok).await;
    let receiver = TestReceiver::start(Mode::redirect(&elsewhere.url())).await;
    let mut scene = Scene::with(&receiver);
    let (outcome, _) = scene.first_attempt(notice(1, Priority::High)).await;
    assert_eq!((outcome.delivery, outcome.said.as_str()), (Delivery::Waiting, "307 Temporary Redirect"));
    // A second attempt proves that the first was over and still nothing went elsewhere.
    scene.to_next_attempt();
    assert_eq!(scene.outcome().await.attempts, 2);
    assert_eq!(elsewhere.requests(), []);
}

#[tokio::test]
async fn a_wait_that_the_receiver_asks_for_is_kept_in_seconds_and_as_a_date() {
    // 2026-10-06T16:47:10Z, five minutes after the start; the form is IMF-fixdate of RFC 9110 5.6.7.
    for value in ["300", "Tue, 06 Oct 2026 16:47:10 GMT"] {
        for status in [429, 503] {
            let receiver = TestReceiver::start(Mode::retry_after(status, value)).await;
            let mut scene = Scene::with(&receiver);
            let (outcome, wait) = scene.first_attempt(notice(1, Priority::High)).await;
            assert_eq!(outcome.delivery, Delivery::Waiting);
            let range = Duration::from_secs(300)..=Duration::from_secs(375);
            assert!(range.contains(&wait), "{status} {value}: {wait:?}");
        }
    }
}

#[tokio::test]
async fn a_receiver_that_is_gone_is_not_asked_again_about_that_notice() {
    let receiver = TestReceiver::start(Mode::status(410)).await;
    let mut scene = Scene::with(&receiver);
    let (outcome, _) = scene.first_attempt(notice(1, Priority::High)).await;
    assert_eq!(outcome.delivery, Delivery::GivenUp { at: START });
    assert_eq!((outcome.said.as_str(), scene.status().queued), ("410 Gone", 0));
}

#[tokio::test]
async fn a_notice_that_the_receiver_dislikes_is_given_up_in_the_end_and_the_next_has_its_turn() {
    let mut receiver = TestReceiver::start(Mode::with_body(422, "what is this?")).await;
    let mut scene = Scene::with(&receiver);
    scene.worker.send(vec![notice(1, Priority::High), notice(2, Priority::Low)]);
    for attempt in 1..5 {
        let outcome = scene.outcome().await;
        assert_eq!((outcome.notice_id, outcome.attempts, outcome.delivery), (1, attempt, Delivery::Waiting));
        scene.to_next_attempt();
    }
    let outcome = scene.outcome().await;
    assert!(matches!(outcome.delivery, Delivery::GivenUp { .. }), "{outcome:?}");
    assert_eq!(outcome.said, "422 Unprocessable Entity: what is this?");
    receiver.set(Mode::Ok).await;
    scene.to_next_attempt();
    assert_eq!(scene.outcome().await.notice_id, 2);
}

#[tokio::test]
async fn a_token_that_the_receiver_sends_back_is_not_shown() {
    let token = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(token.path(), "tk-secret").unwrap();
    let receiver = TestReceiver::start(Mode::with_body(403, "unknown token tk-secret")).await;
    let source = SecretSource::File(token.path().to_owned());
    let mut scene = Scene::of(vec![webhook("phone", receiver.url(), Some(source))]);
    let (outcome, _) = scene.first_attempt(notice(1, Priority::High)).await;
    assert_eq!(outcome.said, "403 Forbidden: unknown token [token]");
    assert!(!format!("{:?}", scene.worker).contains("tk-secret"));
}

#[tokio::test]
async fn a_more_urgent_notice_need_not_wait_for_the_end_of_a_long_back_off() {
    let mut receiver = TestReceiver::start(Mode::retry_after(503, "3000")).await;
    let mut scene = Scene::with(&receiver);
    let (_, wait) = scene.first_attempt(notice(1, Priority::Medium)).await;
    assert!(wait >= Duration::from_secs(3_000));
    receiver.set(Mode::Ok).await;
    scene.worker.send(vec![notice(2, Priority::High)]);
    // It waits those few seconds that keep a failing receiver from being stormed.
    while scene.hand.next_wake() != Some(Mono(5_000)) {
        tokio::task::yield_now().await;
    }
    assert_eq!(receiver.requests().len(), 1);
    scene.advance_to(Mono(5_000));
    assert_eq!(scene.outcome().await.notice_id, 2);
    // Its success shows that the receiver is back: the other follows at once.
    assert_eq!(scene.outcome().await.notice_id, 1);
    assert_eq!(scene.now(), Mono(5_000));
}

#[tokio::test]
async fn a_dead_receiver_does_not_hold_another_up() {
    let hanging = TestReceiver::start(Mode::Hang).await;
    let working = TestReceiver::start(Mode::Ok).await;
    let mut scene =
        Scene::of(vec![webhook("attic", hanging.url(), None), webhook("phone", working.url(), None)]);
    scene.worker.send((1..=20).map(|id| to("attic", notice(id, Priority::High))).collect());
    hanging.wait_for(1).await;
    scene.worker.send((21..=40).map(|id| notice(id, Priority::Low)).collect());
    for id in 21..=40 {
        assert_eq!(scene.outcome().await.notice_id, id);
    }
    let attic = scene.status();
    assert!(attic.sending && attic.queued == 20, "{attic:?}");
    assert_eq!(hanging.requests().len(), 1, "one delivery at a time");
}

#[tokio::test]
async fn a_notice_for_a_receiver_that_is_no_more_is_given_up_and_said() {
    let receiver = TestReceiver::start(Mode::Ok).await;
    let mut scene = Scene::with(&receiver);
    scene.worker.send(vec![to("pager", notice(1, Priority::High))]);
    let outcome = scene.outcome().await;
    assert_eq!(outcome.delivery, Delivery::GivenUp { at: START });
    assert!(outcome.said.contains("\"pager\""), "{}", outcome.said);
}

#[tokio::test]
async fn twenty_thousand_notices_leave_the_ten_thousand_most_urgent_newest() {
    let mut receiver = TestReceiver::start(Mode::status(500)).await;
    let mut scene = Scene::with(&receiver);
    let (_, _) = scene.first_attempt(notice(0, Priority::High)).await;
    let urgent = |id: u64| if id.is_multiple_of(4) { Priority::High } else { Priority::Low };
    scene.worker.send((1..20_000).map(|id| notice(id, urgent(id))).collect());
    assert_eq!(scene.status().queued, CAPACITY);
    let mut let_go = Vec::new();
    for _ in CAPACITY..20_000 {
        let outcome = scene.outcome().await;
        assert_eq!(outcome.delivery, Delivery::GivenUp { at: START });
        let_go.push(outcome.notice_id);
    }
    // 5,000 urgent ones stay, and the newest 5,000 of the 15,000 others.
    let expected: Vec<u64> = (1..20_000_u64).filter(|id| !id.is_multiple_of(4)).take(10_000).collect();
    assert_eq!(let_go, expected);
    receiver.set(Mode::Ok).await;
    scene.to_next_attempt();
    assert_eq!(scene.outcome().await.notice_id, 0);
    assert_eq!(scene.outcome().await.notice_id, 4);
}

#[tokio::test]
async fn a_stop_lets_an_attempt_under_way_end_and_reports_it() {
    let mut receiver = TestReceiver::start(Mode::Hang).await;
    let Scene { worker, hand, mut outcomes } = Scene::with(&receiver);
    worker.send(vec![notice(1, Priority::High), notice(2, Priority::High)]);
    receiver.wait_for(1).await;
    let stopping = tokio::spawn(worker.stop());
    // Three seconds are given to the receiver, five to everything.
    while hand.next_wake() != Some(Mono(3_000)) {
        tokio::task::yield_now().await;
    }
    hand.advance(Duration::from_secs(3));
    let outcome = outcomes.recv().await.unwrap();
    assert_eq!((outcome.notice_id, outcome.attempts, outcome.delivery), (1, 1, Delivery::Waiting));
    assert_eq!(outcome.body, receiver.requests()[0].body, "the next start sends the same");
    assert_eq!(outcomes.recv().await, None, "no further attempt, and the channel closes");
    stopping.await.unwrap();
    receiver.set(Mode::Ok).await;
    assert_eq!(receiver.requests().len(), 1);
}

#[tokio::test]
async fn a_stop_ends_in_time_although_nobody_takes_the_outcomes() {
    let receiver = TestReceiver::start(Mode::Ok).await;
    let (clock, hand) = Clock::simulated(START);
    let (report, mut outcomes) = mpsc::channel(1);
    let receivers = vec![webhook("phone", receiver.url(), None)];
    let worker = Worker::spawn(receivers, Tz::UTC, clock, report).unwrap();
    worker.send((1..=5).map(|id| notice(id, Priority::High)).collect());
    receiver.wait_for(2).await;
    let stopping = tokio::spawn(worker.stop());
    while hand.next_wake().is_none_or(|wake| wake > Mono(5_000)) {
        tokio::task::yield_now().await;
    }
    hand.advance(Duration::from_secs(5));
    stopping.await.unwrap();
    assert_eq!(outcomes.recv().await.map(|outcome| outcome.notice_id), Some(1));
    assert_eq!(outcomes.recv().await, None);
    assert_eq!(receiver.requests().len(), 2, "while outcomes aren't taken nothing more is sent");
}

#[tokio::test]
async fn a_worker_whose_secret_is_missing_does_not_start_and_says_why() {
    let source = SecretSource::Env("RAILTIDE_NO_SUCH_TOKEN".into());
    let receivers = vec![webhook("phone", "http://127.0.0.1:9/".into(), Some(source))];
    let (report, _outcomes) = mpsc::channel(1);
    let error = Worker::spawn(receivers, Tz::UTC, Clock::system(), report).unwrap_err().to_string();
    assert!(error.contains("\"phone\"") && error.contains("RAILTIDE_NO_SUCH_TOKEN"), "{error}");
}
