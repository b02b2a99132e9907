//! The tide table as the daemon makes it: at each interval's end, from the record.

use std::time::Duration;

use chrono_tz::Tz;

use crate::config::Site;
use crate::mains::{HISTORY, INTERVAL, Interval, NoForecast, TideTable, forecast};
use crate::quantity::{Moment, Utc};
use crate::store::{Store, StoreError};
use crate::watch::{LOOK_AHEAD, mains_channel};

/// When the next table is due, and what it's made of.
#[derive(Debug)]
pub(super) struct Outlook {
    mains: Option<String>,
    zone: Tz,
    /// How long after an interval's end its last readings are in the record.
    grace: Duration,
    /// The interval's end that the last table was made at.
    made_at: Option<Utc>,
}

impl Outlook {
    pub(super) fn new(site: &Site) -> Self {
        let mains = mains_channel(site).and_then(|i| site.channels().nth(i));
        let mains = mains.map(|(_, channel)| channel.name.clone());
        Outlook { mains, zone: site.time_zone, grace: site.store.commit_every, made_at: None }
    }

    /// A table where one is due at `now` (in the record's own time), or why there is none.
    pub(super) fn turn(
        &mut self,
        store: &Store,
        now: Moment,
    ) -> Option<Result<Result<TideTable, NoForecast>, StoreError>> {
        let end = Interval::start_of(Utc(now.utc.0 - self.grace.as_millis() as i64), INTERVAL);
        if self.made_at == Some(end) {
            return None;
        }
        self.made_at = Some(end);
        let name = self.mains.as_deref()?;
        Some(known(store, name, end).map(|intervals| forecast(&intervals, end, LOOK_AHEAD, self.zone)))
    }
}

/// What the record knows of a channel before `end`, as far back as a forecast looks.
fn known(store: &Store, channel: &str, end: Utc) -> Result<Vec<Interval>, StoreError> {
    let channels = store.channels()?;
    let Some(channel) = channels.iter().find(|c| c.name == channel) else { return Ok(Vec::new()) };
    store.intervals(channel.id, Utc(end.0 - HISTORY.as_millis() as i64), end)
}
