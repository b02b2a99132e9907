//! The signals that stop a long-running command in an orderly way.

use tokio::signal::unix::{SignalKind, signal};

/// Waits for SIGINT or SIGTERM.
pub(super) async fn asked_to_stop() {
    let (Ok(mut interrupt), Ok(mut terminate)) =
        (signal(SignalKind::interrupt()), signal(SignalKind::terminate()))
    else {
        // Without a handler the signal itself ends the process, as it would any other.
        return std::future::pending().await;
    };
    tokio::select! {
        _ = interrupt.recv() => {}
        _ = terminate.recv() => {}
    }
}
