//! What waits for one receiver, and when the receiver may be tried.

use std::collections::{BTreeMap, HashSet, VecDeque};
use std::time::Duration;

use super::Waiting;
use super::answer::{Answer, Verdict};
use super::backoff::next_attempt;
use crate::alarm::{Delivery, Notice, Outcome, Priority};
use crate::quantity::{Moment, Mono, Utc};

/// A receiver that failed is tried no more often than this, however urgent what comes in.
const URGENT_GAP: Duration = Duration::from_secs(5);
/// How many finished notices a lane remembers, so that one handed over again isn't sent again.
const REMEMBERED: usize = 1_000;

/// Order of delivery within a lane: priority, then number in the outbox, then arrival.
pub(super) type Place = (Priority, u64, u64);

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

impl Lane {
    /// An empty lane to `receiver`.
    pub(super) fn new(receiver: String) -> Self {
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

    /// Takes a notice in, unless its key is known already.
    pub(super) fn add(&mut self, waiting: Waiting, arrival: u64) {
        if self.known.insert(waiting.notice.idempotency_key.clone()) {
            let place = (waiting.notice.priority, waiting.notice.id, arrival);
            self.waiting.insert(place, Entry { waiting, refusals: 0 });
        }
    }

    /// How many wait, the one being sent included.
    pub(super) fn len(&self) -> usize {
        self.waiting.len()
    }

    /// The first to be let go where room is needed; never the one that is being sent.
    pub(super) fn least_urgent_oldest(&self) -> Option<Place> {
        let not_sending = |place: &&Place| Some(**place) != self.sending;
        let (lowest, ..) = *self.waiting.keys().rev().find(not_sending)?;
        self.waiting.range((lowest, 0, 0)..).map(|(place, _)| place).find(not_sending).copied()
    }

    /// Lets the notice at `place` go and forgets its key: it may be handed over again.
    pub(super) fn drop_at(&mut self, place: Place) -> Option<Waiting> {
        let entry = self.waiting.remove(&place)?;
        self.known.remove(&entry.waiting.notice.idempotency_key);
        Some(entry.waiting)
    }

    /// See [`Queue::take`](super::queue::Queue::take).
    pub(super) fn take(&mut self, now: Mono) -> Result<(Notice, Option<Vec<u8>>), Hold> {
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

    /// See [`Queue::answered`](super::queue::Queue::answered).
    pub(super) fn answered(
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

    /// How it stands.
    pub(super) fn status(&self) -> ReceiverStatus {
        let resting = self.rest.as_ref().filter(|_| self.sending.is_none() && !self.waiting.is_empty());
        ReceiverStatus {
            receiver: self.receiver.clone(),
            queued: self.waiting.len(),
            oldest_at: self.waiting.values().map(|entry| entry.waiting.notice.at).min(),
            last_said: self.last_said.clone(),
            failures: self.failures,
            sending: self.sending.is_some(),
            next_attempt: resting.map(|rest| rest.until),
        }
    }
}
