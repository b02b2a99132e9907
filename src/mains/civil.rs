//! Local time: civil days of 23, 24 or 25 hours, and which of them are working days.

use chrono::{
    DateTime, Datelike, Days, Duration as Span, LocalResult, NaiveDate, NaiveDateTime, TimeZone, Weekday,
};
use chrono_tz::Tz;
use serde::Serialize;

use crate::quantity::Utc;

/// One day of the calendar at the site.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct CivilDay {
    /// Its date.
    pub date: NaiveDate,
    /// Its first moment; where the clocks skip midnight, the moment that they skip to.
    pub start: Utc,
    /// The first moment of the next day: 23, 24 or 25 hours later, as the clocks change.
    pub end: Utc,
}

/// Working days and weekends are looked at apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum DayKind {
    /// Monday to Friday; public holidays aren't known.
    Working,
    /// Saturday and Sunday.
    Weekend,
}

impl DayKind {
    /// The kind of `date`.
    pub fn of(date: NaiveDate) -> Self {
        match date.weekday() {
            Weekday::Sat | Weekday::Sun => DayKind::Weekend,
            _ => DayKind::Working,
        }
    }
}

/// The civil days in `time_zone` that hold any moment from `from` until just before `to`, whole, in order.
pub fn civil_days(from: Utc, to: Utc, time_zone: Tz) -> Vec<CivilDay> {
    let mut days = Vec::new();
    if to <= from {
        return days;
    }
    let mut date = local(from, time_zone).date();
    let mut start = start_of(date, time_zone);
    while start < to {
        let Some(next) = date.checked_add_days(Days::new(1)) else { break };
        let end = start_of(next, time_zone);
        // A date that the calendar skipped altogether (a move across the date line) has no length.
        if end > start {
            days.push(CivilDay { date, start, end });
        }
        (date, start) = (next, end);
    }
    days
}

/// What a clock on the wall shows at `at`.
pub(super) fn local(at: Utc, time_zone: Tz) -> NaiveDateTime {
    // The range of chrono is 262,000 years either way; a label beyond it is nobody's time.
    let utc = DateTime::from_timestamp_millis(at.0).unwrap_or_default();
    utc.with_timezone(&time_zone).naive_local()
}

/// The moment at which a clock on the wall shows `wall`: the first, if it shows it twice; the end of the skip, if
/// the clocks skip it.
pub(super) fn moment(wall: NaiveDateTime, time_zone: Tz) -> Utc {
    // Skips last half an hour to a day (at the date line), and end on a quarter hour.
    let from_here = (0..=26 * 4).map(|quarters| wall + Span::minutes(15 * quarters));
    let found = from_here.map(|wall| time_zone.from_local_datetime(&wall)).find_map(|result| match result {
        LocalResult::Single(at) | LocalResult::Ambiguous(at, _) => Some(at),
        LocalResult::None => None,
    });
    Utc(found.map_or_else(|| wall.and_utc().timestamp_millis(), |at| at.timestamp_millis()))
}

/// The moment at which `date` begins in `time_zone`.
pub fn start_of(date: NaiveDate, time_zone: Tz) -> Utc {
    moment(date.and_time(chrono::NaiveTime::MIN), time_zone)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn utc(text: &str) -> Utc {
        Utc(DateTime::parse_from_rfc3339(text).unwrap().timestamp_millis())
    }

    fn hours(from: &str, to: &str, zone: Tz) -> Vec<(String, i64)> {
        let days = civil_days(utc(from), utc(to), zone);
        days.iter().map(|d| (d.date.to_string(), (d.end.0 - d.start.0) / 3_600_000)).collect()
    }

    #[test]
    fn days_on_which_the_clocks_change_have_23_and_25_hours() {
        // Directive 2000/84/EC: the last Sundays of March and October, at 01:00 UTC.
        let spring = hours("2026-03-27T23:00:00Z", "2026-03-30T22:00:00Z", Tz::Europe__Berlin);
        assert_eq!(spring, [("2026-03-28".into(), 24), ("2026-03-29".into(), 23), ("2026-03-30".into(), 24)]);
        let autumn = hours("2026-10-24T22:00:00Z", "2026-10-25T23:00:00Z", Tz::Europe__Berlin);
        assert_eq!(autumn, [("2026-10-25".into(), 25)]);
    }

    #[test]
    fn a_day_that_has_no_midnight_starts_when_the_clocks_have_skipped_it() {
        // IANA time zone data: Beirut goes from 00:00 to 01:00 on the last Sunday of March.
        let days = civil_days(utc("2021-03-28T12:00:00Z"), utc("2021-03-28T12:00:01Z"), Tz::Asia__Beirut);
        assert_eq!(days.len(), 1);
        assert_eq!(days[0].start, utc("2021-03-27T22:00:00Z"));
        assert_eq!(days[0].end, utc("2021-03-28T21:00:00Z"));
    }

    #[test]
    fn a_date_that_the_calendar_skipped_is_no_day() {
        // IANA time zone data: Apia had no 2011-12-30.
        let days = hours("2011-12-29T12:00:00Z", "2011-12-31T09:00:00Z", Tz::Pacific__Apia);
        assert_eq!(days, [("2011-12-29".into(), 24), ("2011-12-31".into(), 24)]);
    }

    #[test]
    fn a_stretch_inside_a_day_gives_that_day_whole_and_an_empty_one_none() {
        let day = hours("2026-06-01T10:00:00Z", "2026-06-01T10:00:01Z", Tz::Europe__London);
        assert_eq!(day, [("2026-06-01".into(), 24)]);
        assert_eq!(hours("2026-06-01T10:00:00Z", "2026-06-01T10:00:00Z", Tz::Europe__London), []);
    }

    #[test]
    fn saturday_and_sunday_are_the_weekend() {
        let kinds: Vec<DayKind> =
            (1..=7).map(|d| DayKind::of(NaiveDate::from_ymd_opt(2026, 6, d).unwrap())).collect();
        use DayKind::{Weekend, Working};
        assert_eq!(kinds, [Working, Working, Working, Working, Working, Weekend, Weekend]);
    }
}
