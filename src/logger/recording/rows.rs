//! A recording's rows, one after the other; a bad one is told with its line and the rest read on.

use std::io::Read;

use super::{Layout, TimeFormat, TimeReader};
use crate::quantity::{Millivolts, Utc};

/// Why a row could not be used.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, thiserror::Error)]
pub enum RowFault {
    /// It has fewer columns than are needed.
    #[error("a column is missing")]
    MissingColumn,
    /// The time can't be read.
    #[error("the time can't be read")]
    Time,
    /// The clocks of the zone never showed that time.
    #[error("the clocks of the zone skipped that time")]
    SkippedByTheClocks,
    /// The value is empty.
    #[error("no value")]
    NoValue,
    /// The value is no number, or none that could be volts.
    #[error("the value is no possible figure")]
    Value,
    /// It's no text of UTF-8, or its quotes don't match.
    #[error("no text that can be read")]
    Text,
}

/// What a row says, or why it can't be used.
pub type RowResult = Result<(Utc, Millivolts), RowFault>;

/// Reads a recording.
pub struct Recording<R: Read> {
    reader: csv::Reader<R>,
    record: csv::ByteRecord,
    layout: Layout,
    times: Option<TimeReader>,
    date: Option<usize>,
    time: usize,
    value: usize,
    joined: String,
    first: bool,
}

impl<R: Read> Recording<R> {
    /// Opens a recording; the lines of [`Layout::skip_lines`] must have been read from `input` already. An error says
    /// which column isn't there.
    pub fn open(input: R, layout: Layout) -> Result<Self, String> {
        let mut reader = csv::ReaderBuilder::new()
            .delimiter(layout.separator)
            .has_headers(layout.header)
            .flexible(true)
            .buffer_capacity(1 << 16)
            .from_reader(input);
        let header = if layout.header {
            reader.byte_headers().map_err(|e| e.to_string())?.clone()
        } else {
            csv::ByteRecord::new()
        };
        let find = |column: &super::Column| {
            column.index(&header).ok_or_else(|| {
                let known: Vec<_> = header.iter().map(|f| String::from_utf8_lossy(f).into_owned()).collect();
                format!("there is no column {column:?}; the header has: {}", known.join(", "))
            })
        };
        let date = layout.time.date.as_ref().map(find).transpose()?;
        let (time, value) = (find(&layout.time.time)?, find(&layout.value)?);
        let times = layout.time_format.clone().map(|format| TimeReader::new(format, layout.zone));
        Ok(Recording {
            reader,
            record: csv::ByteRecord::new(),
            layout,
            times,
            date,
            time,
            value,
            joined: String::new(),
            first: true,
        })
    }

    /// How many times fell into an hour that the clocks showed twice.
    pub fn ambiguous(&self) -> u64 {
        self.times.as_ref().map_or(0, TimeReader::ambiguous)
    }

    /// The next row: its line in the file, and the instant and value or what is wrong with it; `None` at the end. An
    /// outer error is one of reading the input itself, or a time format that can't be told from the first row.
    pub fn next_row(&mut self) -> Result<Option<(u64, RowResult)>, String> {
        if !self.reader.read_byte_record(&mut self.record).map_err(|e| e.to_string())? {
            return Ok(None);
        }
        let line = self.record.position().map_or(0, csv::Position::line) + self.layout.skip_lines;
        let row = self.row()?;
        self.first = false;
        Ok(Some((line, row)))
    }

    fn row(&mut self) -> Result<RowResult, String> {
        let field = |index: usize| self.record.get(index).ok_or(RowFault::MissingColumn);
        let text =
            |index: usize| field(index).and_then(|f| std::str::from_utf8(f).map_err(|_| RowFault::Text));
        let fields = (|| Ok((self.date.map(text).transpose()?, text(self.time)?, text(self.value)?)))();
        let (date, time, value) = match fields {
            Ok(fields) => fields,
            Err(fault) => return Ok(Err(fault)),
        };
        let time = match date {
            Some(date) => {
                self.joined.clear();
                self.joined.push_str(date.trim());
                self.joined.push(' ');
                self.joined.push_str(time.trim());
                &self.joined
            }
            None => time,
        };
        let times = match &mut self.times {
            Some(times) => times,
            None => match TimeFormat::guess(time) {
                Some(format) => self.times.insert(TimeReader::new(format, self.layout.zone)),
                None => {
                    return Err(format!(
                        "the time \"{time}\" tells no format by itself; give --time-format, for example \
                         \"%d/%m/%Y %H:%M:%S\""
                    ));
                }
            },
        };
        Ok(times.read(time).and_then(|at| Ok((at, volts(value, &self.layout)?))))
    }
}

/// A value such as `236.4`, `236,4` or `236.4 V` as millivolts.
fn volts(text: &str, layout: &Layout) -> Result<Millivolts, RowFault> {
    let text = text.trim_end_matches(|c: char| c.is_ascii_alphabetic() || c.is_whitespace()).trim_start();
    if text.is_empty() {
        return Err(RowFault::NoValue);
    }
    let number = if layout.decimal == b'.' {
        text.parse::<f64>()
    } else {
        text.replace(char::from(layout.decimal), ".").parse()
    };
    number.ok().and_then(|number| Millivolts::from_volts(number * layout.scale)).ok_or(RowFault::Value)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::logger::recording::{Column, TimeColumns};

    fn layout() -> Layout {
        Layout {
            separator: b';',
            decimal: b',',
            skip_lines: 0,
            header: true,
            time: TimeColumns { date: Some(Column::Name("Date".into())), time: Column::Name("Time".into()) },
            time_format: Some(TimeFormat::Letters("%d/%m/%Y %H:%M:%S".into())),
            zone: chrono_tz::UTC,
            value: Column::Number(3),
            scale: 1.0,
        }
    }

    type Line = (u64, Result<(i64, i32), RowFault>);

    fn rows(text: &str, layout: Layout) -> Vec<Line> {
        let mut recording = Recording::open(text.as_bytes(), layout).unwrap();
        let mut all = Vec::new();
        while let Some((line, row)) = recording.next_row().unwrap() {
            all.push((line, row.map(|(at, mv)| (at.0, mv.0))));
        }
        all
    }

    #[test]
    fn date_and_time_apart_decimal_commas_and_bad_rows_are_met() {
        let text = "Date;Time;Volts\n16/12/2006;17:24:00;234,840\n16/12/2006;17:25:00;?\n16/12/2006;17:26:00;\n\
                    16/12/2006;25:00:00;234\n16/12/2006\n16/12/2006;17:29:00;233,3 V\n";
        let t = 1_166_289_840_000;
        assert_eq!(
            rows(text, layout()),
            [
                (2, Ok((t, 234_840))),
                (3, Err(RowFault::Value)),
                (4, Err(RowFault::NoValue)),
                (5, Err(RowFault::Time)),
                (6, Err(RowFault::MissingColumn)),
                (7, Ok((t + 300_000, 233_300))),
            ]
        );
    }

    #[test]
    fn a_column_that_is_not_there_is_said_with_those_that_are() {
        let error = Recording::open("a;b\n".as_bytes(), layout()).err().unwrap();
        assert!(error.contains("Date") && error.contains("a, b"), "{error}");
    }

    #[test]
    fn a_time_that_tells_no_format_asks_for_one() {
        let layout = Layout { time_format: None, ..layout() };
        let mut recording =
            Recording::open("Date;Time;V\n01/02/2026;10:00;230\n".as_bytes(), layout).unwrap();
        assert!(recording.next_row().unwrap_err().contains("--time-format"));
    }
}
