//! What waits in memory: one lane per receiver, bounded all together. It knows no clock and no socket; it is told
//! the time and says what may be sent.

use std::collections::{BTreeMap, HashSet, VecDeque};
use std::time::Duration;

use super::Waiting;
use super::backoff::next_attempt;
use super::route::{Answer, Verdict};
use crate::alarm::{Delivery, Notice, Outcome, Priority};
use crate::quantity::{Moment, Mono, Utc};

/// A receiver that failed is tried no more often than this, however urgent what comes in.
const URGENT_GAP: Duration = Duration::from_secs(5);
/// How many finished notices a lane remembers, so that one handed over again isn't sent again.
const REMEMBERED: usize = 1_000;

/// Order of delivery within a lane: priority, then number in the outbox, then arrival.
type Place = (Priority, u64, u64);

/// All lanes.
pub(super) struct Queue {
    lanes: Vec<Lane>,
    capacity: usize,
    arrivals: u64,
    /// Notices that were given up without an attempt and not yet reported, at most `capacity` of them.
    let_go: VecDeque<Outcome>,
}

/// What waits for one receiver, and how the receiver has been answering.
pub(super) struct Lane {
    pub(super) receiver: String,
    waiting: BTreeMap<Place, Entry>,
    /// Idempotency keys of what waits and of the last finished ones.
    known: HashSet<String>,
    finished: VecDeque<String>,
    /// The one that an attempt is being made for; it stays in `waiting` until the answer is there.
    sending: Option<Place>,
    /// Failures in a row.
    failures: u32,
    last_said: Option<String>,
    /// Set while the receiver is backed off.
    rest: Option<Rest>,
}

struct Entry {
    waiting: Waiting,
    refusals: u32,
}

/// A receiver that failed is left alone for a while.
struct Rest {
    until: Mono,
    failed_at: Mono,
    /// Priority of the notice that it failed with: only what is more urgent needn't wait for `until`.
    tried: Priority,
}

/// Why a lane can't send.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Hold {
    /// Nothing waits.
    Nothing,
    /// The receiver is left alone until then.
    Until(Mono),
}

/// How one receiver stands: for `notice list` and for the condition notice-stuck.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ReceiverStatus {
    /// Its name.
    pub receiver: String,
    /// Notices that wait, the one being sent included.
    pub queued: usize,
    /// When what the oldest of them tells of happened.
    pub oldest_at: Option<Utc>,
    /// What the receiver or the network last said.
    pub last_said: Option<String>,
    /// Failed attempts in a row.
    pub failures: u32,
    /// Whether an attempt is being made.
    pub sending: bool,
    /// While it is backed off: when it is tried again, on the worker's clock.
    pub next_attempt: Option<Mono>,
}

impl Queue {
    /// One lane for each of `receivers`, together for `capacity` notices.
    pub(super) fn new(receivers: impl IntoIterator<Item = String>, capacity: usize) -> Self {
        let lanes = receivers.into_iter().map(Lane::new).collect();
        Queue { lanes, capacity, arrivals: 0, let_go: VecDeque::new() }
    }

    /// Takes a notice in, unless its lane knows it already. Where it makes too many, the least urgent oldest one goes.
    pub(super) fn add(&mut self, waiting: Waiting, now: Utc) {
        let Some(lane) = self.lanes.iter_mut().find(|lane| lane.receiver == waiting.notice.receiver) else {
            let said = format!("the config names no receiver \"{}\" any more", waiting.notice.receiver);
            self.let_go(waiting, now, said);
            return;
        };
        if !lane.known.insert(waiting.notice.idempotency_key.clone()) {
            return;
        }
        self.arrivals += 1;
        let place = (waiting.notice.priority, waiting.notice.id, self.arrivals);
        lane.waiting.insert(place, Entry { waiting, refusals: 0 });
        if self.lanes.iter().map(|lane| lane.waiting.len()).sum::<usize>() > self.capacity {
            self.drop_least_urgent_oldest(now);
        }
    }

    fn drop_least_urgent_oldest(&mut self, now: Utc) {
        let candidates =
            self.lanes.iter_mut().filter_map(|lane| lane.least_urgent_oldest().map(|p| (p, lane)));
        let Some((place, lane)) = candidates
            .min_by_key(|((priority, id, arrival), _)| (std::cmp::Reverse(*priority), *id, *arrival))
        else {
            return;
        };
        if let Some(entry) = lane.waiting.remove(&place) {
            lane.known.remove(&entry.waiting.notice.idempotency_key);
            let said = format!("let go untold: more than {} notices were waiting", self.capacity);
            self.let_go(entry.waiting, now, said);
        }
    }

