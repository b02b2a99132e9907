//! Recordings of other loggers: delimited text into times and volts.
//!
//! Reads bytes, gives rows; knows neither files nor the record.

mod layout;
mod rows;
mod time;

pub use layout::{Column, Layout, TimeColumns, guess_separator};
pub use rows::{Recording, RowFault, RowResult};
pub use time::{TimeFormat, TimeReader};
