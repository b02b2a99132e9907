//! A request with no daemon running: the command holds the lock and does what the daemon would.

use crate::alarm::Request;
use crate::clock::Clock;
use crate::config::Site;
use crate::store::{Batch, Lock, OpenOptions, Store, StoreError};
use crate::watch::{Answer, Watch};

/// Applies one request through [`Watch`] and commits it. Its notices wait in the outbox for the next run.
pub fn apply_alone(site: &Site, _lock: &Lock, clock: Clock, request: &Request) -> Result<Answer, StoreError> {
    let mut store = Store::open(&site.store.path, &OpenOptions::default())?;
    let ids = store.register_channels(&super::channel_specs(site))?;
    let now = clock.now();
    let projectors = super::projectors(site, &store)?;
    let mut watch = Watch::new(site, &ids, &projectors, super::remembered(&store)?.0, now);
    let (decided, answer) = watch.request(request, now);
    store.commit(&Batch {
        alarms: decided.alarms,
        journal: decided.journal,
        notices: decided.notices,
        ..Batch::default()
    })?;
    Ok(answer)
}