    /// Beyond `capacity` unreported ones the oldest report is dropped: in the record that notice still waits, and
    /// the next start hands it over again.
    fn let_go(&mut self, waiting: Waiting, now: Utc, said: String) {
        if self.let_go.len() == self.capacity {
            self.let_go.pop_front();
        }
        self.let_go.push_back(Outcome {
            notice_id: waiting.notice.id,
            attempts: waiting.attempts,
            delivery: Delivery::GivenUp { at: now },
            said,
            body: waiting.body.unwrap_or_default(),
        });
    }

    /// The next report of a notice that was given up without an attempt.
    pub(super) fn next_let_go(&mut self) -> Option<Outcome> {
        self.let_go.pop_front()
    }

    /// The notice that `lane` may send at `now`, with the bytes of its last attempt; the lane counts as sending until
    /// [`answered`](Self::answered).
    pub(super) fn take(&mut self, lane: usize, now: Mono) -> Result<(Notice, Option<Vec<u8>>), Hold> {
        self.lanes[lane].take(now)
    }

    /// Takes in what came of the attempt that [`take`](Self::take) started; gives the outcome and the receiver's
    /// failures in a row. `jitter` is a random number in [0, 1), for the back-off.
    pub(super) fn answered(
        &mut self,
        lane: usize,
        answer: &Answer,
        body: Vec<u8>,
        now: Moment,
        jitter: f64,
    ) -> Option<(Outcome, u32)> {
        self.lanes[lane].answered(answer, body, now, jitter)
    }

    /// How every receiver stands.
    pub(super) fn status(&self) -> Vec<ReceiverStatus> {
        self.lanes.iter().map(Lane::status).collect()
    }
}

impl Lane {
    fn new(receiver: String) -> Self {
        Lane {
            receiver,
            waiting: BTreeMap::new(),
            known: HashSet::new(),
            finished: VecDeque::new(),
            sending: None,
            failures: 0,
            last_said: None,
            rest: None,
        }
    }

    fn least_urgent_oldest(&self) -> Option<Place> {
        let not_sending = |place: &&Place| Some(**place) != self.sending;
        let (lowest, ..) = *self.waiting.keys().rev().find(not_sending)?;
        self.waiting.range((lowest, 0, 0)..).map(|(place, _)| place).find(not_sending).copied()
    }

    fn take(&mut self, now: Mono) -> Result<(Notice, Option<Vec<u8>>), Hold> {
        let (place, entry) = self.waiting.first_key_value().ok_or(Hold::Nothing)?;
        if let Some(rest) = &self.rest {
            let urgent = place.0 < rest.tried;
            let due = if urgent { rest.until.min(rest.failed_at + URGENT_GAP) } else { rest.until };
            if now < due {
                return Err(Hold::Until(due));
            }
        }
        self.sending = Some(*place);
        Ok((entry.waiting.notice.clone(), entry.waiting.body.clone()))
    }

    fn answered(
        &mut self,
        answer: &Answer,
        body: Vec<u8>,
        now: Moment,
        jitter: f64,
    ) -> Option<(Outcome, u32)> {
        let place = self.sending.take()?;
        let entry = self.waiting.get_mut(&place)?;
        self.last_said = Some(answer.said.clone());
        entry.waiting.attempts += 1;
        entry.waiting.body = Some(body.clone());
        let mut retry_after = None;
        let delivery = match answer.verdict {
            Verdict::Taken => Delivery::Delivered { at: now.utc },
            Verdict::Later { retry_after: asked } => {
                retry_after = asked;
                Delivery::Waiting
            }
            Verdict::Refused { allowed } => {
                entry.refusals += 1;
                if entry.refusals < allowed { Delivery::Waiting } else { Delivery::GivenUp { at: now.utc } }
            }
            Verdict::Gone => Delivery::GivenUp { at: now.utc },
        };
        let outcome = Outcome {
            notice_id: entry.waiting.notice.id,
            attempts: entry.waiting.attempts,
            delivery,
            said: answer.said.clone(),
            body,
        };
        if answer.verdict == Verdict::Taken {
            self.failures = 0;
            self.rest = None;
        } else {
            self.failures = self.failures.saturating_add(1);
            let until = now.mono + next_attempt(self.failures, retry_after, jitter);
            self.rest = Some(Rest { until, failed_at: now.mono, tried: place.0 });
        }
        if outcome.delivery != Delivery::Waiting {
            self.finish(place);
        }
        Some((outcome, self.failures))
    }

    fn finish(&mut self, place: Place) {
        let Some(entry) = self.waiting.remove(&place) else { return };
        self.finished.push_back(entry.waiting.notice.idempotency_key);
        if self.finished.len() > REMEMBERED
            && let Some(oldest) = self.finished.pop_front()
        {
            self.known.remove(&oldest);
        }
    }

