//! One commit: everything that happened since the last one, whole or not at all.

use rusqlite::{Connection, OptionalExtension, TransactionBehavior, params};

use super::columns::{key, quality, to_json, to_word};
use super::error::StoreError;
use super::open::Store;
use super::requests::Answer;
use crate::alarm::{AlarmRecord, Delivery, JournalEntry, Notice, Outcome};
use crate::quantity::{Millivolts, Mono, Utc};
use crate::reading::{ChannelId, Quality, Reading};

/// What one commit takes. The caller keeps it until [`Store::commit`] has succeeded.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Batch {
    /// Readings, in any order.
    pub readings: Vec<Reading>,
    /// Readings whose time isn't known yet.
    pub waiting: Vec<WaitingReading>,
    /// Runs whose time has become known: what they left waiting (this batch included) becomes readings.
    pub placed: Vec<PlacedSession>,
    /// Alarms that changed, as they stand now.
    pub alarms: Vec<AlarmRecord>,
    /// New journal entries, in ascending order of their numbers.
    pub journal: Vec<JournalEntry>,
    /// New notices.
    pub notices: Vec<Notice>,
    /// What came of deliveries, of this batch's notices too. One for a notice that isn't in the outbox changes nothing.
    pub outcomes: Vec<Outcome>,
    /// Answers to requests, by the request's number.
    pub answers: Vec<(u64, Answer)>,
}

impl Batch {
    /// Whether there is nothing to commit.
    pub fn is_empty(&self) -> bool {
        self.readings.is_empty()
            && self.waiting.is_empty()
            && self.placed.is_empty()
            && self.alarms.is_empty()
            && self.journal.is_empty()
            && self.notices.is_empty()
            && self.outcomes.is_empty()
            && self.answers.is_empty()
    }
}

/// A reading from before the host's clock could be trusted.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct WaitingReading {
    /// A number for the run that took it, different in each run.
    pub session: u32,
    /// When, on that run's monotonic clock.
    pub mono: Mono,
    /// Whose.
    pub channel: ChannelId,
    /// How much.
    pub value: Millivolts,
    /// How far to trust it.
    pub quality: Quality,
}

/// The time base of a run, known at last.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct PlacedSession {
    /// The run.
    pub session: u32,
    /// UTC when its monotonic clock stood at zero.
    pub utc_of_zero: Utc,
    /// Whether that is sure: then what was flagged for its time alone is good.
    pub sure: bool,
}

/// What the record has met in its life that it could not simply keep.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Tallies {
    /// Readings that claimed a channel and millisecond already taken by a different value or quality.
    pub differing_duplicates: u64,
    /// Readings from before the time up to which readings have been dropped.
    pub too_old: u64,
}

pub(super) const DIFFERING: &str = "differing_duplicates";
const TOO_OLD: &str = "too_old";
/// Readings before this time, ms, have been dropped; their intervals stay as they are.
pub(super) const FROZEN_BEFORE: &str = "frozen_before_ms";

impl Store {
    /// Commits `batch` in one transaction. After an error nothing of it is stored, and the same batch can be committed
    /// again.
    pub fn commit(&mut self, batch: &Batch) -> Result<(), StoreError> {
        write(&mut self.conn, batch).map_err(|e| self.fault(e))
    }

    /// What has been met over the database's life that could not simply be kept.
    pub fn tallies(&self) -> Result<Tallies, StoreError> {
        let read = || {
            Ok(Tallies {
                differing_duplicates: number(&self.conn, DIFFERING)?.unwrap_or(0) as u64,
                too_old: number(&self.conn, TOO_OLD)?.unwrap_or(0) as u64,
            })
        };
        read().map_err(|e| self.fault(e))
    }
}

