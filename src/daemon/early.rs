//! Readings of a run whose host has no right time yet: they wait in the record by their monotonic time, and get their
//! place once the clock can be believed. Alarms work meanwhile.

use crate::clock::{Clock, Known, TimeBase, Trust};
use crate::quantity::{Mono, Utc};
use crate::reading::Reading;
use crate::store::{PlacedSession, Restored, WaitingReading};

/// The waiting of one run.
#[derive(Debug)]
pub(super) struct Early {
    session: u32,
    trust: Trust,
}

impl Early {
    /// At the start of a run; what earlier runs left waiting gets its place now, after the newest stored reading and
    /// flagged, since nobody will ever know better.
    pub(super) fn begin(clock: &Clock, time: &TimeBase, restored: &Restored) -> (Self, Vec<PlacedSession>) {
        let session = restored.left_waiting.iter().map(|(session, _)| session + 1).max().unwrap_or(1);
        let after = restored.newest.map_or(0, |newest| newest.0 + 1);
        let placed = restored
            .left_waiting
            .iter()
            .map(|(session, first)| PlacedSession {
                session: *session,
                utc_of_zero: Utc(after - first.0 as i64),
                sure: false,
            })
            .collect();
        let early = Early { session, trust: Trust::begin(time, clock.synchronised(), clock.now().mono) };
        if early.trust.is_waiting() {
            tracing::warn!(
                "the host's clock has not been set yet: readings wait for their time, alarms work"
            );
        }
        (early, placed)
    }

    /// Takes the readings that must wait out of `readings`.
    pub(super) fn hold_back(&self, time: &TimeBase, readings: &mut Vec<Reading>) -> Vec<WaitingReading> {
        if !self.trust.is_waiting() {
            return Vec::new();
        }
        readings
            .drain(..)
            .map(|reading| WaitingReading {
                session: self.session,
                mono: time.mono(reading.at),
                channel: reading.channel,
                value: reading.value,
                quality: reading.quality,
            })
            .collect()
    }

    /// Looks at the clock again; this run's place, once that is known.
    pub(super) fn look(&mut self, clock: &Clock, time: &TimeBase) -> Option<PlacedSession> {
        if !self.trust.is_waiting() {
            return None;
        }
        let known = self.trust.look(time, clock.synchronised(), clock.now().mono)?;
        match known {
            Known::Set => tracing::info!("the host's clock is set: what waited has its time now"),
            Known::GivenUp => {
                tracing::warn!("nobody has set the host's clock: readings are kept by it as it is, flagged")
            }
        }
        Some(PlacedSession {
            session: self.session,
            utc_of_zero: time.utc(Mono(0)),
            sure: known == Known::Set,
        })
    }
}
