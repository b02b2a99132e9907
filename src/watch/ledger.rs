//! The alarms of one site: judges every condition of the table, walks the state machine, and writes down what
//! changed as journal entries and notices.

use std::collections::{BTreeMap, BTreeSet};
use std::time::Duration;

use crate::alarm::{
    AlarmKey, AlarmRecord, CONDITIONS, Condition, Delay, Event, Facts, Figures, JournalEntry, Judged, Level,
    Notice, NoticeKind, Priority, State,
};
use crate::config::{AlarmOverride, Site};
use crate::quantity::Moment;

use super::{Decided, Restored};

/// All alarms and the numbers that their journal and notices have reached.
#[derive(Debug)]
pub(super) struct Ledger {
    rows: Vec<Row>,
    receivers: Vec<(String, Priority)>,
    alarms: BTreeMap<AlarmKey, Watched>,
    database_id: String,
    next_seq: u64,
    next_notice_id: u64,
}

/// A row of the table with the config's overrides applied.
#[derive(Clone, Copy)]
struct Row {
    condition: &'static Condition,
    priority: Priority,
    deadband: f64,
    on_delay: Duration,
    off_delay: Duration,
}

impl std::fmt::Debug for Row {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(self.condition.name)
    }
}

#[derive(Debug)]
struct Watched {
    record: AlarmRecord,
    delay: Delay,
}

/// Who and what stands behind a transition.
struct Cause<'a> {
    event: Event,
    facts: Facts,
    by: Option<&'a str>,
}

impl Ledger {
    pub(super) fn new(site: &Site, restored: Restored) -> Self {
        let rows = CONDITIONS.iter().filter_map(|condition| row(condition, &site.alarms)).collect();
        let alarms = restored
            .alarms
            .into_iter()
            .map(|record| {
                let delay = Delay::starting(record.state.is_active());
                (record.key.clone(), Watched { record, delay })
            })
            .collect();
        Ledger {
            rows,
            receivers: site.receivers.iter().map(|r| (r.name.clone(), r.min_priority)).collect(),
            alarms,
            database_id: restored.database_id,
            next_seq: restored.next_seq,
            next_notice_id: restored.next_notice_id,
        }
    }

    /// Every alarm as it stands.
    pub(super) fn records(&self) -> impl Iterator<Item = &AlarmRecord> {
        self.alarms.values().map(|w| &w.record)
    }

    /// Judges every row of the table.
    pub(super) fn judge(&mut self, figures: &Figures, now: Moment, decided: &mut Decided) {
        let mut seen = BTreeSet::new();
        for row in self.rows.clone() {
            for judged in (row.condition.judge)(figures) {
                let key =
                    AlarmKey { condition: row.condition.name.to_owned(), subject: judged.subject.clone() };
                self.judge_one(row, &key, judged, now, decided);
                seen.insert(key);
            }
        }
        self.clear_what_is_no_longer_judged(&seen, now, decided);
    }

    /// Applies a person's event to one alarm; `Err` says why it can't be.
    pub(super) fn apply(
        &mut self,
        key: &AlarmKey,
        event: Event,
        by: &str,
        now: Moment,
        decided: &mut Decided,
    ) -> Result<State, String> {
        let Some(watched) = self.alarms.get(key) else {
            return Err(format!("there is no alarm {key}; `railtide alarm` lists those there are"));
        };
        let facts = watched.record.facts.clone();
        let from = watched.record.state;
        self.transition(key, Cause { event, facts, by: Some(by) }, now, decided)
            .ok_or_else(|| format!("the alarm {key} is {}: that can't be done to it now", from.word()))
    }

    fn judge_one(&mut self, row: Row, key: &AlarmKey, judged: Judged, now: Moment, decided: &mut Decided) {
        let watched = self.alarms.entry(key.clone()).or_insert_with(|| Watched {
            record: AlarmRecord {
                key: key.clone(),
                state: State::Normal,
                priority: row.priority,
                since: now.utc,
                raised_at: None,
                shelved_until: None,
                last_seq: 0,
                facts: Facts::default(),
            },
            delay: Delay::default(),
        });
        watched.record.priority = row.priority;
        let suppress = match (watched.record.state, judged.suppressed) {
            (State::Suppressed { .. }, false) => Some(Event::Unsuppress),
            (State::Suppressed { .. }, true) => None,
            (_, true) => Some(Event::Suppress),
            (_, false) => None,
        };
        let level = Level::of(judged.value, judged.setpoint, row.condition.side, row.deadband);
        let delayed = watched.delay.step(level, now.mono, row.on_delay, row.off_delay);
        for event in delayed.into_iter().chain(suppress) {
            self.transition(key, Cause { event, facts: judged.facts.clone(), by: None }, now, decided);
        }
    }

