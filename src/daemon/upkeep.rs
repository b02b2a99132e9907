//! The record's upkeep: hours that are due are closed, hours that are too old let go; a little at each turn, so that no
//! reading waits for it.

use std::time::Duration;

use crate::quantity::{Moment, Mono, Utc};
use crate::store::{Store, StoreError};

/// How often it's looked whether an hour is due, once there was none.
const LOOK_EVERY: Duration = Duration::from_secs(10);
/// After a failure the next look is taken no sooner than this.
const AFTER_FAILURE: Duration = Duration::from_secs(60);

/// When to look next, and how long readings are kept.
#[derive(Debug)]
pub(super) struct Upkeep {
    look_at: Mono,
    keep: Option<Duration>,
}

impl Upkeep {
    /// Looks first at `start`; `keep` is how long readings are kept, for ever where there is none.
    pub(super) fn new(start: Mono, keep: Option<Duration>) -> Self {
        Upkeep { look_at: start, keep }
    }

    /// One short piece of work, if any is due.
    pub(super) fn turn(&mut self, store: &mut Store, now: Moment) -> Result<(), StoreError> {
        if now.mono < self.look_at {
            return Ok(());
        }
        self.look_at = now.mono + AFTER_FAILURE;
        let more = store.close_next_hour(now.utc)? || self.drop_old(store, now.utc)?;
        self.look_at = if more { now.mono } else { now.mono + LOOK_EVERY };
        Ok(())
    }

    fn drop_old(&self, store: &mut Store, now: Utc) -> Result<bool, StoreError> {
        match self.keep {
            Some(keep) => store.drop_hours_before(Utc(now.0 - keep.as_millis() as i64)),
            None => Ok(false),
        }
    }
}
