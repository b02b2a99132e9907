//! One reading: which channel, when, how much, and how far it can be trusted.

use serde::{Deserialize, Serialize};

use crate::quantity::{Millivolts, Utc};

/// A channel's number in the record: 1 to 255, given once and never used again (the row key of an open reading is
/// `t_ms * 256 + channel`). People and the config use the channel's name.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(transparent)]
pub struct ChannelId(pub u8);

/// What a channel measures. It never changes under one name.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum ChannelQuantity {
    /// The supply at the socket, V r.m.s. line to neutral.
    MainsRms,
    /// A d.c. supply node of an amplifier, V against its 0 V.
    Rail,
}

impl ChannelQuantity {
    /// The word used in the config file and in the record.
    pub fn word(self) -> &'static str {
        match self {
            ChannelQuantity::MainsRms => "mains_rms",
            ChannelQuantity::Rail => "rail",
        }
    }

    /// The quantity that `word` names.
    pub fn from_word(word: &str) -> Option<Self> {
        [ChannelQuantity::MainsRms, ChannelQuantity::Rail].into_iter().find(|q| q.word() == word)
    }
}

/// How far a reading can be trusted, best first: where two readings claim one channel and millisecond, the lesser
/// one here wins.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Quality {
    /// Nothing speaks against it.
    Good = 0,
    /// The value is good; its time is not: the host's clock had stepped or was not yet known.
    ClockDoubtful = 1,
    /// The channel has shown the same value for too long.
    Stuck = 2,
    /// No plausible value of this quantity.
    OutOfRange = 3,
}

impl Quality {
    /// Every quality, in the order of its number in the record.
    pub const ALL: [Quality; 4] =
        [Quality::Good, Quality::ClockDoubtful, Quality::Stuck, Quality::OutOfRange];

    /// The number kept in the record.
    pub fn code(self) -> u8 {
        self as u8
    }

    /// The quality with that number.
    pub fn from_code(code: u8) -> Option<Self> {
        Self::ALL.get(usize::from(code)).copied()
    }

    /// The word shown to people and programs.
    pub fn word(self) -> &'static str {
        match self {
            Quality::Good => "good",
            Quality::ClockDoubtful => "clock doubtful",
            Quality::Stuck => "stuck",
            Quality::OutOfRange => "out of range",
        }
    }

    /// Whether the value itself, whatever its time, may be used to judge and project.
    pub fn value_is_sound(self) -> bool {
        matches!(self, Quality::Good | Quality::ClockDoubtful)
    }
}

/// A reading's time and whether it can be believed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Stamp {
    /// When, UTC.
    pub at: Utc,
    /// True while the host's clock had stepped back or was not yet known.
    pub doubtful: bool,
}

/// One value of one channel at one time, as the record keeps it.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Reading {
    /// Whose value.
    pub channel: ChannelId,
    /// When, UTC.
    pub at: Utc,
    /// How much, calibrated.
    pub value: Millivolts,
    /// How far to trust it.
    pub quality: Quality,
}
