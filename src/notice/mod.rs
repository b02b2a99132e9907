//! Delivers notices to receivers, whatever the network and the receivers do.
//!
//! The daemon's core writes a notice into the record's outbox and hands it to the [`WorkerHandle`]; where the record
//! can't be written it hands it over all the same, marked `recorded: false`. The worker keeps what waits in bounded
//! memory, makes one attempt at a time for each receiver, most urgent first, and reports an
//! [`Outcome`](crate::alarm::Outcome) for every attempt, which the core commits. The worker never touches the record,
//! so a slow receiver can't hold it. A notice is rendered at its first attempt; every later one, also after a
//! restart, sends the same bytes with the same idempotency key.
//!
//! A kind of receiver is one file beside `webhook.rs` and one variant in `route.rs`.

mod answer;
mod backoff;
mod json;
mod lane;
mod queue;
mod route;
mod secret;
mod webhook;
mod worker;

pub use lane::ReceiverStatus;
pub use secret::SecretError;
pub use worker::{CAPACITY, Waiting, Worker, WorkerHandle};

/// Why the worker can't start; the owner can mend each.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum NoticeError {
    /// A receiver's URL is none, or neither `http` nor `https`. It isn't shown, for it may hold a secret.
    #[error("the webhook of receiver \"{receiver}\" is {found}; write it as https://host/path")]
    Url {
        /// The receiver's name.
        receiver: String,
        /// What is wrong with it.
        found: &'static str,
    },
    /// A receiver's secret can't be had.
    #[error("receiver \"{receiver}\" cannot be used: {cause}")]
    Secret {
        /// The receiver's name.
        receiver: String,
        /// Why.
        cause: SecretError,
    },
    /// A token holds what an HTTP header can't.
    #[error(
        "the token of receiver \"{receiver}\" holds characters that an HTTP header cannot; copy it again"
    )]
    TokenCharacters {
        /// The receiver's name.
        receiver: String,
    },
    /// The HTTP client can't be built, most likely because the system has no CA certificates.
    #[error(
        "receiver \"{receiver}\" cannot be reached over TLS: {cause}; install the system's CA certificates"
    )]
    Client {
        /// The receiver's name.
        receiver: String,
        /// What the library said.
        cause: String,
    },
}
