//! The worker: one task for each receiver over the shared queue, and one that reports what was let go.

use std::sync::{Arc, Mutex, MutexGuard};
use std::time::Duration;

use chrono_tz::Tz;
use tokio::sync::{Notify, mpsc, watch};
use tokio::task::JoinSet;

use super::NoticeError;
use super::answer::{Answer, Verdict};
use super::lane::{Hold, ReceiverStatus};
use super::queue::Queue;
use super::route::Sender;
use crate::alarm::{Delivery, Notice, Outcome};
use crate::clock::Clock;
use crate::config::Receiver;

/// How many notices wait in memory, over all receivers. Beyond it the least urgent oldest one is given up.
pub const CAPACITY: usize = 10_000;
/// When the worker is stopped, an attempt under way is given this long to end.
const LAST_ANSWER: Duration = Duration::from_secs(3);
/// … and everything together this long.
const STOPPED_WITHIN: Duration = Duration::from_secs(5);

/// A notice that is to be delivered, and how far it has come.
#[derive(Clone, Debug, PartialEq)]
pub struct Waiting {
    /// The notice. Its idempotency key is what the worker knows it by.
    pub notice: Notice,
    /// Attempts made so far, in earlier runs.
    pub attempts: u32,
    /// The bytes of the last of them, which the next one sends again.
    pub body: Option<Vec<u8>>,
}

/// Starts the delivery of notices.
#[derive(Debug)]
pub struct Worker;

impl Worker {
    /// Starts one task for each of `receivers`. Times in texts are those of `zone`; waits and time limits are
    /// measured on `clock`. Every attempt, and every notice that is given up without one, is reported to `outcomes`;
    /// while that is full nothing more is sent.
    ///
    /// Must be called within a tokio runtime. Fails if a receiver can't be prepared, for example because its token
    /// isn't there; it doesn't contact any.
    pub fn spawn(
        receivers: Vec<Receiver>,
        zone: Tz,
        clock: Clock,
        outcomes: mpsc::Sender<Outcome>,
    ) -> Result<WorkerHandle, NoticeError> {
        let senders = receivers.iter().map(Sender::to).collect::<Result<Vec<_>, _>>()?;
        let queue = Queue::new(receivers.into_iter().map(|receiver| receiver.name), CAPACITY);
        let shared = Arc::new(Shared {
            queue: Mutex::new(queue),
            bells: senders.iter().map(|_| Notify::new()).collect(),
            let_go: Notify::new(),
        });
        let (stop, stopping) = watch::channel(());
        let mut tasks = JoinSet::new();
        for (lane, sender) in senders.into_iter().enumerate() {
            let delivery = Delivering {
                lane,
                sender,
                zone,
                clock: clock.clone(),
                shared: shared.clone(),
                outcomes: outcomes.clone(),
            };
            tasks.spawn(delivery.run(stopping.clone()));
        }
        tasks.spawn(report_let_go(shared.clone(), outcomes, stopping));
        Ok(WorkerHandle { shared, clock, stop, tasks })
    }
}

/// The running worker. Dropping it stops the worker at once; [`stop`](Self::stop) does it in order.
#[derive(Debug)]
pub struct WorkerHandle {
    shared: Arc<Shared>,
    clock: Clock,
    /// Dropped to stop the tasks.
    stop: watch::Sender<()>,
    tasks: JoinSet<()>,
}

impl WorkerHandle {
    /// Hands notices over; returns at once. One whose idempotency key its receiver is known to have, or that waits
    /// already, is passed over.
    pub fn send(&self, notices: Vec<Waiting>) {
        // The core calls this at every reading, and most have nothing to tell.
        if notices.is_empty() {
            return;
        }
        let now = self.clock.now().utc;
        let mut queue = self.shared.lock();
        for waiting in notices {
            queue.add(waiting, now);
        }
        drop(queue);
        self.shared.bells.iter().for_each(Notify::notify_one);
        self.shared.let_go.notify_one();
    }

    /// How every receiver stands, in the order of the config.
    pub fn status(&self) -> Vec<ReceiverStatus> {
        self.shared.lock().status()
    }

    /// Starts no further attempt, gives those under way 3 s to end, and reports them; what isn't done within 5 s is
    /// dropped (it still waits in the record). Outcomes must be received meanwhile; their channel closes at the end.
    pub async fn stop(self) {
        let WorkerHandle { clock, stop, mut tasks, .. } = self;
        drop(stop);
        let all_done = async { while tasks.join_next().await.is_some() {} };
        tokio::select! {
            () = all_done => {}
            () = clock.sleep(STOPPED_WITHIN) => tracing::warn!("notices were still being sent or reported at the stop"),
        }
    }
}

