//! Between our types and the words, numbers and JSON of the tables' columns.

use rusqlite::Row;
use rusqlite::types::Type;
use serde::Serialize;
use serde::de::DeserializeOwned;

use crate::alarm::{AlarmKey, Priority, State};
use crate::quantity::{Millivolts, Utc};
use crate::reading::{ChannelId, Quality, Reading};

/// What a column holds makes no sense; becomes [`super::StoreError::Damaged`].
#[derive(Debug, thiserror::Error)]
#[error("`{found}` in column {column}")]
struct Nonsense {
    column: String,
    found: String,
}

fn nonsense(row: &Row<'_>, index: usize, found: String) -> rusqlite::Error {
    let column = row.as_ref().column_name(index).unwrap_or("?").to_owned();
    rusqlite::Error::FromSqlConversionFailure(index, Type::Text, Box::new(Nonsense { column, found }))
}

/// A text column that `parse` must understand.
pub(super) fn parsed<T>(
    row: &Row<'_>,
    index: usize,
    parse: impl Fn(&str) -> Option<T>,
) -> rusqlite::Result<T> {
    let text: String = row.get(index)?;
    parse(&text).ok_or_else(|| nonsense(row, index, text))
}

/// A column of JSON.
pub(super) fn from_json<T: DeserializeOwned>(row: &Row<'_>, index: usize) -> rusqlite::Result<T> {
    parsed(row, index, |text| serde_json::from_str(text).ok())
}

/// The text of a column of JSON.
pub(super) fn to_json<T: Serialize>(value: &T) -> rusqlite::Result<String> {
    serde_json::to_string(value).map_err(|e| rusqlite::Error::ToSqlConversionFailure(Box::new(e)))
}

/// A plain word for an enum whose variants carry nothing: the one that its JSON has.
pub(super) fn to_word<T: Serialize>(value: &T) -> rusqlite::Result<String> {
    Ok(to_json(value)?.trim_matches('"').to_owned())
}

/// The enum that such a word stands for.
pub(super) fn from_word<T: DeserializeOwned>(row: &Row<'_>, index: usize) -> rusqlite::Result<T> {
    parsed(row, index, |word| serde_json::from_value(serde_json::Value::from(word)).ok())
}

/// A priority from its word.
pub(super) fn priority(row: &Row<'_>, index: usize) -> rusqlite::Result<Priority> {
    parsed(row, index, |word| {
        [Priority::High, Priority::Medium, Priority::Low].into_iter().find(|p| p.word() == word)
    })
}

/// A state from its word and, in the next column, whether its condition holds.
pub(super) fn state(row: &Row<'_>, index: usize) -> rusqlite::Result<State> {
    let active: bool = row.get(index + 1)?;
    let all = [
        State::Normal,
        State::Unacknowledged,
        State::Acknowledged,
        State::ReturnedUnacknowledged,
        State::Shelved { active },
        State::Suppressed { active },
        State::OutOfService { active },
    ];
    parsed(row, index, |word| all.into_iter().find(|s| s.word() == word && s.is_active() == active))
}

/// An alarm's key from its condition and, in the next column, its subject.
pub(super) fn alarm_key(row: &Row<'_>, index: usize) -> rusqlite::Result<AlarmKey> {
    Ok(AlarmKey { condition: row.get(index)?, subject: row.get(index + 1)? })
}

/// A count or sequence number; none of ours is negative.
pub(super) fn unsigned(row: &Row<'_>, index: usize) -> rusqlite::Result<u64> {
    let number: i64 = row.get(index)?;
    u64::try_from(number).map_err(|_| nonsense(row, index, number.to_string()))
}

/// A quality from its number.
pub(super) fn quality(row: &Row<'_>, index: usize) -> rusqlite::Result<Quality> {
    let code: u8 = row.get(index)?;
    Quality::from_code(code).ok_or_else(|| nonsense(row, index, code.to_string()))
}

/// A reading from key, millivolts and quality in the first three columns.
pub(super) fn reading(row: &Row<'_>) -> rusqlite::Result<Reading> {
    let (channel, at) = from_key(row.get(0)?);
    Ok(Reading { channel, at, value: Millivolts(row.get(1)?), quality: quality(row, 2)? })
}

/// The row key of a channel's reading, hour or interval at `at`.
pub(super) fn key(channel: ChannelId, at: Utc) -> i64 {
    at.0.saturating_mul(256).saturating_add(i64::from(channel.0))
}

/// Whose key, and at which time.
pub(super) fn from_key(key: i64) -> (ChannelId, Utc) {
    (ChannelId((key & 255) as u8), Utc(key >> 8))
}
