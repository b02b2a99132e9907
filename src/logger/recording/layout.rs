//! How a recording is laid out.

use chrono_tz::Tz;

use super::TimeFormat;

/// Which column, as the owner names it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Column {
    /// By its name in the header.
    Name(String),
    /// By its number, the first is 1.
    Number(usize),
}

impl Column {
    /// A number, or else a name.
    pub fn from_word(word: &str) -> Self {
        match word.parse() {
            Ok(number) if number > 0 => Column::Number(number),
            _ => Column::Name(word.to_owned()),
        }
    }

    /// Its index, by the header; `None` if there is no such column.
    pub(super) fn index(&self, header: &csv::ByteRecord) -> Option<usize> {
        match self {
            Column::Number(number) => Some(number - 1),
            Column::Name(name) => header.iter().position(|field| {
                let field = field.strip_prefix(b"\xEF\xBB\xBF").unwrap_or(field);
                field.trim_ascii().eq_ignore_ascii_case(name.trim().as_bytes())
            }),
        }
    }
}

/// Where the time stands.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct TimeColumns {
    /// The day, where it has a column of its own.
    pub date: Option<Column>,
    /// The time, or day and time together.
    pub time: Column,
}

/// The layout of a recording.
#[derive(Clone, Debug, PartialEq)]
pub struct Layout {
    /// Between fields.
    pub separator: u8,
    /// Before the decimals: a point or a comma.
    pub decimal: u8,
    /// Lines before the header, or before the first row where there is none.
    pub skip_lines: u64,
    /// Whether the first line names the columns.
    pub header: bool,
    /// Where the time stands.
    pub time: TimeColumns,
    /// How it's written; `None`: found from the first row.
    pub time_format: Option<TimeFormat>,
    /// The zone of times that bear no offset.
    pub zone: Tz,
    /// Where the value stands.
    pub value: Column,
    /// Volts for one of the recording's units.
    pub scale: f64,
}

/// The separator that parts `line` into the most fields: comma, semicolon, tab or bar; a comma if none does.
pub fn guess_separator(line: &str) -> u8 {
    // A semicolon or tab before a comma of the same count: then the comma is a decimal one.
    let candidates = [b';', b'\t', b'|', b','];
    let count = |separator: u8| line.bytes().filter(|b| *b == separator).count();
    candidates
        .into_iter()
        .rev()
        .max_by_key(|separator| count(*separator))
        .filter(|s| count(*s) > 0)
        .unwrap_or(b',')
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_separator_is_the_one_that_parts_most_and_a_decimal_comma_does_not_hide_it() {
        assert_eq!(guess_separator("time,volts"), b',');
        assert_eq!(guess_separator("16/12/2006;17:24:00;234,840"), b';');
        assert_eq!(guess_separator("time\tvolts"), b'\t');
        assert_eq!(guess_separator("2006-12-16;234,8"), b';');
        assert_eq!(guess_separator("234.840"), b',');
    }
}
