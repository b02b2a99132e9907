//! A recording's times: RFC 3339, local times of a zone, seconds or milliseconds since 1970, or a format of one's own.

use chrono::{DateTime, NaiveDate, NaiveDateTime, TimeDelta, TimeZone};
use chrono_tz::Tz;

use super::RowFault;
use crate::quantity::Utc;

/// How times are written.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum TimeFormat {
    /// Year first: `2026-11-30 18:00:00`, with `T` or a blank, seconds and their decimals and an offset optional.
    YearFirst,
    /// Seconds since 1970, decimals allowed.
    EpochSeconds,
    /// Milliseconds since 1970.
    EpochMilliseconds,
    /// By the letters of strftime, such as `%d/%m/%Y %H:%M:%S`.
    Letters(String),
}

impl TimeFormat {
    /// The format that `text` seems to be written in; `None` where it's none that tells itself, such as one that starts
    /// with a day or a month.
    pub fn guess(text: &str) -> Option<Self> {
        let text = text.trim();
        let number = text.split('.').next().unwrap_or_default();
        if !number.is_empty() && number.bytes().all(|b| b.is_ascii_digit()) {
            return match number.len() {
                9..=10 => Some(TimeFormat::EpochSeconds),
                12..=13 => Some(TimeFormat::EpochMilliseconds),
                _ => None,
            };
        }
        year_first(text.as_bytes()).map(|_| TimeFormat::YearFirst)
    }
}

/// Reads times of one format and zone, one after the other.
#[derive(Debug)]
pub struct TimeReader {
    format: TimeFormat,
    zone: Tz,
    /// Local hour (hours since 1970) and the offset that holds throughout it, ms.
    hour: Option<(i64, i64)>,
    previous: Option<Utc>,
    ambiguous: u64,
}

impl TimeReader {
    /// For times of `format`; those without an offset are local ones of `zone`.
    pub fn new(format: TimeFormat, zone: Tz) -> Self {
        TimeReader { format, zone, hour: None, previous: None, ambiguous: 0 }
    }

    /// How many times fell into an hour that the clocks showed twice. They were taken as the first of the two, or as the
    /// second where the first would have gone back behind the row before.
    pub fn ambiguous(&self) -> u64 {
        self.ambiguous
    }

    /// The time that `text` says.
    pub fn read(&mut self, text: &str) -> Result<Utc, RowFault> {
        let text = text.trim();
        let at = match &self.format {
            TimeFormat::EpochSeconds => {
                let seconds: f64 = text.parse().map_err(|_| RowFault::Time)?;
                Utc((seconds * 1000.0).round() as i64)
            }
            TimeFormat::EpochMilliseconds => Utc(text.parse().map_err(|_| RowFault::Time)?),
            TimeFormat::YearFirst => match year_first(text.as_bytes()).ok_or(RowFault::Time)? {
                (local_ms, Some(offset_ms)) => Utc(local_ms - offset_ms),
                (local_ms, None) => self.local(local_ms)?,
            },
            TimeFormat::Letters(letters) => match DateTime::parse_from_str(text, letters) {
                Ok(exact) => Utc(exact.timestamp_millis()),
                Err(_) => {
                    let local = NaiveDateTime::parse_from_str(text, letters).map_err(|_| RowFault::Time)?;
                    self.local(local.and_utc().timestamp_millis())?
                }
            },
        };
        self.previous = Some(at);
        Ok(at)
    }

    /// The instant at which the zone's clocks show `local_ms`.
    fn local(&mut self, local_ms: i64) -> Result<Utc, RowFault> {
        let hour = local_ms.div_euclid(3_600_000);
        if let Some((known, offset_ms)) = self.hour
            && known == hour
        {
            return Ok(Utc(local_ms - offset_ms));
        }
        let (first, last) = (self.offset(hour * 3_600_000), self.offset(hour * 3_600_000 + 3_599_999));
        if let (Some([a, b]), Some([c, d])) = (first, last)
            && a == b
            && b == c
            && c == d
        {
            self.hour = Some((hour, a));
            return Ok(Utc(local_ms - a));
        }
        let [first, second] = self.offset(local_ms).ok_or(RowFault::SkippedByTheClocks)?;
        if first == second {
            return Ok(Utc(local_ms - first));
        }
        self.ambiguous += 1;
        let early = Utc(local_ms - first);
        let goes_back = self.previous.is_some_and(|previous| early < previous);
        Ok(if goes_back { Utc(local_ms - second) } else { early })
    }

    /// The offsets, ms, that the zone may have when its clocks show `local_ms`: earliest instant first.
    fn offset(&self, local_ms: i64) -> Option<[i64; 2]> {
        let local = DateTime::from_timestamp_millis(local_ms)?.naive_utc();
        let found = self.zone.from_local_datetime(&local);
        let offset = |t: DateTime<Tz>| local_ms - t.timestamp_millis();
        Some([offset(found.earliest()?), offset(found.latest()?)])
    }
}

