//! What has been decided but isn't in the record yet: kept in bounded memory until a commit succeeds.

use crate::alarm::{Notice, Outcome};
use crate::store::{Answer, Batch, PlacedSession, Store, StoreError, WaitingReading};
use crate::watch::Decided;

/// More readings than this are not held: two channels at 1 Hz for about two and a half days (24 bytes each).
const MOST_READINGS: usize = 500_000;

/// The batch in waiting.
#[derive(Debug, Default)]
pub(super) struct Held {
    batch: Batch,
    let_go: u64,
}

impl Held {
    /// Adds what a step decided.
    pub(super) fn add(&mut self, decided: Decided) {
        self.batch.readings.extend(decided.readings);
        self.batch.alarms.extend(decided.alarms);
        self.batch.journal.extend(decided.journal);
        self.batch.notices.extend(decided.notices);
        let excess = self.batch.readings.len().saturating_sub(MOST_READINGS);
        if excess > 0 {
            // A tenth more than must go, so that a full house isn't moved up by one for every new reading.
            let go = (excess + MOST_READINGS / 10).min(self.batch.readings.len());
            self.batch.readings.drain(..go);
            self.let_go += go as u64;
        }
    }

    /// Adds readings whose time isn't known yet.
    pub(super) fn add_waiting(&mut self, waiting: Vec<WaitingReading>) {
        self.batch.waiting.extend(waiting);
        let excess = self.batch.waiting.len().saturating_sub(MOST_READINGS);
        self.batch.waiting.drain(..excess);
        self.let_go += excess as u64;
    }

    /// Adds runs whose time has become known.
    pub(super) fn add_placed(&mut self, placed: impl IntoIterator<Item = PlacedSession>) {
        self.batch.placed.extend(placed);
    }

    /// Adds what came of a delivery.
    pub(super) fn add_outcome(&mut self, outcome: Outcome) {
        self.batch.outcomes.push(outcome);
    }

    /// Adds the answer to a request.
    pub(super) fn add_answer(&mut self, request: u64, answer: Answer) {
        self.batch.answers.push((request, answer));
    }

    /// Marks what is held of these notices as gone out from memory, so that the record will say so.
    pub(super) fn mark_not_recorded(&mut self, notices: &[Notice]) {
        for held in &mut self.batch.notices {
            if notices.iter().any(|n| n.id == held.id) {
                held.recorded = false;
            }
        }
    }

    /// How many readings wait.
    pub(super) fn readings(&self) -> usize {
        self.batch.readings.len() + self.batch.waiting.len()
    }

    /// How many readings had to be let go since the last commit that worked.
    pub(super) fn let_go(&self) -> u64 {
        self.let_go
    }

    /// Whether there's nothing to commit.
    pub(super) fn is_empty(&self) -> bool {
        self.batch.is_empty()
    }

    /// Commits everything in one transaction and forgets it; on failure everything is still held.
    pub(super) fn commit(&mut self, store: &mut Store) -> Result<(), StoreError> {
        store.commit(&self.batch)?;
        self.batch = Batch::default();
        self.let_go = 0;
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::{Millivolts, Utc};
    use crate::reading::{ChannelId, Quality, Reading};

    #[test]
    fn memory_is_bounded_and_what_is_let_go_is_the_oldest_and_counted() {
        let mut held = Held::default();
        let total = MOST_READINGS + 10;
        for i in 0..total {
            let reading = Reading {
                channel: ChannelId(1),
                at: Utc(i as i64),
                value: Millivolts(230_000),
                quality: Quality::Good,
            };
            held.add(Decided { readings: vec![reading], ..Decided::default() });
        }
        assert!(held.readings() <= MOST_READINGS);
        assert_eq!(held.readings() as u64 + held.let_go(), total as u64);
        assert_eq!(held.batch.readings.last().unwrap().at, Utc(total as i64 - 1));
    }
}
