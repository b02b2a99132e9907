//! One way to say each result: as text for people, as JSON for programs. The page, notices and the command line use
//! the same.
//!
//! Pure: everything is written into a given writer; no clock, no file, no socket.

mod alarms;
pub mod export;
mod notice;
mod standing;
mod time;
mod understood;

pub use alarms::{AlarmLine, AlarmList, alarms_text};
pub use notice::{CAUTION, NoticeText, notice_text};
pub use standing::{ChannelStanding, RailStanding, Standing, standing_text};
pub use time::{LocalTime, ago, span};
pub use understood::understood_text;
