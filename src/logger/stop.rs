//! The flag that ends this room's threads.

use std::sync::{Condvar, Mutex};
use std::time::Duration;

/// Tells threads to end, and wakes them if they wait for it.
#[derive(Debug, Default)]
pub(super) struct Stop {
    stopped: Mutex<bool>,
    bell: Condvar,
}

impl Stop {
    pub(super) fn stop(&self) {
        *self.stopped.lock().unwrap_or_else(|poisoned| poisoned.into_inner()) = true;
        self.bell.notify_all();
    }

    pub(super) fn is_stopped(&self) -> bool {
        self.wait(Duration::ZERO)
    }

    /// Waits up to `span` for the stop; whether it came.
    pub(super) fn wait(&self, span: Duration) -> bool {
        let stopped = self.stopped.lock().unwrap_or_else(|poisoned| poisoned.into_inner());
        if *stopped || span.is_zero() {
            return *stopped;
        }
        let (stopped, _) = self
            .bell
            .wait_timeout_while(stopped, span, |stopped| !*stopped)
            .unwrap_or_else(|poisoned| poisoned.into_inner());
        *stopped
    }
}
