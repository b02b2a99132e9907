//! The only place that reads a clock.
//!
//! Monotonic time drives every delay, back-off and silence; UTC only labels. A [`Clock`] is handed to whoever needs
//! one, so that a test or a replay can drive a whole day through the program in a moment: [`SimulatedClock`] stands
//! still until it is told to move.

mod time_base;
mod trust;

pub use time_base::{ClockStep, TimeBase};
pub use trust::{Known, Trust, synchronised};

use std::collections::BTreeMap;
use std::sync::{Arc, Mutex, MutexGuard};
use std::time::{Duration, Instant, SystemTime, UNIX_EPOCH};

use tokio::sync::oneshot;

use crate::quantity::{Moment, Mono, Utc};

/// A source of time; cheap to clone.
#[derive(Clone, Debug)]
pub enum Clock {
    /// The machine's own.
    System(SystemClock),
    /// One that a test or a replay moves by hand.
    Simulated(SimulatedClock),
}

impl Clock {
    /// The machine's clock, its monotonic time counted from now.
    pub fn system() -> Self {
        Clock::System(SystemClock { start: Instant::now() })
    }

    /// A clock that stands at `start` until it is moved.
    pub fn simulated(start: Utc) -> (Self, SimulatedClock) {
        let clock = SimulatedClock::new(start);
        (Clock::Simulated(clock.clone()), clock)
    }

    /// Both times, now.
    pub fn now(&self) -> Moment {
        match self {
            Clock::System(c) => c.now(),
            Clock::Simulated(c) => c.now(),
        }
    }

    /// Whether the system's time service has set this clock; `None` where nothing tells, as for a simulated one.
    pub fn synchronised(&self) -> Option<bool> {
        match self {
            Clock::System(_) => synchronised(std::path::Path::new("/")),
            Clock::Simulated(_) => None,
        }
    }

    /// Waits until the monotonic time has reached `until`; at once if it has already.
    pub async fn sleep_until(&self, until: Mono) {
        match self {
            Clock::System(c) => {
                tokio::time::sleep_until((c.start + Duration::from_millis(until.0)).into()).await;
            }
            Clock::Simulated(c) => c.sleep_until(until).await,
        }
    }

    /// Waits for `span` of monotonic time.
    pub async fn sleep(&self, span: Duration) {
        self.sleep_until(self.now().mono + span).await;
    }
}

/// The machine's clock.
#[derive(Clone, Copy, Debug)]
pub struct SystemClock {
    start: Instant,
}

impl SystemClock {
    fn now(&self) -> Moment {
        let utc = match SystemTime::now().duration_since(UNIX_EPOCH) {
            Ok(since) => since.as_millis() as i64,
            // A board without a battery clock may start before 1970.
            Err(before) => -(before.duration().as_millis() as i64),
        };
        Moment { mono: Mono(self.start.elapsed().as_millis() as u64), utc: Utc(utc) }
    }
}

/// A clock that stands still until [`advance`](Self::advance) or [`step_utc`](Self::step_utc) moves it; clones share
/// one time.
#[derive(Clone, Debug)]
pub struct SimulatedClock {
    state: Arc<Mutex<SimulatedState>>,
}

#[derive(Debug)]
struct SimulatedState {
    now: Moment,
    next_sleeper: u64,
    sleepers: BTreeMap<(Mono, u64), oneshot::Sender<()>>,
}

impl SimulatedClock {
    /// Stands at `start`, monotonic zero.
    pub fn new(start: Utc) -> Self {
        let now = Moment { mono: Mono(0), utc: start };
        let state = SimulatedState { now, next_sleeper: 0, sleepers: BTreeMap::new() };
        SimulatedClock { state: Arc::new(Mutex::new(state)) }
    }

    /// Both times, now.
    pub fn now(&self) -> Moment {
        self.lock().now
    }

    /// Moves both times on by `span` and wakes whoever slept until then, in the order of their times.
    pub fn advance(&self, span: Duration) {
        let mut state = self.lock();
        state.now.mono = state.now.mono + span;
        state.now.utc = state.now.utc + span;
        let first_later = (Mono(state.now.mono.0 + 1), 0);
        let later = state.sleepers.split_off(&first_later);
        for (_, sleeper) in std::mem::replace(&mut state.sleepers, later) {
            // A sleeper that was dropped no longer listens; that's no fault.
            let _ = sleeper.send(());
        }
    }

    /// Steps the UTC label alone, as a host's clock does when it is set; `by_ms` may be negative.
    pub fn step_utc(&self, by_ms: i64) {
        let mut state = self.lock();
        state.now.utc = Utc(state.now.utc.0 + by_ms);
    }

    /// The earliest monotonic time that anyone waits for: how far a replay may move without skipping a wake-up.
    pub fn next_wake(&self) -> Option<Mono> {
        let mut state = self.lock();
        state.sleepers.retain(|_, sleeper| !sleeper.is_closed());
        state.sleepers.keys().next().map(|(until, _)| *until)
    }

    async fn sleep_until(&self, until: Mono) {
        let woken = {
            let mut state = self.lock();
            if state.now.mono >= until {
                return;
            }
            let (wake, woken) = oneshot::channel();
            let id = state.next_sleeper;
            state.next_sleeper += 1;
            state.sleepers.insert((until, id), wake);
            woken
        };
        // The sender lives in the shared state, which outlives this future; an error can't mean "time reached".
        if woken.await.is_err() {
            std::future::pending::<()>().await;
        }
    }

    fn lock(&self) -> MutexGuard<'_, SimulatedState> {
        // The state is consistent between statements, so a panic elsewhere doesn't spoil it.
        self.state.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test]
    async fn a_simulated_sleeper_wakes_exactly_when_its_time_is_reached() {
        let (clock, hand) = Clock::simulated(Utc(1_000_000));
        let sleeper = tokio::spawn({
            let clock = clock.clone();
            async move {
                clock.sleep(Duration::from_secs(10)).await;
                clock.now()
            }
        });
        while hand.next_wake().is_none() {
            tokio::task::yield_now().await;
        }
        hand.advance(Duration::from_millis(9_999));
        assert_eq!(hand.next_wake(), Some(Mono(10_000)));
        hand.advance(Duration::from_millis(1));
        assert_eq!(sleeper.await.unwrap(), Moment { mono: Mono(10_000), utc: Utc(1_010_000) });
    }

    #[test]
    fn a_step_of_utc_leaves_monotonic_time_alone() {
        let hand = SimulatedClock::new(Utc(5_000));
        hand.step_utc(-4_000);
        assert_eq!(hand.now(), Moment { mono: Mono(0), utc: Utc(1_000) });
    }
}
