//! What waits in memory: one lane per receiver, bounded all together. It knows no clock and no socket; it is told
//! the time and says what may be sent.

use std::collections::{BTreeMap, HashSet, VecDeque};
use std::time::Duration;

use super::Waiting;
use super::route::{Answer, Verdict};
use crate::alarm::{Delivery, Notice, Outcome, Priority};
use crate::quantity::{Mono, Utc};

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

/// When a lane may send next.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Next {
    /// Nothing waits.
    Nothing,
    /// Not before this.
    At(Mono),
    /// Now.
    Now,
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

    /// What `lane` may do at `now`.
    pub(super) fn next(&self, lane: usize, now: Mono) -> Next {
        self.lanes[lane].next(now)
    }

    /// The notice that `lane` may send at `now`, if any, with the bytes of its last attempt; the lane counts as
    /// sending until [`answered`](Self::answered).
    pub(super) fn take(&mut self, lane: usize, now: Mono) -> Option<(Notice, Option<Vec<u8>>)> {
        self.lanes[lane].take(now)
    }

    /// Takes in what came of the attempt that [`take`](Self::take) started. `wait` gives the time to leave the receiver
    /// alone, from its failures in a row.
    pub(super) fn answered(
        &mut self,
        lane: usize,
        answer: &Answer,
        body: Vec<u8>,
        (now, utc): (Mono, Utc),
        wait: impl FnOnce(u32) -> Duration,
    ) -> Option<Outcome> {
        self.lanes[lane].answered(answer, body, (now, utc), wait)
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

    fn next(&self, now: Mono) -> Next {
        let Some((priority, ..)) = self.waiting.keys().next() else { return Next::Nothing };
        let Some(rest) = &self.rest else { return Next::Now };
        let urgent = *priority < rest.tried;
        let due = if urgent { rest.until.min(rest.failed_at + URGENT_GAP) } else { rest.until };
        if now < due { Next::At(due) } else { Next::Now }
    }

    fn take(&mut self, now: Mono) -> Option<(Notice, Option<Vec<u8>>)> {
        if self.next(now) != Next::Now {
            return None;
        }
        let (place, entry) = self.waiting.first_key_value()?;
        self.sending = Some(*place);
        Some((entry.waiting.notice.clone(), entry.waiting.body.clone()))
    }

    fn answered(
        &mut self,
        answer: &Answer,
        body: Vec<u8>,
        (now, utc): (Mono, Utc),
        wait: impl FnOnce(u32) -> Duration,
    ) -> Option<Outcome> {
        let place = self.sending.take()?;
        let entry = self.waiting.get_mut(&place)?;
        self.last_said = Some(answer.said.clone());
        entry.waiting.attempts += 1;
        entry.waiting.body = Some(body.clone());
        let delivery = match answer.verdict {
            Verdict::Taken => Delivery::Delivered { at: utc },
            Verdict::Later { .. } => Delivery::Waiting,
            Verdict::Refused { allowed } => {
                entry.refusals += 1;
                if entry.refusals < allowed { Delivery::Waiting } else { Delivery::GivenUp { at: utc } }
            }
            Verdict::Gone => Delivery::GivenUp { at: utc },
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
            self.rest = Some(Rest { until: now + wait(self.failures), failed_at: now, tried: place.0 });
        }
        if outcome.delivery != Delivery::Waiting {
            self.finish(place);
        }
        Some(outcome)
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