/// `YYYY-MM-DD`, `T` or a blank, `HH:MM`, then optional `:SS`, decimals and `Z` or `±HH:MM`: local milliseconds since
/// 1970 and the offset. `/` and `.` may stand for the dashes. By hand: a year of readings is thirty million of these.
fn year_first(text: &[u8]) -> Option<(i64, Option<i64>)> {
    let (day, rest) = text.split_at_checked(10)?;
    let dash = day[4];
    if !matches!(dash, b'-' | b'/' | b'.') || day[7] != dash {
        return None;
    }
    let days = civil_days(number(&day[..4])?, number(&day[5..7])?, number(&day[8..])?)?;
    let (hours, rest) = match rest {
        [] => return Some((days * 86_400_000, None)),
        [b'T' | b't' | b' ', rest @ ..] => rest.split_at_checked(5)?,
        _ => return None,
    };
    let (hour, minute) = (number(&hours[..2])?, number(&hours[3..])?);
    if hours[2] != b':' || hour > 23 || minute > 59 {
        return None;
    }
    let (seconds, rest) = match rest {
        [b':', a, b, rest @ ..] => (number(&[*a, *b]).filter(|s| *s < 60)?, rest),
        _ => (0, rest),
    };
    let (ms, rest) = match rest {
        [b'.' | b',', rest @ ..] => {
            let digits = rest.iter().take_while(|b| b.is_ascii_digit()).count();
            let mut ms = 0;
            for place in 0..3 {
                ms = ms * 10
                    + rest.get(place).filter(|b| b.is_ascii_digit()).map_or(0, |b| i64::from(b - b'0'));
            }
            if digits == 0 {
                return None;
            }
            (ms, &rest[digits..])
        }
        _ => (0, rest),
    };
    let local = days * 86_400_000 + (hour * 3600 + minute * 60 + seconds) * 1000 + ms;
    match rest {
        [] => Some((local, None)),
        [b'Z' | b'z'] => Some((local, Some(0))),
        [sign @ (b'+' | b'-'), a, b, rest @ ..] => {
            let minutes = match rest {
                [b':', c, d] | [c, d] => number(&[*c, *d])?,
                [] => 0,
                _ => return None,
            };
            let offset = (number(&[*a, *b])? * 60 + minutes) * 60_000;
            Some((local, Some(if *sign == b'-' { -offset } else { offset })))
        }
        _ => None,
    }
}

fn number(digits: &[u8]) -> Option<i64> {
    digits.iter().try_fold(0, |n, b| b.is_ascii_digit().then(|| n * 10 + i64::from(b - b'0')))
}

/// Days since 1970 of a day of the Gregorian calendar; `None` if there's no such day.
fn civil_days(year: i64, month: i64, day: i64) -> Option<i64> {
    let date = NaiveDate::from_ymd_opt(year as i32, month as u32, day as u32)?;
    Some((date - NaiveDate::default()).num_days().max(TimeDelta::MIN.num_days()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn paris(texts: &[&str]) -> Vec<Result<i64, RowFault>> {
        let mut reader = TimeReader::new(TimeFormat::YearFirst, chrono_tz::Europe::Paris);
        texts.iter().map(|text| reader.read(text).map(|at| at.0 / 1000)).collect()
    }

    #[test]
    fn the_hour_shown_twice_is_read_in_order_and_the_skipped_one_is_refused() {
        // Paris: 2026-10-25 03:00 UTC+2 becomes 02:00 UTC+1; 2026-03-29 02:00 becomes 03:00 (IANA time zone data).
        let read = paris(&[
            "2026-10-25 02:30:00",
            "2026-10-25 02:59:00",
            "2026-10-25 02:00:00",
            "2026-10-25 03:00:00",
        ]);
        let first = 1_792_888_200; // 2026-10-25T00:30:00Z
        assert_eq!(read, [Ok(first), Ok(first + 29 * 60), Ok(first + 30 * 60), Ok(first + 90 * 60)]);
        assert_eq!(paris(&["2026-03-29 02:30:00"]), [Err(RowFault::SkippedByTheClocks)]);
    }

    #[test]
    fn formats_that_tell_themselves_are_found_and_the_others_are_not_guessed() {
        for (text, format) in [
            ("2026-11-30T18:00:00Z", Some(TimeFormat::YearFirst)),
            ("2026/11/30 18:00", Some(TimeFormat::YearFirst)),
            ("1796148000", Some(TimeFormat::EpochSeconds)),
            ("1796148000.25", Some(TimeFormat::EpochSeconds)),
            ("1796148000000", Some(TimeFormat::EpochMilliseconds)),
            ("11/12/2026 18:00", None),
            ("soon", None),
        ] {
            assert_eq!(TimeFormat::guess(text), format, "{text}");
        }
    }

    #[test]
    fn a_format_of_ones_own_is_read_by_its_letters() {
        let mut reader = TimeReader::new(TimeFormat::Letters("%d/%m/%Y %H:%M:%S".into()), chrono_tz::UTC);
        assert_eq!(reader.read("16/12/2006 17:24:00"), Ok(Utc(1_166_289_840_000)));
        assert_eq!(reader.read("2006-12-16 17:24:00"), Err(RowFault::Time));
    }

    proptest! {
        #[test]
        fn what_the_library_writes_is_read_back(ms in 0..4_102_444_800_000_i64, offset_min in -14 * 60..14 * 60_i32) {
            let offset = chrono::FixedOffset::east_opt(offset_min * 60).unwrap();
            let text = DateTime::from_timestamp_millis(ms).unwrap().with_timezone(&offset).to_rfc3339();
            let mut reader = TimeReader::new(TimeFormat::YearFirst, chrono_tz::UTC);
            prop_assert_eq!(reader.read(&text), Ok(Utc(ms)));
        }

        #[test]
        fn no_text_makes_it_panic(text in "\\PC{0,40}") {
            let _ = TimeFormat::guess(&text);
            let _ = TimeReader::new(TimeFormat::YearFirst, chrono_tz::UTC).read(&text);
        }
    }
}
