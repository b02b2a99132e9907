//! Times and spans as they are shown: local, with the offset where a program reads them.

use std::time::Duration;

use chrono::{DateTime, SecondsFormat};
use chrono_tz::Tz;
use serde::{Serialize, Serializer};

use crate::quantity::Utc;

/// A time in the site's zone.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct LocalTime(DateTime<Tz>);

impl LocalTime {
    /// `utc` as the site's clocks show it. A time beyond what a calendar can hold is shown as 1970.
    pub fn of(utc: Utc, zone: Tz) -> Self {
        LocalTime(DateTime::from_timestamp_millis(utc.0).unwrap_or_default().with_timezone(&zone))
    }

    /// RFC 3339 with offset, to the second: `2026-12-01T20:41:07+00:00`.
    pub fn rfc3339(self) -> String {
        self.0.to_rfc3339_opts(SecondsFormat::Secs, false)
    }

    /// For people: `Tue 1 Dec 20:41:07`.
    pub fn people(self) -> String {
        self.0.format("%a %-d %b %H:%M:%S").to_string()
    }

    /// For people, where seconds would promise too much: `Tue 1 Dec 20:40`.
    pub fn to_the_minute(self) -> String {
        self.0.format("%a %-d %b %H:%M").to_string()
    }

    /// For a heading: `Monday 30 November 2026`.
    pub fn day(self) -> String {
        self.0.format("%A %-d %B %Y").to_string()
    }

    /// For people who read it elsewhere or later: `18:42:10 CEST on Tue 6 Oct 2026`. The zone's short name tells the
    /// two autumn hours apart.
    pub fn in_full(self) -> String {
        self.0.format("%H:%M:%S %Z on %a %-d %b %Y").to_string()
    }
}

impl Serialize for LocalTime {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_str(&self.rfc3339())
    }
}

/// A span in the one or two units that matter: `7 s`, `4 min 10 s`, `3 h 5 min`, `2 days 4 h`.
pub fn span(length: Duration) -> String {
    let s = length.as_secs();
    let two = |big: u64, big_unit: &str, small: u64, small_unit: &str| match small {
        0 => format!("{big} {big_unit}"),
        _ => format!("{big} {big_unit} {small} {small_unit}"),
    };
    match s {
        0..60 => format!("{s} s"),
        60..3_600 => two(s / 60, "min", s % 60, "s"),
        3_600..86_400 => two(s / 3_600, "h", s % 3_600 / 60, "min"),
        86_400..172_800 => two(1, "day", s % 86_400 / 3_600, "h"),
        _ => two(s / 86_400, "days", s % 86_400 / 3_600, "h"),
    }
}

/// How long before `now` something was: `12 s ago`; `just now` within the same second or if it lies ahead.
pub fn ago(then: Utc, now: Utc) -> String {
    match now.0 - then.0 {
        ..1_000 => "just now".to_owned(),
        ms => format!("{} ago", span(Duration::from_millis(ms as u64))),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spans_are_said_in_the_units_that_matter() {
        let said = |s| span(Duration::from_secs(s));
        assert_eq!(
            [said(7), said(250), said(240), said(11_100)],
            ["7 s", "4 min 10 s", "4 min", "3 h 5 min"]
        );
        assert_eq!([said(86_400), said(187_200)], ["1 day", "2 days 4 h"]);
    }

    #[test]
    fn local_times_carry_the_offset_of_their_season() {
        let winter = LocalTime::of(Utc(1_796_157_667_000), chrono_tz::Europe::Berlin);
        let summer = LocalTime::of(Utc(1_783_000_000_000), chrono_tz::Europe::Berlin);
        assert_eq!(winter.rfc3339(), "2026-12-01T21:41:07+01:00");
        assert_eq!(winter.people(), "Tue 1 Dec 21:41:07");
        assert!(summer.rfc3339().ends_with("+02:00"));
    }

    #[test]
    fn the_two_half_past_twos_of_the_autumn_night_are_told_apart() {
        // The European Union's zones leave summer time at 01:00 UTC on the last Sunday of October (from memory).
        let of = |ms| LocalTime::of(Utc(ms), chrono_tz::Europe::Berlin);
        let (before, after) = (of(1_792_888_200_000), of(1_792_891_800_000)); // 00:30Z and 01:30Z on 25 October 2026
        assert_eq!(before.in_full(), "02:30:00 CEST on Sun 25 Oct 2026");
        assert_eq!(after.in_full(), "02:30:00 CET on Sun 25 Oct 2026");
        assert_eq!(before.rfc3339(), "2026-10-25T02:30:00+02:00");
        assert_eq!(after.rfc3339(), "2026-10-25T02:30:00+01:00");
    }
}
