//! What waits in memory: one lane per receiver, bounded all together. It knows no clock and no socket; it is told
//! the time and says what may be sent.

use std::cmp::Reverse;
use std::collections::VecDeque;

use super::Waiting;
use super::answer::Answer;
use super::lane::{Hold, Lane, ReceiverStatus};
use crate::alarm::{Delivery, Notice, Outcome};
use crate::quantity::{Moment, Mono, Utc};

/// All lanes.
pub(super) struct Queue {
    lanes: Vec<Lane>,
    capacity: usize,
    arrivals: u64,
    /// Notices that were given up without an attempt and not yet reported, at most `capacity` of them.
    let_go: VecDeque<Outcome>,
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
        self.arrivals += 1;
        lane.add(waiting, self.arrivals);
        if self.lanes.iter().map(Lane::len).sum::<usize>() > self.capacity {
            self.drop_least_urgent_oldest(now);
        }
    }

    fn drop_least_urgent_oldest(&mut self, now: Utc) {
        let candidates =
            self.lanes.iter_mut().filter_map(|lane| lane.least_urgent_oldest().map(|place| (place, lane)));
        let chosen =
            candidates.min_by_key(|((priority, id, arrival), _)| (Reverse(*priority), *id, *arrival));
        if let Some(waiting) = chosen.and_then(|(place, lane)| lane.drop_at(place)) {
            let said = format!("let go untold: more than {} notices were waiting", self.capacity);
            self.let_go(waiting, now, said);
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

#[cfg(test)]
mod tests {
    use std::time::Duration;

    use super::*;
    use crate::alarm::{AlarmKey, Facts, NoticeKind, Priority};
    use crate::notice::answer::Verdict;

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
        let mut queue = queue(10, (1..=2).map(|id| (id, Priority::Low)));
        assert_eq!(drain(&mut queue, 0), [1, 2]);
        for id in 3..=1_001 {
            queue.add(waiting(id, "phone", Priority::Low), Utc(0));
            assert_eq!(drain(&mut queue, 0), [id]);
        }
        for id in [1, 2] {
            queue.add(waiting(id, "phone", Priority::Low), Utc(0));
        }
        assert_eq!(drain(&mut queue, 0), [1], "of 1,001 finished ones only the first is forgotten");
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
