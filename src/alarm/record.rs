//! What an alarm leaves behind: its present record, journal entries, notices and their delivery, and the requests
//! that people make about it. These are the facts; `report` and `notice` turn them into text.

use std::fmt;

use serde::{Deserialize, Serialize};

use super::{Event, State};
use crate::quantity::Utc;

/// How urgent an alarm is (IEC 62682); the lesser one here is the more urgent.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Priority {
    /// Act now: something is being damaged.
    High,
    /// Act soon.
    Medium,
    /// Look when convenient.
    Low,
}

impl Priority {
    /// The word used in the config file and shown to people.
    pub fn word(self) -> &'static str {
        match self {
            Priority::High => "high",
            Priority::Medium => "medium",
            Priority::Low => "low",
        }
    }
}

/// Which alarm: a condition of the table, about one thing.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
pub struct AlarmKey {
    /// The condition's name in the table, for example `rail-high`.
    pub condition: String,
    /// What it is about: `hall.reservoir`, a logger's or a channel's name, or empty for the whole site.
    pub subject: String,
}

impl fmt::Display for AlarmKey {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.subject.is_empty() {
            write!(f, "{}", self.condition)
        } else {
            write!(f, "{}:{}", self.condition, self.subject)
        }
    }
}

/// The figures behind a transition, as they stood then. Everything is optional because each condition has its own.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
#[serde(default)]
pub struct Facts {
    /// The judged figure (a rail, mains, seconds of silence …) in `unit`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub value: Option<f64>,
    /// Its expanded uncertainty (k = 2), in `unit`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub value_u: Option<f64>,
    /// What it was judged against, in `unit`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub setpoint: Option<f64>,
    /// The limit that the setpoint protects, in `unit`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub limit: Option<f64>,
    /// Unit of the four above: `V`, `s`, `%`.
    #[serde(skip_serializing_if = "String::is_empty")]
    pub unit: String,
    /// Mains at the time, V.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub mains_v: Option<f64>,
    /// Whether the figure was measured, or projected from mains.
    #[serde(skip_serializing_if = "String::is_empty")]
    pub source: String,
    /// The loading that a projection assumes.
    #[serde(skip_serializing_if = "String::is_empty")]
    pub loading: String,
    /// Whether something proves that the amplifier is on; absent where nothing tells, or it doesn't matter.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub proved_on: Option<bool>,
    /// Whatever else there is to say, in plain words.
    #[serde(skip_serializing_if = "String::is_empty")]
    pub note: String,
}

/// One alarm as it stands now.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct AlarmRecord {
    /// Which alarm.
    pub key: AlarmKey,
    /// Where it stands.
    pub state: State,
    /// Its priority.
    pub priority: Priority,
    /// When it came into this state.
    pub since: Utc,
    /// When its condition last became active, if it ever did.
    pub raised_at: Option<Utc>,
    /// When shelving ends, while shelved.
    pub shelved_until: Option<Utc>,
    /// The last journal entry about it.
    pub last_seq: u64,
    /// Figures of the last transition.
    pub facts: Facts,
}

/// One transition, in the journal that nothing edits.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct JournalEntry {
    /// Its own sequence number: 1, 2, 3 … without a gap.
    pub seq: u64,
    /// When.
    pub at: Utc,
    /// Which alarm.
    pub key: AlarmKey,
    /// What happened.
    pub event: Event,
    /// Before.
    pub from: State,
    /// After.
    pub to: State,
    /// Its priority.
    pub priority: Priority,
    /// Who did it and why, where a person did.
    pub by: Option<String>,
    /// The figures.
    pub facts: Facts,
}

/// What a notice tells.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum NoticeKind {
    /// The alarm is raised.
    Raised,
    /// The alarm has returned to normal.
    Returned,
    /// A trial, asked for by a person.
    Trial,
}

/// One message to one receiver about one alarm, as facts; the text is rendered at delivery.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Notice {
    /// Its number in the outbox: 1, 2, 3 …
    pub id: u64,
    /// The receiver's name.
    pub receiver: String,
    /// What it tells.
    pub kind: NoticeKind,
    /// How urgent.
    pub priority: Priority,
    /// When the transition happened.
    pub at: Utc,
    /// Which alarm.
    pub key: AlarmKey,
    /// When the alarm was raised: with `key`, what a receiver can tell two notices about one alarm by.
    pub raised_at: Utc,
    /// The figures.
    pub facts: Facts,
    /// What to do, from the table of conditions.
    pub advice: String,
    /// Idempotency key: the same for every attempt.
    pub idempotency_key: String,
    /// False when it went out from memory because the record could not be written.
    pub recorded: bool,
}

/// How far a notice has come.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case", tag = "state")]
pub enum Delivery {
    /// Waits for its first or next attempt.
    Waiting,
    /// The receiver took it.
    Delivered {
        /// When.
        at: Utc,
    },
    /// The receiver will never take it (for example 410 Gone, 400 Bad Request), or the outbox had to let it go.
    GivenUp {
        /// When.
        at: Utc,
    },
}

/// What came of one attempt to deliver; the daemon commits it.
#[derive(Clone, Debug, PartialEq)]
pub struct Outcome {
    /// The notice's number in the outbox.
    pub notice_id: u64,
    /// Attempts made so far, this one included.
    pub attempts: u32,
    /// Where it stands now.
    pub delivery: Delivery,
    /// What the receiver or the network said, in one line, for people.
    pub said: String,
    /// The exact bytes that were sent, so that a retry after a restart sends the same.
    pub body: Vec<u8>,
}

/// What a command or the page asks of the running daemon.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Request {
    /// Who asks, for the journal: the user's login name, or `page`.
    pub by: String,
    /// What.
    pub action: RequestAction,
}

/// The things that can be asked.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case", tag = "do")]
pub enum RequestAction {
    /// Acknowledge one alarm.
    Acknowledge {
        /// Which.
        key: AlarmKey,
    },
}
