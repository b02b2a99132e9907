//! The list of alarms, as `railtide alarm` says it.

use std::fmt;

use chrono_tz::Tz;
use serde::Serialize;

use super::time::{LocalTime, ago};
use crate::alarm::{AlarmRecord, Facts, Priority, State, condition};
use crate::quantity::Utc;

/// All alarms of a site as they stand.
#[derive(Clone, Debug, Serialize)]
pub struct AlarmList {
    /// The moment.
    pub at: LocalTime,
    /// Those that ask for eyes first, then by priority.
    pub alarms: Vec<AlarmLine>,
}

/// One alarm.
#[derive(Clone, Debug, Serialize)]
pub struct AlarmLine {
    /// `condition:subject`, as `alarm ack` takes it.
    pub alarm: String,
    /// Its state, in the standard's words.
    pub state: &'static str,
    /// Whether its condition holds.
    pub active: bool,
    /// How urgent.
    pub priority: Priority,
    /// Since when it's in this state.
    pub since: LocalTime,
    /// When its condition last became active.
    pub raised_at: Option<LocalTime>,
    /// Figures of the last transition.
    pub facts: Facts,
    /// What to do.
    pub advice: &'static str,
    #[serde(skip)]
    since_utc: Utc,
}

impl AlarmList {
    /// The list of `records` at `now`; alarms that are normal are left out unless `with_normal`.
    pub fn new(records: &[AlarmRecord], with_normal: bool, zone: Tz, now: Utc) -> Self {
        let mut records: Vec<_> =
            records.iter().filter(|r| with_normal || r.state != State::Normal).collect();
        records.sort_by_key(|r| (rank(r.state), r.priority, r.key.clone()));
        let alarms = records
            .into_iter()
            .map(|r| AlarmLine {
                alarm: r.key.to_string(),
                state: r.state.word(),
                active: r.state.is_active(),
                priority: r.priority,
                since: LocalTime::of(r.since, zone),
                raised_at: r.raised_at.map(|at| LocalTime::of(at, zone)),
                facts: r.facts.clone(),
                advice: condition(&r.key.condition).map_or("", |c| c.advice),
                since_utc: r.since,
            })
            .collect();
        AlarmList { at: LocalTime::of(now, zone), alarms }
    }
}

fn rank(state: State) -> u8 {
    match state {
        State::Unacknowledged => 0,
        State::Acknowledged => 1,
        State::ReturnedUnacknowledged => 2,
        State::Shelved { .. } | State::Suppressed { .. } | State::OutOfService { .. } => 3,
        State::Normal => 4,
    }
}

/// Says the list in words: an alarm a paragraph, with what to do while it's active.
pub fn alarms_text(list: &AlarmList, now: Utc, out: &mut impl fmt::Write) -> fmt::Result {
    if list.alarms.is_empty() {
        return writeln!(out, "No alarm. ({})", list.at.people());
    }
    for line in &list.alarms {
        writeln!(
            out,
            "{}  {}, priority {}, since {} ({})",
            line.alarm,
            line.state.to_uppercase(),
            line.priority.word(),
            line.since.people(),
            ago(line.since_utc, now)
        )?;
        if let Some(figures) = facts_phrase(&line.facts) {
            writeln!(out, "    {figures}")?;
        }
        if line.active {
            writeln!(out, "    {}", line.advice)?;
        }
    }
    Ok(())
}

/// "485 V ± 9 V against a setpoint of 470 V (projected from mains 236.0 V, idle; nothing proves that …)"
fn facts_phrase(facts: &Facts) -> Option<String> {
    let value = facts.value?;
    let digits = if facts.unit == "V" && value < 300.0 { 1 } else { 0 };
    let mut phrase = format!("{value:.digits$} {}", facts.unit);
    if let Some(u) = facts.value_u {
        phrase += &format!(" ± {u:.digits$} {}", facts.unit);
    }
    if let Some(setpoint) = facts.setpoint {
        phrase += &format!(" against a setpoint of {setpoint:.digits$} {}", facts.unit);
    }
    let mut how = Vec::new();
    match (facts.source.as_str(), facts.mains_v) {
        ("projected", Some(mains_v)) => {
            how.push(format!("projected from mains {mains_v:.1} V, {}", facts.loading))
        }
        ("", _) => {}
        (source, Some(mains_v)) => how.push(format!("{source}, mains {mains_v:.1} V")),
        (source, None) => how.push(source.to_owned()),
    }
    match facts.proved_on {
        Some(true) => how.push("the amplifier is on".to_owned()),
        None if facts.source == "projected" && !facts.loading.is_empty() => {
            how.push("nothing proves that the amplifier is on".to_owned());
        }
        _ => {}
    }
    if !facts.note.is_empty() {
        how.push(facts.note.clone());
    }
    if !how.is_empty() {
        phrase += &format!(" ({})", how.join("; "));
    }
    Some(phrase)
}