    /// A limit or a logger that was taken out of the config must not leave an alarm behind that nothing can clear.
    fn clear_what_is_no_longer_judged(
        &mut self,
        seen: &BTreeSet<AlarmKey>,
        now: Moment,
        decided: &mut Decided,
    ) {
        let orphans: Vec<AlarmKey> = self
            .alarms
            .values()
            .filter(|w| w.record.state.is_active() && !seen.contains(&w.record.key))
            .map(|w| w.record.key.clone())
            .collect();
        for key in orphans {
            let facts = Facts { note: "no longer in the config".to_owned(), ..Facts::default() };
            self.transition(&key, Cause { event: Event::Clear, facts, by: None }, now, decided);
        }
    }

    fn transition(
        &mut self,
        key: &AlarmKey,
        cause: Cause<'_>,
        now: Moment,
        decided: &mut Decided,
    ) -> Option<State> {
        let record = &mut self.alarms.get_mut(key)?.record;
        let from = record.state;
        let to = from.after(cause.event)?;
        record.state = to;
        record.since = now.utc;
        if to.is_active() && !from.is_active() {
            record.raised_at = Some(now.utc);
        }
        record.last_seq = self.next_seq;
        record.facts = cause.facts.clone();
        decided.journal.push(JournalEntry {
            seq: self.next_seq,
            at: now.utc,
            key: key.clone(),
            event: cause.event,
            from,
            to,
            priority: record.priority,
            by: cause.by.map(str::to_owned),
            facts: cause.facts,
        });
        self.next_seq += 1;
        let record = record.clone();
        if let Some(kind) = announces(from, to) {
            self.notify(kind, &record, now, decided);
        }
        decided.alarms.push(record);
        Some(to)
    }

    fn notify(&mut self, kind: NoticeKind, record: &AlarmRecord, now: Moment, decided: &mut Decided) {
        let advice = crate::alarm::condition(&record.key.condition).map_or("", |c| c.advice);
        for (receiver, min_priority) in &self.receivers {
            if record.priority > *min_priority {
                continue;
            }
            decided.notices.push(Notice {
                id: self.next_notice_id,
                receiver: receiver.clone(),
                kind,
                priority: record.priority,
                at: now.utc,
                key: record.key.clone(),
                raised_at: record.raised_at.unwrap_or(now.utc),
                facts: record.facts.clone(),
                advice: advice.to_owned(),
                idempotency_key: format!("{}-{}", self.database_id, self.next_notice_id),
                recorded: true,
            });
            self.next_notice_id += 1;
        }
    }
}

fn row(condition: &'static Condition, overrides: &[AlarmOverride]) -> Option<Row> {
    let with = overrides.iter().find(|o| o.condition == condition.name);
    if with.is_some_and(|o| !o.enabled) {
        return None;
    }
    Some(Row {
        condition,
        priority: with.and_then(|o| o.priority).unwrap_or(condition.priority),
        deadband: with.and_then(|o| o.deadband).unwrap_or(condition.deadband),
        on_delay: with.and_then(|o| o.on_delay).unwrap_or(condition.on_delay),
        off_delay: with.and_then(|o| o.off_delay).unwrap_or(condition.off_delay),
    })
}

/// Which transitions are told to receivers: that an alarm needs eyes, and that what it was about is over.
fn announces(from: State, to: State) -> Option<NoticeKind> {
    match (from, to) {
        (_, State::Unacknowledged) => Some(NoticeKind::Raised),
        (State::Unacknowledged | State::Acknowledged, State::Normal | State::ReturnedUnacknowledged) => {
            Some(NoticeKind::Returned)
        }
        (State::Unacknowledged | State::Acknowledged, State::Suppressed { .. }) => Some(NoticeKind::Returned),
        _ => None,
    }
}
