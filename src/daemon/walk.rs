//! The walk of one reading: logger → time → watch → held → store → notice, in this order and never back.

use std::time::Duration;

use crate::alarm::{JournalEntry, Outcome, State};
use crate::clock::{Clock, TimeBase};
use crate::config::Site;
use crate::logger::{FromLogger, LoggerEvent};
use crate::notice::{Waiting, WorkerHandle};
use crate::quantity::{Moment, Mono};
use crate::store::{Answer, PendingRequest, Store, StoreError};
use crate::watch::{Decided, Watch};

use super::held::Held;
use super::hush::Hush;

/// After a commit that failed the next one is tried no sooner than this.
const RETRY_COMMIT: Duration = Duration::from_secs(2);

/// Everything that a reading meets on its way.
pub(super) struct Walk {
    clock: Clock,
    time: TimeBase,
    watch: Watch,
    held: Held,
    store: Store,
    notices: WorkerHandle,
    logger_names: Vec<String>,
    commit_every: Duration,
    commit_at: Mono,
    store_failed: bool,
    /// True until requests that were put before the start have been looked for.
    requests_unread: bool,
    hush: Hush,
}

impl Walk {
    pub(super) fn new(
        site: &Site,
        clock: Clock,
        time: TimeBase,
        watch: Watch,
        store: Store,
        notices: WorkerHandle,
    ) -> Self {
        let commit_at = clock.now().mono + site.store.commit_every;
        Walk {
            clock,
            time,
            watch,
            held: Held::default(),
            store,
            notices,
            logger_names: site.loggers.iter().map(|l| l.name.clone()).collect(),
            commit_every: site.store.commit_every,
            commit_at,
            store_failed: false,
            requests_unread: true,
            hush: Hush::default(),
        }
    }

    /// A logger spoke, or something happened to its line.
    pub(super) fn from_logger(&mut self, from: FromLogger) {
        let FromLogger { logger, received, what } = from;
        match what {
            LoggerEvent::Sample(sample) => {
                self.look_at_the_clock(received);
                let stamp = self.time.stamp(logger, received, sample.logger_ms);
                let now = self.label(self.clock.now());
                let decided = self.watch.sample(logger, stamp, &sample.values, now);
                self.settle(decided);
            }
            LoggerEvent::Disconnected { why } => {
                self.log_fault(logger, &format!("not connected: {why}"));
                self.watch.disconnected(logger, why);
            }
            LoggerEvent::Connected { port } => {
                tracing::info!(logger = self.logger_names[logger], port, "the logger's port is open");
            }
            LoggerEvent::Fault(fault) => self.log_fault(logger, fault.sentence()),
            LoggerEvent::Lost { lines } => {
                self.log_fault(logger, &format!("lines are missing before this one (latest count {lines})"));
            }
            LoggerEvent::Restarted => {
                tracing::info!(logger = self.logger_names[logger], "the logger has started again");
            }
            LoggerEvent::ReadHangs => {
                self.log_fault(logger, "a read from its port has not returned; look at the adapter")
            }
        }
    }

    /// Time passes: delays run out, requests are answered, what is due is committed.
    pub(super) fn tick(&mut self) {
        let now = self.clock.now();
        self.look_at_the_clock(now);
        let now = self.label(now);
        let decided = self.watch.tick(now);
        self.answer_requests(now);
        self.settle(decided);
        for (what, times) in self.hush.overdue(now.mono) {
            tracing::warn!("{what} ({times} times more)");
        }
    }

    /// A notice was delivered, or wasn't.
    pub(super) fn outcome(&mut self, outcome: Outcome) {
        tracing::info!(notice = outcome.notice_id, attempts = outcome.attempts, "{}", outcome.said);
        self.held.add_outcome(outcome);
        // At once: a delivery that isn't in the record yet would be repeated by a restart.
        self.commit();
    }

    /// Commits what is held and gives up the parts that must be stopped.
    pub(super) fn finish(mut self) -> (Held, Store, WorkerHandle) {
        self.commit();
        (self.held, self.store, self.notices)
    }

