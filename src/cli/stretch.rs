//! The stretch of time that a command looks at: `--from`/`--to`, `--week 2026-W48`, `--last "7 days"`.

use anyhow::{Context, bail};
use chrono::{DateTime, Days, NaiveDate, NaiveDateTime, NaiveTime, TimeZone, Weekday};
use chrono_tz::Tz;
use clap::Args;

use crate::quantity::Utc;

/// The arguments that name a stretch of time; times are the site's own unless they bear an offset.
#[derive(Clone, Debug, Default, Args)]
pub(super) struct StretchArguments {
    /// From this time: `2026-11-30`, `2026-11-30 18:00`, or RFC 3339 with its offset.
    #[arg(long, value_name = "TIME", conflicts_with_all = ["week", "last"])]
    from: Option<String>,
    /// Until before this time; a day alone means its end.
    #[arg(long, value_name = "TIME", conflicts_with_all = ["week", "last"])]
    to: Option<String>,
    /// One week from Monday to Sunday by its ISO 8601 number: `2026-W48`.
    #[arg(long, value_name = "WEEK", conflicts_with = "last")]
    week: Option<String>,
    /// The time until now: `7 days`, `12 h`.
    #[arg(long, value_name = "SPAN")]
    last: Option<String>,
}

/// From a time until before another.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Stretch {
    pub(super) from: Utc,
    pub(super) to: Utc,
}

impl StretchArguments {
    /// The stretch that was asked for; `None` where nothing was said.
    pub(super) fn resolve(&self, zone: Tz, now: Utc) -> anyhow::Result<Option<Stretch>> {
        let stretch = if let Some(week) = &self.week {
            iso_week(week, zone)?
        } else if let Some(last) = &self.last {
            let span = humantime::parse_duration(last)
                .with_context(|| format!("--last {last}: expected a span such as \"7 days\""))?;
            Stretch { from: Utc(now.0 - span.as_millis() as i64), to: now }
        } else if self.from.is_some() || self.to.is_some() {
            let from = self.from.as_deref().map(|text| time(text, zone, Edge::Start)).transpose()?;
            let to = self.to.as_deref().map(|text| time(text, zone, Edge::End)).transpose()?;
            Stretch { from: from.unwrap_or(Utc(0)), to: to.unwrap_or(now) }
        } else {
            return Ok(None);
        };
        if stretch.from >= stretch.to {
            bail!(
                "the stretch of time ends before it starts; give --from the earlier time and --to the later one"
            );
        }
        Ok(Some(stretch))
    }
}

#[derive(Clone, Copy, PartialEq, Eq)]
enum Edge {
    Start,
    End,
}

/// A week of local days: 167, 168 or 169 hours.
fn iso_week(text: &str, zone: Tz) -> anyhow::Result<Stretch> {
    let monday = text
        .split_once("-W")
        .and_then(|(year, week)| {
            NaiveDate::from_isoywd_opt(year.parse().ok()?, week.parse().ok()?, Weekday::Mon)
        })
        .with_context(|| format!("--week {text}: expected a week such as 2026-W48"))?;
    Ok(week_from(monday, zone))
}

/// The week of local days from `monday`.
fn week_from(monday: NaiveDate, zone: Tz) -> Stretch {
    Stretch { from: midnight(monday, zone), to: midnight(monday + Days::new(7), zone) }
}

/// A time by RFC 3339, or in the site's zone.
fn time(text: &str, zone: Tz, edge: Edge) -> anyhow::Result<Utc> {
    if let Ok(exact) = DateTime::parse_from_rfc3339(text) {
        return Ok(Utc(exact.timestamp_millis()));
    }
    if let Ok(day) = NaiveDate::parse_from_str(text, "%Y-%m-%d") {
        return Ok(midnight(if edge == Edge::End { day + Days::new(1) } else { day }, zone));
    }
    for format in ["%Y-%m-%d %H:%M", "%Y-%m-%dT%H:%M", "%Y-%m-%d %H:%M:%S", "%Y-%m-%dT%H:%M:%S"] {
        if let Ok(local) = NaiveDateTime::parse_from_str(text, format) {
            return Ok(first_instant(local, zone));
        }
    }
    bail!(
        "{text} is no time: expected 2026-11-30, 2026-11-30 18:00, or RFC 3339 such as 2026-11-30T18:00:00+01:00"
    )
}

/// When the local day begins.
fn midnight(day: NaiveDate, zone: Tz) -> Utc {
    first_instant(day.and_time(NaiveTime::MIN), zone)
}

/// The first instant at which the zone's clocks show `local` or, where they skip it, something later.
fn first_instant(local: NaiveDateTime, zone: Tz) -> Utc {
    // No zone skips more than a day.
    let minutes = (0..=24 * 60).map(|m| local + chrono::TimeDelta::minutes(m));
    let instant = minutes.filter_map(|l| zone.from_local_datetime(&l).earliest()).next();
    Utc(instant.map_or(local.and_utc().timestamp_millis(), |t| t.timestamp_millis()))
}

#[cfg(test)]
mod tests {
    use super::*;

    const LISBON: Tz = chrono_tz::Europe::Lisbon;

    fn hours(arguments: StretchArguments) -> f64 {
        let stretch = arguments.resolve(LISBON, Utc(1_796_148_000_000)).unwrap().unwrap();
        (stretch.to.0 - stretch.from.0) as f64 / 3_600_000.0
    }

    fn week(text: &str) -> StretchArguments {
        StretchArguments { week: Some(text.to_owned()), ..StretchArguments::default() }
    }

    #[test]
    fn a_week_has_one_hour_less_or_more_where_the_clocks_change() {
        // Lisbon changes on 2026-03-29 (Sunday of W13) and 2026-10-25 (Sunday of W43), by the IANA time zone data.
        assert_eq!(hours(week("2026-W13")), 167.0);
        assert_eq!(hours(week("2026-W43")), 169.0);
        assert_eq!(hours(week("2026-W48")), 168.0);
    }

    #[test]
    fn a_day_alone_is_meant_whole() {
        let day = |from: &str, to: &str| StretchArguments {
            from: Some(from.to_owned()),
            to: Some(to.to_owned()),
            ..StretchArguments::default()
        };
        assert_eq!(hours(day("2026-11-30", "2026-11-30")), 24.0);
        assert_eq!(hours(day("2026-11-30 18:00", "2026-11-30T18:30:00")), 0.5);
        assert_eq!(hours(day("2026-11-30T18:00:00+01:00", "2026-11-30T18:00:00Z")), 1.0);
        assert_eq!(hours(day("2026-10-25", "2026-10-25")), 25.0);
    }

    #[test]
    fn what_makes_no_sense_is_refused_with_an_example() {
        let said =
            |arguments: StretchArguments| format!("{:#}", arguments.resolve(LISBON, Utc(0)).unwrap_err());
        assert!(said(week("2026-W60")).contains("2026-W48"));
        let from = StretchArguments { from: Some("yesterday".into()), ..StretchArguments::default() };
        assert!(said(from).contains("2026-11-30"));
        let backwards = StretchArguments {
            from: Some("2026-11-30".into()),
            to: Some("2026-11-01".into()),
            ..StretchArguments::default()
        };
        assert!(said(backwards).contains("before it starts"));
    }
}
