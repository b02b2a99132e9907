//! Loggers: from bytes on a serial line to samples.
//!
//! A thread of its own reads each port and hands bytes with their arrival time to a decoder; what comes out, one
//! [`FromLogger`] after the other over a bounded channel, is all that the rest of the house sees.

mod decode;
mod listening;
mod listing;
mod port;
pub mod recording;
pub mod simulated;
mod stop;
mod tide;

pub use decode::Decoder;
pub use listening::{ChannelTally, Listening, Tally};
pub use listing::{PortInfo, UsbDevice, ports};
pub use port::{PortHandle, StillHanging, back_off, spawn};
pub use tide::{
    MAX_CHANNEL_NAME, MAX_LINE, Pairs, TideLine, Unreadable, Unwritable, Value, crc16, write_line,
};

use crate::quantity::Moment;

/// What a logger has to say, in the order in which it happened.
#[derive(Clone, Debug, PartialEq)]
pub struct FromLogger {
    /// Index into [`crate::config::Site::loggers`].
    pub logger: usize,
    /// When its last byte arrived.
    pub received: Moment,
    /// What.
    pub what: LoggerEvent,
}

/// One thing that a logger said, or that happened to its line.
#[derive(Clone, Debug, PartialEq)]
pub enum LoggerEvent {
    /// A good line.
    Sample(Sample),
    /// A line, or bytes between lines, that could not be used.
    Fault(LineFault),
    /// Good lines are missing before the next sample, by their sequence numbers.
    Lost {
        /// How many.
        lines: u32,
    },
    /// The logger started again: its sequence and its milliseconds begin anew.
    Restarted,
    /// The port opened.
    Connected {
        /// Which port, by its resolved path.
        port: String,
    },
    /// The port could not be opened, or was lost; it's tried again after a back-off.
    Disconnected {
        /// One sentence that says what to do.
        why: String,
    },
    /// A read has not returned for too long: driver or adapter hangs.
    ReadHangs,
}

/// One line of a logger: values of its channels at one time.
#[derive(Clone, Debug, PartialEq)]
pub struct Sample {
    /// The logger's own milliseconds, if it has them: they run evenly, from an unknown start.
    pub logger_ms: Option<u64>,
    /// (index of the channel within its logger, raw volts), uncalibrated.
    pub values: Vec<(usize, f64)>,
}

/// Why bytes could not be used; counted by reason.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum LineFault {
    /// Bytes that are no line.
    Garbage,
    /// Longer than a line may be.
    TooLong,
    /// The check sum is wrong.
    Checksum,
    /// The check sum is right, the rest isn't a line of the format.
    Malformed,
    /// A channel that the config doesn't name; the line's other channels are kept.
    UnknownChannel,
    /// Empty, not a number, infinite, or beyond what can be stored; the line's other channels are kept.
    BadValue,
    /// A line that had been read already: the same sequence number and milliseconds as the one before.
    Duplicate,
}

impl LineFault {
    /// Its short name, in a tally.
    pub fn word(self) -> &'static str {
        match self {
            LineFault::Garbage => "garbage",
            LineFault::TooLong => "too long",
            LineFault::Checksum => "wrong check sum",
            LineFault::Malformed => "malformed",
            LineFault::UnknownChannel => "unknown channel",
            LineFault::BadValue => "bad value",
            LineFault::Duplicate => "duplicate",
        }
    }

    /// What it means, for the log.
    pub fn sentence(self) -> &'static str {
        match self {
            LineFault::Garbage => "bytes that are no line were skipped; is the baud rate right?",
            LineFault::TooLong => "a line longer than any may be was skipped",
            LineFault::Checksum => {
                "a line with a wrong check sum was skipped; look at cable and earthing if it goes on"
            }
            LineFault::Malformed => {
                "a line with a right check sum that is no tide line was skipped; look at the firmware"
            }
            LineFault::UnknownChannel => {
                "it sends a channel that the config doesn't name; its value was skipped"
            }
            LineFault::BadValue => "a value that is no possible figure was skipped",
            LineFault::Duplicate => "a line came twice; the second was skipped",
        }
    }
}
