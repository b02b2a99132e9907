//! One way to say each result: as text for people, as JSON for programs. The page, notices and the command line use
//! the same.
//!
//! Pure: everything is written into a given writer; no clock, no file, no socket.

mod alarms;
pub mod chart;
mod curve;
mod curve_chart;
pub mod export;
mod findings;
mod fit;
mod notice;
mod profile;
mod standing;
mod supply;
mod time;
mod understood;
pub mod week;

pub use alarms::{AlarmLine, AlarmList, alarms_text};
pub use curve::{CurveDropper, CurveNode, CurvePoint, CurveReport, curve_csv, curve_text};
pub use curve_chart::curve_svg;
pub use findings::finding_sentence;
pub use fit::{Amperes, FitReport, Ohms, Volts, fit_text};
pub use notice::{CAUTION, NoticeText, notice_text};
pub use profile::{Known, Profile, profile_csv, profile_html, profile_text};
pub use standing::{ChannelStanding, RailStanding, Standing, standing_text};
pub use time::{LocalTime, ago, span};
pub use understood::{Understood, understood_text};
