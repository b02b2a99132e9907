//! The figures that conditions judge: what `watch` knows at one moment.

use std::time::Duration;

use crate::quantity::Uncertain;
use crate::supply::{Basis, Loading};

/// Everything that any condition of the table may look at.
#[derive(Clone, Debug, Default)]
pub struct Figures {
    /// Mains now; `None` while unknown or too old.
    pub mains: Option<Uncertain>,
    /// Each logger, in the config's order.
    pub loggers: Vec<LoggerFigures>,
    /// Each limit on a rail, in the config's order.
    pub rails: Vec<RailFigures>,
}

/// How one logger does.
#[derive(Clone, Debug)]
pub struct LoggerFigures {
    /// Its name.
    pub name: String,
    /// How long ago its last good line came (since the start of watching, if none has).
    pub silent_for: Duration,
    /// The shortest sample period of its channels.
    pub sample_period: Duration,
    /// Why its port is not open, if it isn't.
    pub disconnected: Option<String>,
}

/// How one rail stands against one limit.
#[derive(Clone, Debug, serde::Serialize)]
pub struct RailFigures {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node's name.
    pub node: String,
    /// The loading that the limit is judged at.
    pub loading: Loading,
    /// The limit, V.
    pub limit_v: f64,
    /// Where the limit comes from, in the owner's words.
    pub why: String,
    /// Where the projection comes from; `None` where nothing is known of this loading.
    pub basis: Option<Basis>,
    /// The projected rail; `None` while mains is unknown or nothing is known of this loading.
    pub projected: Option<Uncertain>,
    /// The limit less the projection's guard band, V.
    pub projected_setpoint_v: Option<f64>,
    /// The measured rail, where a channel measures it and it is fresh.
    pub measured: Option<Uncertain>,
    /// The limit less the measurement's guard band, V; `None` where no channel measures this rail.
    pub measured_setpoint_v: Option<f64>,
    /// Whether the amplifier is proved to be on (`true`) or off (`false`) by a rail channel.
    pub proved_on: Option<bool>,
}

impl RailFigures {
    /// `hall.reservoir`, or `hall.reservoir.full` where the limit is judged at another loading than idle: what the
    /// alarm is about, so that two limits on one rail are two alarms.
    pub fn subject(&self) -> String {
        match self.loading {
            Loading::Idle => format!("{}.{}", self.amplifier, self.node),
            other => format!("{}.{}.{}", self.amplifier, self.node, other.word()),
        }
    }
}