fn write(conn: &mut Connection, batch: &Batch) -> rusqlite::Result<()> {
    // Immediate: a transaction that began by reading could not wait for another writer.
    let tx = conn.transaction_with_behavior(TransactionBehavior::Immediate)?;
    let mut tallies = Tallies::default();
    let frozen_before = Utc(number(&tx, FROZEN_BEFORE)?.unwrap_or(i64::MIN));
    for waiting in &batch.waiting {
        add_waiting(&tx, waiting)?;
    }
    for placed in &batch.placed {
        for reading in take_placed(&tx, placed)? {
            add_reading(&tx, &reading, frozen_before, &mut tallies)?;
        }
    }
    for reading in &batch.readings {
        add_reading(&tx, reading, frozen_before, &mut tallies)?;
    }
    for entry in &batch.journal {
        add_entry(&tx, entry)?;
    }
    for alarm in &batch.alarms {
        put_alarm(&tx, alarm)?;
    }
    for notice in &batch.notices {
        add_notice(&tx, notice)?;
    }
    for outcome in &batch.outcomes {
        put_outcome(&tx, outcome)?;
    }
    for (id, answer) in &batch.answers {
        put_answer(&tx, *id, answer)?;
    }
    add_tallies(&tx, tallies)?;
    tx.commit()
}

/// Of two readings for one channel and millisecond the better quality stays, then the higher voltage, so that the
/// order in which they came never matters.
pub(super) fn wins(challenger: (Quality, Millivolts), holder: (Quality, Millivolts)) -> bool {
    (challenger.0, std::cmp::Reverse(challenger.1)) < (holder.0, std::cmp::Reverse(holder.1))
}

fn add_reading(
    tx: &Connection,
    reading: &Reading,
    frozen_before: Utc,
    tallies: &mut Tallies,
) -> rusqlite::Result<()> {
    if reading.at < frozen_before {
        tallies.too_old += 1;
        return Ok(());
    }
    let row = params![key(reading.channel, reading.at), reading.value.0, reading.quality.code()];
    let added = tx
        .prepare_cached("INSERT INTO open (key, mv, quality) VALUES (?1, ?2, ?3) ON CONFLICT DO NOTHING")?
        .execute(row)?;
    if added == 1 {
        return Ok(());
    }
    let holder = tx
        .prepare_cached("SELECT key, mv, quality FROM open WHERE key = ?1")?
        .query_row([key(reading.channel, reading.at)], |row| {
            Ok((quality(row, 2)?, Millivolts(row.get(1)?)))
        })?;
    let challenger = (reading.quality, reading.value);
    if challenger != holder {
        tallies.differing_duplicates += 1;
    }
    if wins(challenger, holder) {
        tx.prepare_cached("UPDATE open SET mv = ?2, quality = ?3 WHERE key = ?1")?.execute(row)?;
    }
    Ok(())
}

fn add_waiting(tx: &Connection, waiting: &WaitingReading) -> rusqlite::Result<()> {
    // A run's monotonic time passes each millisecond once, so a second claim is the same reading committed again.
    tx.prepare_cached(
        "INSERT INTO waiting (session, mono_ms, channel, mv, quality) VALUES (?1, ?2, ?3, ?4, ?5)
         ON CONFLICT DO NOTHING",
    )?
    .execute(params![
        waiting.session,
        waiting.mono.0 as i64,
        waiting.channel.0,
        waiting.value.0,
        waiting.quality.code()
    ])?;
    Ok(())
}

fn take_placed(tx: &Connection, placed: &PlacedSession) -> rusqlite::Result<Vec<Reading>> {
    let readings = tx
        .prepare_cached("SELECT mono_ms, channel, mv, quality FROM waiting WHERE session = ?1")?
        .query_map([placed.session], |row| {
            Ok(Reading {
                at: Utc(placed.utc_of_zero.0 + row.get::<_, i64>(0)?),
                channel: ChannelId(row.get(1)?),
                value: Millivolts(row.get(2)?),
                quality: match quality(row, 3)? {
                    Quality::ClockDoubtful if placed.sure => Quality::Good,
                    other => other,
                },
            })
        })?
        .collect::<rusqlite::Result<Vec<_>>>()?;
    tx.prepare_cached("DELETE FROM waiting WHERE session = ?1")?.execute([placed.session])?;
    Ok(readings)
}

fn add_entry(tx: &Connection, entry: &JournalEntry) -> rusqlite::Result<()> {
    tx.prepare_cached(
        "INSERT INTO journal (seq, at_ms, condition, subject, event, from_state, from_active, to_state, to_active,
                              priority, done_by, facts)
         VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12)",
    )?
    .execute(params![
        entry.seq as i64,
        entry.at.0,
        entry.key.condition,
        entry.key.subject,
        to_word(&entry.event)?,
        entry.from.word(),
        entry.from.is_active(),
        entry.to.word(),
        entry.to.is_active(),
        entry.priority.word(),
        entry.by,
        to_json(&entry.facts)?,
    ])?;
    Ok(())
}

