//! The signals that stop a long-running command in an orderly way.

use tokio::signal::unix::{Signal, SignalKind, signal};

/// SIGINT and SIGTERM, listened to from the moment this is made.
pub(super) struct Stop {
    interrupt: Signal,
    terminate: Signal,
}

impl Stop {
    /// Starts to listen; must be called within a runtime. Made first thing, so that a signal during a long start
    /// isn't lost on the default of ending the process.
    pub(super) fn listen() -> std::io::Result<Self> {
        Ok(Stop { interrupt: signal(SignalKind::interrupt())?, terminate: signal(SignalKind::terminate())? })
    }

    /// Waits for either.
    pub(super) async fn asked(mut self) {
        tokio::select! {
            _ = self.interrupt.recv() => {}
            _ = self.terminate.recv() => {}
        }
    }
}