    fn status(&self) -> ReceiverStatus {
        ReceiverStatus {
            receiver: self.receiver.clone(),
            queued: self.waiting.len(),
            oldest_at: self.waiting.values().map(|entry| entry.waiting.notice.at).min(),
            last_said: self.last_said.clone(),
            failures: self.failures,
            sending: self.sending.is_some(),
            next_attempt: self.rest.as_ref().filter(|_| !self.waiting.is_empty()).map(|rest| rest.until),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::alarm::{AlarmKey, Facts, NoticeKind};

    fn waiting(id: u64, receiver: &str, priority: Priority) -> Waiting {
        let notice = Notice {
            id,
            receiver: receiver.into(),
            kind: NoticeKind::Raised,
            priority,
            at: Utc(id as i64),
            key: AlarmKey { condition: "rail-high".into(), subject: "hall.reservoir".into() },
            raised_at: Utc(id as i64),
            facts: Facts::default(),
            advice: String::new(),
            idempotency_key: format!("key-{id}"),
            recorded: true,
        };
        Waiting { notice, attempts: 0, body: None }
    }

    fn queue(capacity: usize, notices: impl IntoIterator<Item = (u64, Priority)>) -> Queue {
        let mut queue = Queue::new(["phone".to_owned(), "mail".to_owned()], capacity);
        notices.into_iter().for_each(|(id, priority)| queue.add(waiting(id, "phone", priority), Utc(0)));
        queue
    }

    fn answer(verdict: Verdict) -> Answer {
        Answer { verdict, said: "said".into() }
    }

    /// A wait that, without jitter, is kept to the second.
    const IN_A_MINUTE: Verdict = Verdict::Later { retry_after: Some(Duration::from_secs(60)) };
    const NO_JITTER: f64 = 0.0;
    const START: Moment = after(0);

    const fn after(ms: u64) -> Moment {
        Moment { mono: Mono(ms), utc: Utc(0) }
    }

    fn answered(queue: &mut Queue, lane: usize, verdict: Verdict, now: Moment) -> Outcome {
        let (outcome, _) = queue.answered(lane, &answer(verdict), b"bytes".into(), now, NO_JITTER).unwrap();
        outcome
    }

    /// The numbers in the order in which they are delivered, if every attempt succeeds.
    fn drain(queue: &mut Queue, lane: usize) -> Vec<u64> {
        let mut order = Vec::new();
        while let Ok((notice, _)) = queue.take(lane, Mono(0)) {
            order.push(notice.id);
            answered(queue, lane, Verdict::Taken, START);
        }
        order
    }

    #[test]
    fn a_lane_is_drained_by_priority_then_number() {
        use Priority::{High, Low, Medium};
        let mut queue = queue(10, [(5, Low), (4, High), (1, Medium), (2, Low), (3, High)]);
        assert_eq!(drain(&mut queue, 0), [3, 4, 1, 2, 5]);
    }

    #[test]
    fn when_full_the_least_urgent_oldest_goes_and_is_reported() {
        use Priority::{High, Low, Medium};
        let mut queue = queue(3, [(1, High), (2, Low), (3, Low), (4, Medium), (5, Medium)]);
        let let_go: Vec<_> = std::iter::from_fn(|| queue.next_let_go()).collect();
        assert_eq!(let_go.iter().map(|outcome| outcome.notice_id).collect::<Vec<_>>(), [2, 3]);
        assert!(let_go.iter().all(|outcome| outcome.delivery == Delivery::GivenUp { at: Utc(0) }));
        assert_eq!(drain(&mut queue, 0), [1, 4, 5]);
    }

    #[test]
    fn the_one_being_sent_is_never_the_one_that_goes() {
        let mut queue = queue(1, [(1, Priority::Low)]);
        queue.take(0, Mono(0)).unwrap();
        queue.add(waiting(2, "mail", Priority::High), Utc(0));
        assert_eq!(queue.next_let_go().map(|outcome| outcome.notice_id), Some(2));
        assert_eq!(queue.status()[0].queued, 1);
    }

    #[test]
    fn unreported_ones_are_bounded_too() {
        let mut queue = queue(4, (1..=100).map(|id| (id, Priority::Low)));
        let reported: Vec<_> =
            std::iter::from_fn(|| queue.next_let_go()).map(|outcome| outcome.notice_id).collect();
        assert_eq!(reported, [93, 94, 95, 96]);
    }

    #[test]
    fn a_known_key_is_passed_over_while_it_waits_and_after_it_was_delivered() {
        let mut queue = queue(10, [(1, Priority::Low), (1, Priority::Low)]);
        assert_eq!(drain(&mut queue, 0), [1]);
        queue.add(waiting(1, "phone", Priority::Low), Utc(0));
        assert_eq!(drain(&mut queue, 0), [0; 0]);
        queue.add(waiting(1, "mail", Priority::Low), Utc(0));
        assert_eq!(drain(&mut queue, 1), [1], "another receiver doesn't know it");
    }

    #[test]
    fn one_that_was_let_go_may_be_handed_over_again() {
        let mut queue = queue(1, [(1, Priority::Low), (2, Priority::High)]);
        assert_eq!(drain(&mut queue, 0), [2]);
        queue.add(waiting(1, "phone", Priority::Low), Utc(0));
        assert_eq!(drain(&mut queue, 0), [1]);
    }

    #[test]
    fn what_a_lane_remembers_of_the_finished_is_bounded() {
        let mut queue = queue(10, []);
        for id in 0..3 * REMEMBERED as u64 {
            queue.add(waiting(id, "phone", Priority::Low), Utc(0));
            assert_eq!(drain(&mut queue, 0), [id]);
        }
        assert_eq!(queue.lanes[0].known.len(), REMEMBERED);
    }

    #[test]
    fn a_failed_receiver_rests_as_a_whole_but_not_for_what_is_more_urgent() {
        let mut queue = queue(10, [(1, Priority::Medium)]);
        queue.take(0, Mono(0)).unwrap();
        answered(&mut queue, 0, IN_A_MINUTE, START);
        queue.add(waiting(2, "phone", Priority::Medium), Utc(0));
        assert_eq!(queue.take(0, Mono(0)), Err(Hold::Until(Mono(60_000))));
        assert_eq!(queue.take(1, Mono(0)), Err(Hold::Nothing), "the other receiver is not held");

        queue.add(waiting(3, "phone", Priority::High), Utc(0));
        assert_eq!(queue.take(0, Mono(0)), Err(Hold::Until(Mono(5_000))), "but not within a few seconds");
        assert_eq!(queue.take(0, Mono(5_000)).unwrap().0.id, 3);
        answered(&mut queue, 0, IN_A_MINUTE, after(5_000));
        queue.add(waiting(4, "phone", Priority::High), Utc(0));
        assert_eq!(queue.take(0, Mono(5_000)), Err(Hold::Until(Mono(65_000))), "an equally urgent one waits");
    }

    #[test]
    fn a_success_ends_the_rest_and_the_row_of_failures() {
        let mut queue = queue(10, [(1, Priority::Low), (2, Priority::Low)]);
        for (now, row) in [(0, 1), (60_000, 2)] {
            queue.take(0, Mono(now)).unwrap();
            answered(&mut queue, 0, IN_A_MINUTE, after(now));
            assert_eq!(queue.status()[0].failures, row);
        }
        queue.take(0, Mono(120_000)).unwrap();
        answered(&mut queue, 0, Verdict::Taken, after(120_000));
        assert_eq!(queue.status()[0].failures, 0);
        assert_eq!(queue.take(0, Mono(120_000)).unwrap().0.id, 2);
    }

    #[test]
    fn a_refused_notice_is_given_up_after_as_many_refusals_as_it_is_worth() {
        let mut queue = queue(10, [(1, Priority::Low)]);
        let refused = Verdict::Refused { allowed: 2 };
        let mut now = START;
        // What isn't a refusal doesn't count.
        for verdict in [IN_A_MINUTE, IN_A_MINUTE, refused] {
            queue.take(0, now.mono).unwrap();
            assert_eq!(answered(&mut queue, 0, verdict, now).delivery, Delivery::Waiting);
            now.mono = queue.status()[0].next_attempt.unwrap();
        }
        queue.take(0, now.mono).unwrap();
        let outcome = answered(&mut queue, 0, refused, now);
        assert_eq!((outcome.attempts, outcome.delivery), (4, Delivery::GivenUp { at: Utc(0) }));
        assert_eq!(outcome.body, b"bytes");
        assert_eq!(queue.status()[0].queued, 0);
    }

    #[test]
    fn a_receiver_that_the_config_no_longer_names_is_said() {
        let mut queue = queue(10, []);
        queue.add(waiting(9, "pager", Priority::High), Utc(7));
        let outcome = queue.next_let_go().unwrap();
        assert_eq!((outcome.notice_id, outcome.delivery), (9, Delivery::GivenUp { at: Utc(7) }));
        assert!(outcome.said.contains("\"pager\""), "{}", outcome.said);
    }

    #[test]
    fn the_status_tells_what_waits_and_since_when() {
        let mut queue = queue(10, [(8, Priority::High), (3, Priority::Low)]);
        queue.take(0, Mono(0)).unwrap();
        assert!(queue.status()[0].sending);
        answered(&mut queue, 0, IN_A_MINUTE, START);
        let phone = ReceiverStatus {
            receiver: "phone".into(),
            queued: 2,
            oldest_at: Some(Utc(3)),
            last_said: Some("said".into()),
            failures: 1,
            sending: false,
            next_attempt: Some(Mono(60_000)),
        };
        assert_eq!(queue.status()[0], phone);
        assert_eq!(queue.status()[1].queued, 0);
    }
}
