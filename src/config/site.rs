//! The checked config: what the rest of the program works with. It cannot hold a bad value.

use std::path::PathBuf;
use std::time::Duration;

use chrono_tz::Tz;

use crate::alarm::Priority;
use crate::reading::ChannelQuantity;
use crate::supply::{Circuit, Loading, MainsWave, Measured};

/// One site: a house, its loggers, its amplifiers.
#[derive(Clone, Debug)]
pub struct Site {
    /// The file that it came from.
    pub file: PathBuf,
    /// What people call it.
    pub name: String,
    /// For local days and times.
    pub time_zone: Tz,
    /// Mains frequency, Hz.
    pub frequency_hz: f64,
    /// What the supplier says it delivers, V.
    pub declared_v: f64,
    /// Shape of the mains wave.
    pub wave: MainsWave,
    /// The record.
    pub store: StoreSettings,
    /// The loggers, each with its channels. May be empty.
    pub loggers: Vec<LoggerSettings>,
    /// The amplifiers. May be empty.
    pub amplifiers: Vec<Amplifier>,
    /// Overrides of the table of conditions.
    pub alarms: Vec<AlarmOverride>,
    /// Where notices go.
    pub receivers: Vec<Receiver>,
    /// How much of the projected rail's U (k = 2) is taken off a limit to get the setpoint (JCGM 106 guard band,
    /// rejection side: a larger one warns earlier).
    pub guard_band: f64,
}

impl Site {
    /// Every channel with the index of its logger.
    pub fn channels(&self) -> impl Iterator<Item = (usize, &Channel)> {
        self.loggers.iter().enumerate().flat_map(|(i, logger)| logger.channels.iter().map(move |c| (i, c)))
    }

    /// The amplifier called `name`.
    pub fn amplifier(&self, name: &str) -> Option<&Amplifier> {
        self.amplifiers.iter().find(|a| a.name == name)
    }
}

/// Where and how the record is kept.
#[derive(Clone, Debug)]
pub struct StoreSettings {
    /// The database file.
    pub path: PathBuf,
    /// How long readings may wait in memory before they are committed.
    pub commit_every: Duration,
}

/// One logger.
#[derive(Clone, Debug)]
pub struct LoggerSettings {
    /// Its name; `logger` when there is only one and none was given.
    pub name: String,
    /// A tty of any kind, or a link to one.
    pub port: PathBuf,
    /// Bits per second.
    pub baud: u32,
    /// What it measures.
    pub channels: Vec<Channel>,
}

/// One channel of a logger.
#[derive(Clone, Debug, PartialEq)]
pub struct Channel {
    /// Its name, in the tide line and in the record.
    pub name: String,
    /// The name that it had before, in the record.
    pub was: Option<String>,
    /// What it measures.
    pub quantity: ChannelQuantity,
    /// How long one reading stands for.
    pub sample_period: Duration,
    /// Applied first: calibrated = raw·gain + offset.
    pub gain: f64,
    /// V.
    pub offset_v: f64,
    /// ±% of reading.
    pub accuracy_pct: f64,
    /// ±V, added to the former.
    pub accuracy_v: f64,
    /// For a rail: the amplifier and its node.
    pub rail: Option<RailOf>,
}

impl Channel {
    /// Half-width of the channel's accuracy at `volts`, V.
    pub fn half_width_v(&self, volts: f64) -> f64 {
        volts.abs() * self.accuracy_pct / 100.0 + self.accuracy_v
    }
}

/// Which rail a channel measures.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct RailOf {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node's name.
    pub node: String,
}

/// One amplifier.
#[derive(Clone, Debug)]
pub struct Amplifier {
    /// Its name.
    pub name: String,
    /// The short way of stating its supply.
    pub measured: Option<MeasuredSupply>,
    /// The full way.
    pub circuit: Option<Circuit>,
    /// The limits that its rails must keep.
    pub limits: Vec<Limit>,
}

/// One measured pair and what it was measured at.
#[derive(Clone, Debug, PartialEq)]
pub struct MeasuredSupply {
    /// The node's name.
    pub node: String,
    /// The loading at the time.
    pub loading: Loading,
    /// The figures.
    pub pair: Measured,
}

/// What a limit's figure already allows for.
#[derive(Clone, Copy, Debug, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Rating {
    /// Never to be exceeded, at any moment; also where the system is unknown.
    Absolute,
    /// Compared with the rail at nominal mains: it already allows for the mains' ±10 %.
    DesignCentre,
    /// Between the two.
    DesignMaximum,
}

/// A limit on one rail.
#[derive(Clone, Debug, PartialEq)]
pub struct Limit {
    /// The node's name.
    pub node: String,
    /// The rail must stay below, V.
    pub max_v: f64,
    /// The lowest rail that the owner accepts, V.
    pub min_v: Option<f64>,
    /// What `max_v` already allows for.
    pub rating: Rating,
    /// The loading that it is judged at.
    pub loading: Loading,
    /// Where it comes from, in the owner's words.
    pub why: String,
}

/// Overrides of one row of the table of conditions.
#[derive(Clone, Debug, PartialEq)]
pub struct AlarmOverride {
    /// The condition's name.
    pub condition: String,
    /// How long the condition must hold.
    pub on_delay: Option<Duration>,
    /// How long it must be away.
    pub off_delay: Option<Duration>,
    /// How far beyond the setpoint it must have gone back, in the condition's unit.
    pub deadband: Option<f64>,
    /// How urgent.
    pub priority: Option<Priority>,
    /// False switches the condition off.
    pub enabled: bool,
}

/// Where notices go.
#[derive(Clone, Debug)]
pub struct Receiver {
    /// Its name.
    pub name: String,
    /// How it is reached.
    pub route: Route,
    /// Less urgent notices are not sent to it.
    pub min_priority: Priority,
}

/// How a receiver is reached.
#[derive(Clone, Debug)]
pub enum Route {
    /// An HTTP POST of our JSON.
    Webhook {
        /// `http://` or `https://`.
        url: String,
        /// Sent as `Authorization: Bearer …`.
        token: Option<SecretSource>,
    },
}

/// Where a secret is read from when the daemon starts; the config file itself never holds one.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum SecretSource {
    /// A file that holds the secret and nothing else.
    File(PathBuf),
    /// The name of an environment variable.
    Env(String),
}