    /// Holds what was decided, commits it when it's urgent or due, and only then tells receivers. If the commit
    /// fails, they are told at once from memory, marked "not recorded".
    fn settle(&mut self, decided: Decided) {
        let urgent = !decided.journal.is_empty();
        for entry in &decided.journal {
            log_transition(entry);
        }
        let mut notices = decided.notices.clone();
        self.held.add(decided);
        if urgent || self.clock.now().mono >= self.commit_at {
            let recorded = self.commit();
            if !recorded {
                self.held.mark_not_recorded(&notices);
                notices.iter_mut().for_each(|notice| notice.recorded = false);
            }
        }
        self.notices
            .send(notices.into_iter().map(|notice| Waiting { notice, attempts: 0, body: None }).collect());
    }

    fn commit(&mut self) -> bool {
        let now = self.clock.now().mono;
        if self.held.is_empty() {
            self.commit_at = now + self.commit_every;
            return true;
        }
        let let_go = self.held.let_go();
        match self.held.commit(&mut self.store) {
            Ok(()) => {
                self.commit_at = now + self.commit_every;
                if std::mem::take(&mut self.store_failed) {
                    tracing::warn!(
                        readings_let_go = let_go,
                        "the record can be written again: what was held in memory is in it now, except the readings that had to be let go"
                    );
                }
                true
            }
            Err(error) => {
                self.commit_at = now + RETRY_COMMIT;
                self.store_failed = true;
                self.log_store_failure(&error, now);
                false
            }
        }
    }

    fn answer_requests(&mut self, now: Moment) {
        let requests = match self.new_requests() {
            Ok(requests) => requests,
            Err(error) => return self.log_store_failure(&error, now.mono),
        };
        for PendingRequest { id, request, .. } in requests {
            let (decided, answer) = self.watch.request(&request, now);
            tracing::info!(by = request.by, done = answer.done, "{}", answer.text);
            self.held.add_answer(id, Answer { done_at: now.utc, ok: answer.done, said: answer.text });
            self.settle(decided);
            self.commit();
        }
    }

    fn new_requests(&mut self) -> Result<Vec<PendingRequest>, StoreError> {
        let unread = self.store.changed_by_others()? || self.requests_unread;
        self.requests_unread = unread;
        let requests = if unread { self.store.pending_requests()? } else { Vec::new() };
        self.requests_unread = false;
        Ok(requests)
    }

    fn look_at_the_clock(&mut self, now: Moment) {
        if let Some(step) = self.time.look(now) {
            tracing::warn!(
                by_s = step.by_ms as f64 / 1000.0,
                "the host's clock has stepped; delays are not affected, readings are flagged until it has caught up"
            );
        }
    }

    /// The present moment with UTC as readings are labelled.
    fn label(&self, now: Moment) -> Moment {
        Moment { utc: self.time.utc(now.mono), ..now }
    }

    fn log_fault(&mut self, logger: usize, what: &str) {
        let name = &self.logger_names[logger];
        let now = self.clock.now().mono;
        if let Some(times) = self.hush.note(&format!("logger {name}: {what}"), now) {
            tracing::warn!(
                "logger {name}: {what}{}",
                if times > 1 { format!(" ({times} times)") } else { String::new() }
            );
        }
    }

    fn log_store_failure(&mut self, error: &StoreError, now: Mono) {
        if self.hush.note("the record can't be written", now).is_some() {
            tracing::error!(
                readings_held = self.held.readings(),
                "the record can't be written: {error}; alarms still go out, readings are held in memory"
            );
        }
    }
}

fn log_transition(entry: &JournalEntry) {
    let facts = &entry.facts;
    let line = format!("{} is {} (it was {})", entry.key, entry.to.word(), entry.from.word(),);
    match entry.to {
        State::Unacknowledged => {
            tracing::warn!(
                seq = entry.seq,
                value = facts.value,
                setpoint = facts.setpoint,
                unit = facts.unit,
                "{line}"
            );
        }
        _ => tracing::info!(
            seq = entry.seq,
            value = facts.value,
            setpoint = facts.setpoint,
            unit = facts.unit,
            "{line}"
        ),
    }
}
