//! What every kind of receiver has in common: a notice is rendered to bytes once, the bytes are delivered, and the
//! receiver's answer is judged. A new kind is one file with these two functions and one variant here.

use chrono_tz::Tz;

use super::answer::Answer;
use super::webhook::Webhook;
use super::{NoticeError, json};
use crate::alarm::Notice;
use crate::clock::Clock;
use crate::config::{Receiver, Route};

/// One receiver, ready to be sent to.
pub(super) enum Sender {
    Webhook(Webhook),
}

impl Sender {
    /// Prepares the way to `receiver` (reads its secret, builds its client); contacts nobody.
    pub(super) fn to(receiver: &Receiver) -> Result<Self, NoticeError> {
        match &receiver.route {
            Route::Webhook { url, token } => {
                Webhook::new(&receiver.name, url, token.as_ref()).map(Sender::Webhook)
            }
        }
    }

    /// The bytes of `notice`: the same for the same notice and zone, whenever and however often it is called.
    pub(super) fn render(&self, notice: &Notice, zone: Tz) -> Vec<u8> {
        match self {
            Sender::Webhook(_) => json::render(notice, zone),
        }
    }

    /// One attempt, bounded in time and memory.
    pub(super) async fn deliver(&self, notice: &Notice, body: Vec<u8>, clock: &Clock) -> Answer {
        match self {
            Sender::Webhook(webhook) => webhook.deliver(&notice.idempotency_key, body, clock).await,
        }
    }
}