/// What the handle and the tasks share.
struct Shared {
    queue: Mutex<Queue>,
    /// One for each lane: rung when something new waits there.
    bells: Vec<Notify>,
    /// Rung when something may have been let go.
    let_go: Notify,
}

impl std::fmt::Debug for Shared {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Shared").field("status", &self.lock().status()).finish_non_exhaustive()
    }
}

impl Shared {
    fn lock(&self) -> MutexGuard<'_, Queue> {
        // The queue is consistent between calls, so a panic elsewhere doesn't spoil it.
        self.queue.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
    }
}

/// One receiver's task.
struct Delivering {
    lane: usize,
    sender: Sender,
    zone: Tz,
    clock: Clock,
    shared: Arc<Shared>,
    outcomes: mpsc::Sender<Outcome>,
}

impl Delivering {
    async fn run(self, mut stopping: watch::Receiver<()>) {
        loop {
            let (notice, body) = tokio::select! {
                biased;
                _ = stopping.changed() => return,
                // Nobody commits outcomes any more.
                () = self.outcomes.closed() => return,
                next = self.next() => next,
            };
            let body = body.unwrap_or_else(|| self.sender.render(&notice, self.zone));
            let answer = tokio::select! {
                answer = self.sender.deliver(&notice, body.clone(), &self.clock) => answer,
                answer = self.out_of_time(&mut stopping) => answer,
            };
            if let Some(outcome) = self.take_in(&notice, &answer, body)
                && self.outcomes.send(outcome).await.is_err()
            {
                return;
            }
        }
    }

    /// Waits until something may be sent.
    async fn next(&self) -> (Notice, Option<Vec<u8>>) {
        let bell = &self.shared.bells[self.lane];
        loop {
            let taken = self.shared.lock().take(self.lane, self.clock.now().mono);
            match taken {
                Ok(due) => return due,
                Err(Hold::Nothing) => bell.notified().await,
                Err(Hold::Until(due)) => tokio::select! {
                    () = bell.notified() => {}
                    () = self.clock.sleep_until(due) => {}
                },
            }
        }
    }

    /// The answer of an attempt that the stop has cut short: the receiver may have it or not, so it is sent again.
    async fn out_of_time(&self, stopping: &mut watch::Receiver<()>) -> Answer {
        // Nothing is ever sent on it: it changes by closing.
        let _ = stopping.changed().await;
        self.clock.sleep(LAST_ANSWER).await;
        let said = "railtide was stopped before the receiver answered".to_owned();
        Answer { verdict: Verdict::Later { retry_after: None }, said }
    }

    fn take_in(&self, notice: &Notice, answer: &Answer, body: Vec<u8>) -> Option<Outcome> {
        let now = self.clock.now();
        let (outcome, failures) = self.shared.lock().answered(self.lane, answer, body, now, jitter())?;
        let (receiver, said) = (&notice.receiver, &answer.said);
        match outcome.delivery {
            Delivery::GivenUp { .. } => {
                tracing::error!("gave up the notice of {} to {receiver}: {said}", notice.key);
            }
            // The first of a row is worth a line; the others only repeat it.
            Delivery::Waiting if failures == 1 => {
                tracing::warn!("receiver {receiver} cannot be reached, trying again: {said}");
            }
            Delivery::Waiting => tracing::debug!("receiver {receiver}, failure {failures}: {said}"),
            Delivery::Delivered { .. } => {
                tracing::info!("{receiver} has the notice of {}, attempt {}", notice.key, outcome.attempts);
            }
        }
        Some(outcome)
    }
}

/// A random number in [0, 1).
fn jitter() -> f64 {
    // Without the system's randomness every sender waits the nominal time, which is no worse than no jitter.
    getrandom::u32().map_or(0.5, |bits| f64::from(bits) / (f64::from(u32::MAX) + 1.0))
}

async fn report_let_go(
    shared: Arc<Shared>,
    outcomes: mpsc::Sender<Outcome>,
    mut stopping: watch::Receiver<()>,
) {
    loop {
        let mut let_go = 0_u64;
        while let Some(outcome) = { shared.lock().next_let_go() } {
            if let_go == 0 {
                tracing::error!("gave up notice {} without an attempt: {}", outcome.notice_id, outcome.said);
            }
            let_go += 1;
            if outcomes.send(outcome).await.is_err() {
                return;
            }
        }
        if let_go > 1 {
            tracing::error!("gave up {} more notices without an attempt", let_go - 1);
        }
        tokio::select! {
            biased;
            () = shared.let_go.notified() => {}
            _ = stopping.changed() => return,
        }
    }
}
