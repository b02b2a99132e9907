//! Alarms: the state machine of IEC 62682, the delays and deadbands that lead to it, and the one table of conditions.
//!
//! Pure: it is told the time and the figures, and says what changed. Adding a condition touches `conditions.rs`
//! alone.

mod conditions;
mod delay;
mod figures;
mod record;
mod state;

pub use conditions::{CONDITIONS, Condition, Judged, condition};
pub use delay::{Delay, Level, Side};
pub use figures::{AheadFigures, Figures, LoggerFigures, PartFigures, RailFigures, RoomFigures};
pub use record::{
    AlarmKey, AlarmRecord, Delivery, Facts, JournalEntry, Notice, NoticeKind, Outcome, Priority, Request,
    RequestAction,
};
pub use state::{Event, State};
