//! The checked config: what the rest of the program works with. It cannot hold a bad value.

use std::path::PathBuf;
use std::time::Duration;

use chrono::NaiveDate;
use chrono_tz::Tz;

use super::complaint::Complaint;
use super::secret::SecretSource;
use crate::alarm::Priority;
use crate::reading::ChannelQuantity;
use crate::supply::{Circuit, Loading, MainsWave, Measured};

/// One site: a house, its loggers, its amplifiers.
#[derive(Clone, Debug, PartialEq)]
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
    /// Values that are possible but unlikely, each with the reason.
    pub warnings: Vec<Complaint>,
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
#[derive(Clone, Debug, PartialEq)]
pub struct StoreSettings {
    /// The database file; a relative path in the config is meant from the config's folder.
    pub path: PathBuf,
    /// How long readings may wait in memory before they are committed.
    pub commit_every: Duration,
    /// How long readings are kept; `None`: for ever. Intervals, alarms and fits always are.
    pub keep_readings: Option<Duration>,
}

/// One logger.
#[derive(Clone, Debug, PartialEq)]
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
#[derive(Clone, Debug, PartialEq)]
pub struct Amplifier {
    /// Its name.
    pub name: String,
    /// When it may be on, by the clock, where no rail channel can tell; empty when nobody said.
    pub in_use: Vec<DayWindow>,
    /// The short way of stating its supply.
    pub measured: Option<MeasuredSupply>,
    /// The full way.
    pub circuit: Option<Circuit>,
    /// Its output valves. Their current is among the circuit's loads already.
    pub output: Option<OutputStage>,
    /// How its capacitors fare while the valves are cold; with a circuit only.
    pub cold: Option<ColdStart>,
    /// The limits that its rails must keep.
    pub limits: Vec<Limit>,
    /// The service log of the config, by day.
    pub events: Vec<ServiceEvent>,
}

/// A stretch of the local day, in minutes from midnight; one that ends before it starts runs over midnight.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct DayWindow {
    /// First minute, 0 to 1439.
    pub from_min: u16,
    /// The minute after the last, 1 to 1440.
    pub to_min: u16,
}

impl DayWindow {
    /// Whether it holds the minute that starts `minute` minutes after midnight.
    pub fn contains(self, minute: u16) -> bool {
        if self.from_min < self.to_min {
            (self.from_min..self.to_min).contains(&minute)
        } else {
            minute >= self.from_min || minute < self.to_min
        }
    }
}

/// The output valves at rest.
#[derive(Clone, Debug, PartialEq)]
pub struct OutputStage {
    /// Type designation, as the owner wrote it; [`super::output_valve`] may know its ratings.
    pub type_name: Option<String>,
    /// How many.
    pub count: u32,
    /// Idle current of one, A.
    pub idle_a_each: f64,
    /// The rail at which that current was read, V.
    pub at_v: f64,
    /// Cathode above 0 V, V.
    pub cathode_v: f64,
    /// The node that feeds their anodes.
    pub node: String,
    /// How they are biased.
    pub bias: Option<Bias>,
    /// Where the bias comes from.
    pub bias_from: BiasFrom,
    /// Exponent of current over rail voltage: given, or from the bias.
    pub law: f64,
}

/// How output valves are biased.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Bias {
    /// By a resistor in the cathode.
    Cathode,
    /// From a winding of the same transformer, unregulated: it moves with the mains.
    Winding,
    /// From a regulated source: it stands still while the rail moves.
    Regulated,
}

/// What a bias supply is fed from; it decides whether a dropper in the rectifier's return moves the bias.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum BiasFrom {
    /// A winding of its own.
    OwnWinding,
    /// A tap of the rail's winding.
    HtTap,
    /// A capacitor from the rail's winding.
    HtCapacitor,
    /// There is none.
    None,
    /// Nobody said.
    Unknown,
}

/// What stands between switching on and the valves' drawing current.
#[derive(Clone, Debug, PartialEq)]
pub struct ColdStart {
    /// Whether the amplifier can be kept waiting with cold anodes.
    pub standby: Standby,
    /// How long the rail stands unloaded after switching on, s.
    pub warm_up_s: f64,
}

/// Where a standby switch interrupts.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Standby {
    /// There is none.
    None,
    /// The rail's winding: all capacitors are without voltage.
    HtAc,
    /// After a node, by its name: that node and those before it stand at the full peak.
    After(String),
}

/// One line of the service log.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ServiceEvent {
    /// The local day.
    pub on: NaiveDate,
    /// What was done.
    pub what: String,
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
#[derive(Clone, Copy, Debug, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
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
#[derive(Clone, Debug, PartialEq)]
pub struct Receiver {
    /// Its name.
    pub name: String,
    /// How it is reached.
    pub route: Route,
    /// Less urgent notices are not sent to it.
    pub min_priority: Priority,
}

/// How a receiver is reached.
#[derive(Clone, Debug, PartialEq)]
pub enum Route {
    /// An HTTP POST of our JSON.
    Webhook {
        /// `http://` or `https://`.
        url: String,
        /// Where the token of `Authorization: Bearer …` is to be had.
        token: Option<SecretSource>,
    },
}
