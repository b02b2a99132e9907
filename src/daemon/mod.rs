//! The daemon: starts the loggers' threads, the notice worker and the walk, joins them, stops them.
//!
//! One task walks every reading through the house (the module `walk`): serial port ─ logger ─▶ time ─▶ watch ─▶ held ─▶ store
//! ─▶ notice. Loggers and the notice worker speak to it over bounded channels and know nothing of one another.

mod alone;
mod early;
mod held;
mod hush;
mod outlook;
mod upkeep;
mod walk;

use std::future::Future;
use std::time::Duration;

use tokio::sync::mpsc;

use crate::clock::{Clock, TimeBase};
use crate::config::{Amplifier, Site};
use crate::logger::{self, PortHandle};
use crate::notice::{NoticeError, Waiting, Worker};
use crate::store::{self, Batch, ChannelSpec, Lock, OpenOptions, Store, StoreError};
use crate::supply::Projector;
use crate::watch::{self, Watch, projecting, valid_fit};

pub use alone::apply_alone;

use early::Early;
use walk::Walk;

/// Delays are looked at this often when no reading comes.
const TICK: Duration = Duration::from_millis(250);

/// Events that may wait for the walk: beyond that a logger's thread waits, and the kernel's buffer takes the rest.
const LOGGER_QUEUE: usize = 4_096;

/// Why the daemon couldn't start.
#[derive(Debug, thiserror::Error)]
pub enum DaemonError {
    /// The record couldn't be opened, or another instance holds it.
    #[error(transparent)]
    Store(#[from] StoreError),
    /// A receiver couldn't be set up.
    #[error(transparent)]
    Notice(#[from] NoticeError),
    /// The system gave no thread for a port.
    #[error("no thread could be started for a logger's port: {0}")]
    Thread(#[from] std::io::Error),
    /// The config names no logger, so there is nothing to read.
    #[error(
        "the config names no [[logger]], so there is nothing to run; add one, or use the commands that need none"
    )]
    NoLogger,
}

/// Runs the site until `shutdown` is ready, then commits what is held and stops everything it started.
///
/// Commits happen on the task that calls this: let a runtime's main task call it, so that a slow card holds up nobody
/// else.
pub async fn run(site: &Site, clock: Clock, shutdown: impl Future<Output = ()>) -> Result<(), DaemonError> {
    if site.loggers.is_empty() {
        return Err(DaemonError::NoLogger);
    }
    let _lock = Lock::take(&site.store.path)?;
    let mut store = Store::open(&site.store.path, &OpenOptions::default())?;
    let ids = store.register_channels(&channel_specs(site))?;
    let (remembered, restored) = remembered(&store)?;
    let now = clock.now();
    let watch = Watch::new(site, &ids, &projectors(site, &store)?, remembered, now);
    let time = TimeBase::new(now, restored.newest);
    let (early, placed) = Early::begin(&clock, &time, &restored);
    store.commit(&Batch { placed, ..Batch::default() })?;

    let (outcome_tx, mut outcomes) = mpsc::channel(64);
    let worker = Worker::spawn(site.receivers.clone(), site.time_zone, clock.clone(), outcome_tx)?;
    worker.send(restored.undelivered.into_iter().map(waiting_again).collect());

    let (event_tx, mut events) = mpsc::channel(LOGGER_QUEUE);
    let ports: Vec<_> = site
        .loggers
        .iter()
        .enumerate()
        .map(|(i, settings)| logger::spawn(i, settings, clock.clone(), event_tx.clone()))
        .collect::<Result<_, _>>()?;
    drop(event_tx);
    tracing::info!(database = %site.store.path.display(), "railtide is watching {}", site.name);

    let mut walk = Walk::new(site, clock.clone(), time, early, watch, store, worker);
    tokio::pin!(shutdown);
    let mut next_tick = now.mono + TICK;
    loop {
        tokio::select! {
            biased;
            () = &mut shutdown => break,
            Some(outcome) = outcomes.recv() => walk.outcome(outcome),
            () = clock.sleep_until(next_tick) => {
                walk.tick();
                next_tick = clock.now().mono + TICK;
            }
            Some(event) = events.recv() => walk.take(event),
        }
    }

    tracing::info!("stopping: committing what is held");
    // A port's thread may be waiting for room in the queue, so it's emptied while they stop.
    let mut stopped = tokio::task::spawn_blocking(move || stop_ports(ports));
    loop {
        tokio::select! {
            Some(event) = events.recv() => walk.take(event),
            _ = &mut stopped => break,
        }
    }
    while let Ok(event) = events.try_recv() {
        walk.take(event);
    }
    let (mut held, mut store, worker) = walk.finish();
    let stopped = worker.stop();
    tokio::pin!(stopped);
    loop {
        tokio::select! {
            biased;
            Some(outcome) = outcomes.recv() => held.add_outcome(outcome),
            () = &mut stopped => break,
        }
    }
    while let Ok(outcome) = outcomes.try_recv() {
        held.add_outcome(outcome);
    }
    if !held.is_empty() {
        held.commit(&mut store)?;
    }
    tracing::info!("stopped");
    Ok(())
}

/// What each amplifier's rails are projected by: its newest fit that holds, its circuit, or its measured pair.
fn projectors(site: &Site, store: &Store) -> Result<Vec<Option<Projector>>, StoreError> {
    let of = |amplifier: &Amplifier| {
        let fits = store.fits(&amplifier.name)?;
        let projecting = projecting(amplifier, valid_fit(amplifier, &fits, site.time_zone));
        if let Some(trouble) = projecting.trouble {
            tracing::warn!("{trouble}");
        }
        Ok(projecting.projector)
    };
    site.amplifiers.iter().map(of).collect()
}

fn stop_ports(ports: Vec<PortHandle>) {
    for port in ports {
        if let Err(hanging) = port.stop() {
            tracing::warn!("{hanging}");
        }
    }
}

/// A notice that an earlier run did not get delivered.
fn waiting_again(undelivered: store::Undelivered) -> Waiting {
    let body = (undelivered.attempts > 0).then_some(undelivered.body);
    Waiting { notice: undelivered.notice, attempts: undelivered.attempts, body }
}

/// What the record remembers, for the watch and for the rest.
fn remembered(store: &Store) -> Result<(watch::Restored, store::Restored), StoreError> {
    let mut restored = store.restore()?;
    let for_watch = watch::Restored {
        alarms: std::mem::take(&mut restored.alarms),
        next_seq: restored.next_seq,
        next_notice_id: restored.next_notice_id,
        database_id: store.database_id()?,
    };
    Ok((for_watch, restored))
}

/// What the record needs to know of every channel, in the order of [`Site::channels`].
pub fn channel_specs(site: &Site) -> Vec<ChannelSpec> {
    site.channels()
        .map(|(_, channel)| ChannelSpec {
            name: channel.name.clone(),
            was: channel.was.clone(),
            quantity: channel.quantity,
            sample_period_ms: channel.sample_period.as_millis() as u32,
            amplifier: channel.rail.as_ref().map(|rail| rail.amplifier.clone()),
            node: channel.rail.as_ref().map(|rail| rail.node.clone()),
        })
        .collect()
}
