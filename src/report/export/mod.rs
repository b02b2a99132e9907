//! Rows for other programs: readings, intervals and the alarms' journal as CSV (RFC 4180), JSON Lines and XLSX.
//!
//! Times are RFC 3339 in the site's zone with their offset, to the millisecond. Rows are written as they come, so
//! memory stays flat, whatever the length.

mod csv;
mod json_lines;
mod stamp;
mod xlsx;

use std::io::{self, Write};

pub use csv::CsvRows;
pub use json_lines::JsonLines;
pub use stamp::StampWriter;
pub use xlsx::{XLSX_ROWS, XlsxRows};

use crate::alarm::JournalEntry;
use crate::mains::Interval;
use crate::reading::Reading;

/// One row of an export.
#[derive(Clone, Copy, Debug)]
pub enum Row<'a> {
    /// A reading of the channel with this name.
    Reading(&'a str, Reading),
    /// A 10-minute interval of the channel with this name.
    Interval(&'a str, Interval),
    /// A transition of an alarm.
    Alarm(&'a JournalEntry),
}

/// What kind of rows an export has.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Kind {
    /// Every reading.
    Readings,
    /// 10-minute intervals.
    Intervals,
    /// The alarms' journal.
    Alarms,
}

impl Kind {
    /// The word of the command line, the manifest and a sheet's tab.
    pub fn word(self) -> &'static str {
        match self {
            Kind::Readings => "readings",
            Kind::Intervals => "intervals",
            Kind::Alarms => "alarms",
        }
    }

    /// The columns' names, each with its unit.
    pub fn columns(self) -> &'static [&'static str] {
        match self {
            Kind::Readings => &["time", "channel", "value_v", "quality"],
            Kind::Intervals => {
                &["start", "channel", "rms_v", "min_v", "max_v", "readings", "covered_pct", "flagged"]
            }
            Kind::Alarms => &[
                "time", "number", "alarm", "event", "from", "to", "priority", "by", "value", "setpoint",
                "limit", "unit", "mains_v",
            ],
        }
    }
}

/// Where an export's rows go.
pub trait Rows {
    /// Starts the rows of one kind: a header, a sheet.
    fn begin(&mut self, kind: Kind) -> io::Result<()>;
    /// Writes one row of the kind begun last.
    fn row(&mut self, row: Row<'_>) -> io::Result<()>;
    /// Writes what is still owed.
    fn finish(&mut self) -> io::Result<()>;
}

/// Millivolts as volts with three decimals, exactly.
fn write_volts(out: &mut impl Write, mv: i32) -> io::Result<()> {
    let mut text = [0_u8; 12];
    let mut at = text.len();
    let mut rest = mv.unsigned_abs();
    let mut digits = 0;
    while digits < 4 || rest > 0 {
        if digits == 3 {
            at -= 1;
            text[at] = b'.';
        }
        at -= 1;
        text[at] = b'0' + (rest % 10) as u8;
        rest /= 10;
        digits += 1;
    }
    if mv < 0 {
        out.write_all(b"-")?;
    }
    out.write_all(&text[at..])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn millivolts_are_written_as_exact_volts() {
        for mv in [0, 1, 999, 1000, 229_512, -1, -20_500, i32::MAX, i32::MIN] {
            let mut out = Vec::new();
            write_volts(&mut out, mv).unwrap();
            let text = String::from_utf8(out).unwrap();
            let sign = if mv < 0 { "-" } else { "" };
            let (whole, part) = (mv.unsigned_abs() / 1000, mv.unsigned_abs() % 1000);
            assert_eq!(text, format!("{sign}{whole}.{part:03}"));
        }
    }
}
