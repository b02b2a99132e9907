//! The record: one SQLite file that holds every reading, the intervals made of them, the alarms and their journal, the
//! outbox, and what commands ask of the daemon.
//!
//! One process, the owner of the [`Lock`], writes live readings and alarms: it opens with [`Store::open`] and hands
//! over a [`Batch`] at a time, each of which is committed whole or not at all. Other processes read
//! ([`Store::open_read_only`]), or add requests and recordings beside the owner ([`Store::open_beside`]). The sequence
//! numbers of journal and outbox are the owner's to give; [`Store::restore`] says where they stand.

mod alarms;
mod batch;
mod block;
mod channels;
mod columns;
mod copy;
mod error;
mod fits;
mod growth;
mod hours;
mod intervals;
mod lock;
mod open;
mod readings;
mod requests;
mod restore;
mod schema;

pub use alarms::{JournalFilter, OutboxEntry};
pub use batch::{Batch, PlacedSession, Tallies, WaitingReading};
pub use channels::{ChannelSpec, StoredChannel};
pub use error::StoreError;
pub use lock::Lock;
pub use open::{OpenOptions, Store};
pub use readings::Readings;
pub use requests::{Answer, PendingRequest};
pub use restore::{Restored, Undelivered};

use open::refuse_missing_folder;
