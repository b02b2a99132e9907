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
    /// Each amplifier's heater winding, V.
    pub heaters: Vec<PartFigures>,
    /// Each amplifier's heater winding from below, V.
    pub heaters_low: Vec<PartFigures>,
    /// Each transformer core: mains over wound-for, times wound-for hertz over real hertz.
    pub cores: Vec<PartFigures>,
    /// Each output stage: anode dissipation of one valve at idle, W.
    pub dissipations: Vec<PartFigures>,
    /// Each capacitor that meets the unloaded rail: that rail if the amplifier were switched on cold now, V.
    pub unloaded: Vec<PartFigures>,
    /// The room left for the record; `None` while nobody has looked.
    pub room: Option<RoomFigures>,
    /// Each measured rail that can be projected: how far it lies outside the band from full to idle, V.
    pub apart: Vec<PartFigures>,
    /// Each limit on a rail that can be projected: what the tide table says of the next hours.
    pub ahead: Vec<AheadFigures>,
}

/// A figure of a supply's parts that follows mains, against its own limit.
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct PartFigures {
    /// What it is about: an amplifier, or an amplifier and a node.
    pub subject: String,
    /// The figure now; `None` while mains (or the measured rail) is unknown.
    pub value: Option<f64>,
    /// Its expanded uncertainty (k = 2).
    pub u: Option<f64>,
    /// What it is judged against.
    pub setpoint: f64,
    /// The limit that the setpoint protects, where it is another figure.
    pub limit: Option<f64>,
    /// Whether it has no meaning now: the amplifier is proved to be off.
    pub suppressed: bool,
    /// What else there is to say.
    pub note: String,
}

/// The room left on the record's disk.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RoomFigures {
    /// Bytes that the disk has free for us.
    pub free_bytes: u64,
    /// Bytes that the record grows by in a day; `None` while it is too young to tell.
    pub bytes_per_day: Option<f64>,
}

impl RoomFigures {
    /// So little is no room, bytes: a commit, the log and a day's growth of any site must fit.
    const NONE_LEFT: u64 = 20_000_000;

    /// Days until the disk is full at the record's own growth. A record that is too young to tell is taken to grow by
    /// 20 MB a day, which a hundred channels at a reading a second would.
    pub fn days_left(&self) -> f64 {
        let free = self.free_bytes.saturating_sub(Self::NONE_LEFT) as f64;
        free / self.bytes_per_day.unwrap_or(Self::NONE_LEFT as f64).max(1.0)
    }
}

/// How high one rail may come within the next hours, against its setpoint.
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct AheadFigures {
    /// The rail, as [`RailFigures::subject`] names it.
    pub subject: String,
    /// The loading that the limit is judged at.
    pub loading: Loading,
    /// The rail at the highest mains that the tide table's band reaches; `None` without a table, or with an old one.
    pub rail: Option<Uncertain>,
    /// That mains, V.
    pub mains_v: Option<f64>,
    /// The limit less the projection's guard band, V.
    pub setpoint_v: f64,
    /// The limit, V.
    pub limit_v: f64,
    /// From when on it's expected, if it is.
    pub note: String,
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
