//! How a time is written: for people in the site's zone, for programs as RFC 3339 with offset.

use chrono::{DateTime, SecondsFormat};
use chrono_tz::Tz;

use crate::quantity::Utc;

/// A time for people, in `zone`: `18:42:10 CEST on Tue 6 Oct 2026`. The zone's short name tells the two autumn hours
/// apart.
pub fn local_time(at: Utc, zone: Tz) -> String {
    match in_zone(at, zone) {
        Some(local) => local.format("%H:%M:%S %Z on %a %-d %b %Y").to_string(),
        None => beyond_the_calendar(at),
    }
}

/// A time for programs: RFC 3339 with milliseconds and the offset of `zone`, `2026-10-06T18:42:10.000+02:00`.
pub fn rfc3339(at: Utc, zone: Tz) -> String {
    match in_zone(at, zone) {
        Some(local) => local.to_rfc3339_opts(SecondsFormat::Millis, false),
        None => beyond_the_calendar(at),
    }
}

fn in_zone(at: Utc, zone: Tz) -> Option<DateTime<Tz>> {
    DateTime::from_timestamp_millis(at.0).map(|utc| utc.with_timezone(&zone))
}

/// A time that no calendar date stands for (some 260,000 years away) still says what it was.
fn beyond_the_calendar(at: Utc) -> String {
    format!("{} ms since 1970", at.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    // Expected local times are those of the IANA zone Europe/Berlin: the last Sunday of October 2026 is the 25th, and
    // at 01:00 UTC 03:00 CEST becomes 02:00 CET (rule EU, from memory).
    const BEFORE: Utc = Utc(1_792_888_200_000); // 2026-10-25T00:30:00Z
    const AFTER: Utc = Utc(1_792_891_800_000); // 2026-10-25T01:30:00Z

    #[test]
    fn the_two_half_past_twos_of_the_autumn_night_are_told_apart() {
        assert_eq!(local_time(BEFORE, Tz::Europe__Berlin), "02:30:00 CEST on Sun 25 Oct 2026");
        assert_eq!(local_time(AFTER, Tz::Europe__Berlin), "02:30:00 CET on Sun 25 Oct 2026");
        assert_eq!(rfc3339(BEFORE, Tz::Europe__Berlin), "2026-10-25T02:30:00.000+02:00");
        assert_eq!(rfc3339(AFTER, Tz::Europe__Berlin), "2026-10-25T02:30:00.000+01:00");
    }

    #[test]
    fn a_time_beyond_the_calendar_is_said_and_does_not_panic() {
        assert_eq!(rfc3339(Utc(i64::MAX), Tz::UTC), "9223372036854775807 ms since 1970");
        assert_eq!(local_time(Utc(i64::MIN), Tz::UTC), "-9223372036854775808 ms since 1970");
    }
}
