//! The record's upkeep: hours that are due are closed, hours that are too old let go; a little at each turn, so that no
//! reading waits for it.

use std::path::Path;
use std::time::Duration;

use crate::alarm::RoomFigures;
use crate::quantity::{Moment, Mono, Utc};
use crate::store::{Store, StoreError};

/// How often it's looked whether an hour is due, once there was none.
const LOOK_EVERY: Duration = Duration::from_secs(10);
/// After a failure the next look is taken no sooner than this.
const AFTER_FAILURE: Duration = Duration::from_secs(60);

/// How often the room on the record's disk is looked at.
const LOOK_AT_ROOM_EVERY: Duration = Duration::from_secs(600);

/// When to look next, and how long readings are kept.
#[derive(Debug)]
pub(super) struct Upkeep {
    look_at: Mono,
    look_at_room: Mono,
    keep: Option<Duration>,
}

impl Upkeep {
    /// Looks first at `start`; `keep` is how long readings are kept, for ever where there is none.
    pub(super) fn new(start: Mono, keep: Option<Duration>) -> Self {
        Upkeep { look_at: start, look_at_room: start, keep }
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

    /// The room for the record, when it's time to look again; `None` too where the system doesn't tell.
    pub(super) fn room(&mut self, store: &Store, now: Moment) -> Result<Option<RoomFigures>, StoreError> {
        if now.mono < self.look_at_room {
            return Ok(None);
        }
        self.look_at_room = now.mono + LOOK_AT_ROOM_EVERY;
        let Some(free_bytes) = free_bytes(store.path()) else { return Ok(None) };
        // A record that lets as much go as it takes has stopped growing.
        let steady = self.keep.is_some() && store.lets_go()?;
        let bytes_per_day = if steady { Some(0.0) } else { store.bytes_per_day(now.utc)? };
        Ok(Some(RoomFigures { free_bytes, bytes_per_day }))
    }

    fn drop_old(&self, store: &mut Store, now: Utc) -> Result<bool, StoreError> {
        match self.keep {
            Some(keep) => store.drop_hours_before(Utc(now.0 - keep.as_millis() as i64)),
            None => Ok(false),
        }
    }
}

/// Bytes that the file system of `path` has free for us.
fn free_bytes(path: &Path) -> Option<u64> {
    let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."));
    let disk = nix::sys::statvfs::statvfs(folder).ok()?;
    #[allow(clippy::unnecessary_cast, reason = "their widths differ between systems")]
    Some(disk.blocks_available() as u64 * disk.fragment_size() as u64)
}