fn put_alarm(tx: &Connection, alarm: &AlarmRecord) -> rusqlite::Result<()> {
    tx.prepare_cached(
        "INSERT OR REPLACE INTO alarm (condition, subject, state, active, priority, since_ms, raised_at_ms,
                                       shelved_until_ms, last_seq, facts)
         VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10)",
    )?
    .execute(params![
        alarm.key.condition,
        alarm.key.subject,
        alarm.state.word(),
        alarm.state.is_active(),
        alarm.priority.word(),
        alarm.since.0,
        alarm.raised_at.map(|at| at.0),
        alarm.shelved_until.map(|at| at.0),
        alarm.last_seq as i64,
        to_json(&alarm.facts)?,
    ])?;
    Ok(())
}

fn add_notice(tx: &Connection, notice: &Notice) -> rusqlite::Result<()> {
    tx.prepare_cached(
        "INSERT INTO outbox (id, receiver, kind, priority, at_ms, condition, subject, raised_at_ms, facts, advice,
                             idempotency_key, recorded)
         VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, ?10, ?11, ?12)",
    )?
    .execute(params![
        notice.id as i64,
        notice.receiver,
        to_word(&notice.kind)?,
        notice.priority.word(),
        notice.at.0,
        notice.key.condition,
        notice.key.subject,
        notice.raised_at.0,
        to_json(&notice.facts)?,
        notice.advice,
        notice.idempotency_key,
        notice.recorded,
    ])?;
    Ok(())
}

fn put_outcome(tx: &Connection, outcome: &Outcome) -> rusqlite::Result<()> {
    let (state, settled_at) = match &outcome.delivery {
        Delivery::Waiting => ("waiting", None),
        Delivery::Delivered { at } => ("delivered", Some(at.0)),
        Delivery::GivenUp { at } => ("given_up", Some(at.0)),
    };
    tx.prepare_cached(
        "UPDATE outbox SET state = ?2, settled_at_ms = ?3, attempts = ?4, said = ?5, body = ?6 WHERE id = ?1",
    )?
    .execute(params![
        outcome.notice_id as i64,
        state,
        settled_at,
        outcome.attempts,
        outcome.said,
        outcome.body
    ])?;
    Ok(())
}

fn put_answer(tx: &Connection, id: u64, answer: &Answer) -> rusqlite::Result<()> {
    tx.prepare_cached("UPDATE request SET done_at_ms = ?2, answer = ?3 WHERE id = ?1")?.execute(params![
        id as i64,
        answer.done_at.0,
        to_json(answer)?
    ])?;
    Ok(())
}

fn add_tallies(tx: &Connection, tallies: Tallies) -> rusqlite::Result<()> {
    for (key, more) in [(DIFFERING, tallies.differing_duplicates), (TOO_OLD, tallies.too_old)] {
        if more > 0 {
            put_number(tx, key, number(tx, key)?.unwrap_or(0) + more as i64)?;
        }
    }
    Ok(())
}

/// A number kept in `meta`.
pub(super) fn number(conn: &Connection, key: &str) -> rusqlite::Result<Option<i64>> {
    conn.prepare_cached("SELECT CAST(value AS INTEGER) FROM meta WHERE key = ?1")?
        .query_row([key], |row| row.get(0))
        .optional()
}

/// Puts a number into `meta`.
pub(super) fn put_number(conn: &Connection, key: &str, value: i64) -> rusqlite::Result<()> {
    conn.prepare_cached("INSERT OR REPLACE INTO meta (key, value) VALUES (?1, CAST(?2 AS TEXT))")?
        .execute(params![key, value])?;
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_better_quality_wins_then_the_higher_voltage() {
        let good = |mv| (Quality::Good, Millivolts(mv));
        let stuck = |mv| (Quality::Stuck, Millivolts(mv));
        assert!(wins(good(229_000), stuck(240_000)));
        assert!(!wins(stuck(240_000), good(229_000)));
        assert!(wins(good(230_000), good(229_000)));
        assert!(!wins(good(229_000), good(229_000)), "the same again changes nothing");
    }
}
