//! The household's day: mains, or a rail, by local time of day; the highest stretches; time above a level by day.

use std::collections::BTreeMap;
use std::time::Duration;

use chrono::Timelike;
use chrono_tz::Tz;
use serde::Serialize;

use super::civil::{CivilDay, DayKind, civil_days, local};
use super::events::Sample;
use super::interval::Interval;
use super::percentile::Distribution;
use crate::quantity::Utc;

/// What one stretch of the local day was like, over all days looked at.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Slot {
    /// Its start, minutes after midnight by the clock on the wall.
    pub minute: u32,
    /// Mean of the values, V.
    pub mean_v: f64,
    /// Their 5th percentile (linear, type 7), V.
    pub low_v: f64,
    /// Their 95th, V.
    pub high_v: f64,
    /// How many values.
    pub count: usize,
}

/// The day by local time, working days and weekends apart. A slot without a value is left out.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct DayProfile {
    /// Monday to Friday.
    pub working: Vec<Slot>,
    /// Saturday and Sunday.
    pub weekend: Vec<Slot>,
}

/// The day's profile of `samples` (10-minute means of mains, say, or the rail that each gives) in slots of `slot`,
/// whole minutes and at least one. Where the clocks go back, both hours of the same name count in the same slots.
pub fn day_profile(samples: impl IntoIterator<Item = Sample>, time_zone: Tz, slot: Duration) -> DayProfile {
    let (working, weekend): (Vec<Sample>, Vec<Sample>) = samples
        .into_iter()
        .partition(|(at, _)| DayKind::of(local(*at, time_zone).date()) == DayKind::Working);
    DayProfile {
        working: by_time_of_day(working, time_zone, slot),
        weekend: by_time_of_day(weekend, time_zone, slot),
    }
}

/// The same over all days together.
pub fn by_time_of_day(samples: impl IntoIterator<Item = Sample>, time_zone: Tz, slot: Duration) -> Vec<Slot> {
    let slot_minutes = (slot.as_secs() / 60).max(1) as u32;
    let mut slots: BTreeMap<u32, Vec<f64>> = BTreeMap::new();
    for (at, volts) in samples.into_iter().filter(|(_, volts)| volts.is_finite()) {
        let wall = local(at, time_zone);
        let minute = wall.hour() * 60 + wall.minute();
        slots.entry(minute / slot_minutes * slot_minutes).or_default().push(volts);
    }
    let describe = |(minute, values): (u32, Vec<f64>)| {
        let count = values.len();
        let mean_v = values.iter().sum::<f64>() / count as f64;
        let spread = Distribution::new(values);
        Some(Slot { minute, mean_v, low_v: spread.percentile(5.0)?, high_v: spread.percentile(95.0)?, count })
    };
    slots.into_iter().filter_map(describe).collect()
}

/// The `count` intervals with the highest r.m.s. value, highest first, the earlier first where two are alike.
/// For the highest quarter hours of a week give it a week's intervals of 15 minutes
/// ([`intervals_of`](super::intervals_of)).
pub fn highest(intervals: &[Interval], count: usize) -> Vec<Interval> {
    let mut all = intervals.to_vec();
    all.sort_by(|a, b| b.rms_v.total_cmp(&a.rms_v).then(a.start.cmp(&b.start)));
    all.truncate(count);
    all
}

/// How much of one civil day a value was above a level.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DayAbove {
    /// The day.
    pub day: CivilDay,
    /// How much of it is recorded.
    pub recorded: Duration,
    /// How much of that was above the level.
    pub above: Duration,
}

impl DayAbove {
    /// Share of the recorded part that was above, 0 to 1; `None` if nothing is recorded.
    pub fn share(&self) -> Option<f64> {
        (!self.recorded.is_zero()).then(|| self.above.as_secs_f64() / self.recorded.as_secs_f64())
    }
}

/// Time above `level_v` for each civil day that touches the time from `from` until just before `to`, days without a
/// sample included. Samples come in the order of time and each stand for `sample_period` from their time on; one
/// belongs to the day in which it starts. Those before `from`, or from `to` on, are left aside.
pub fn above_by_day(
    samples: impl IntoIterator<Item = Sample>,
    sample_period: Duration,
    level_v: f64,
    from: Utc,
    to: Utc,
    time_zone: Tz,
) -> Vec<DayAbove> {
    let nothing = |day| DayAbove { day, recorded: Duration::ZERO, above: Duration::ZERO };
    let mut days: Vec<DayAbove> = civil_days(from, to, time_zone).into_iter().map(nothing).collect();
    let mut today = 0;
    for (at, volts) in samples.into_iter().filter(|(at, v)| (from..to).contains(at) && v.is_finite()) {
        while days.get(today).is_some_and(|d| d.day.end <= at) {
            today += 1;
        }
        let Some(day) = days.get_mut(today) else { break };
        day.recorded += sample_period;
        if volts > level_v {
            day.above += sample_period;
        }
    }
    days
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::mains::INTERVAL;
    use chrono::DateTime;

    fn utc(text: &str) -> Utc {
        Utc(DateTime::parse_from_rfc3339(text).unwrap().timestamp_millis())
    }

    /// Ten-minute samples from `from` until before `to`, each of the value that `volts` gives for its time.
    fn samples(from: &str, to: &str, volts: impl Fn(Utc) -> f64) -> Vec<Sample> {
        let times = (utc(from).0..utc(to).0).step_by(INTERVAL.as_millis() as usize).map(Utc);
        times.map(|at| (at, volts(at))).collect()
    }

    #[test]
    fn working_days_and_weekends_are_told_apart_by_local_date() {
        // Saturday 2026-06-06 begins at 22:00 UTC of Friday in Berlin.
        let saturday = utc("2026-06-05T22:00:00Z");
        let week = samples("2026-05-31T22:00:00Z", "2026-06-07T22:00:00Z", |at| {
            if at < saturday { 240.0 } else { 230.0 }
        });
        let profile = day_profile(week, Tz::Europe__Berlin, INTERVAL);
        assert_eq!((profile.working.len(), profile.weekend.len()), (144, 144));
        assert!(profile.working.iter().all(|s| (s.mean_v, s.count) == (240.0, 5)));
        assert!(profile.weekend.iter().all(|s| (s.mean_v, s.count) == (230.0, 2)));
    }

    #[test]
    fn the_band_of_a_slot_spans_its_5th_to_95th_percentile() {
        // Twenty-one days of one slot each, 220 to 240 V in steps of 1 V: type 7 puts 5 % at 221 V, 95 % at 239 V.
        let days = (0..21).map(|d| (Utc(86_400_000 * d), 220.0 + d as f64));
        let slots = by_time_of_day(days, Tz::UTC, INTERVAL);
        assert_eq!(slots.len(), 1);
        let slot = slots[0];
        assert!((slot.low_v - 221.0).abs() < 1e-9 && (slot.high_v - 239.0).abs() < 1e-9, "{slot:?}");
        assert!((slot.mean_v - 230.0).abs() < 1e-9);
    }

    #[test]
    fn a_slot_follows_the_clock_on_the_wall_through_a_change_of_the_clocks() {
        // High from 20:00 to 21:00 in Berlin on the days around 2026-10-25 (UTC+2 before, UTC+1 after).
        let evening = |at: Utc| {
            let hour = local(at, Tz::Europe__Berlin).hour();
            if hour == 20 { 250.0 } else { 230.0 }
        };
        let days = samples("2026-10-23T22:00:00Z", "2026-10-26T23:00:00Z", evening);
        let slots = by_time_of_day(days, Tz::Europe__Berlin, Duration::from_secs(3600));
        assert_eq!(slots.len(), 24);
        for slot in slots {
            let expected = if slot.minute == 20 * 60 { 250.0 } else { 230.0 };
            assert_eq!(slot.mean_v, expected, "{slot:?}");
            // The hour from 02:00 came twice on the Sunday.
            assert_eq!(slot.count, if slot.minute == 120 { 24 } else { 18 }, "{slot:?}");
        }
    }

    #[test]
    fn time_above_is_counted_by_civil_days_of_23_24_and_25_hours() {
        for (from, to, hours) in [
            ("2026-03-28T23:00:00Z", "2026-03-29T22:00:00Z", 23),
            ("2026-06-01T22:00:00Z", "2026-06-02T22:00:00Z", 24),
            ("2026-10-24T22:00:00Z", "2026-10-25T23:00:00Z", 25),
        ] {
            let all = samples(from, to, |_| 250.0);
            let days = above_by_day(all, INTERVAL, 249.9, utc(from), utc(to), Tz::Europe__Berlin);
            assert_eq!(days.len(), 1);
            assert_eq!(days[0].recorded, Duration::from_secs(hours * 3600));
            assert_eq!(days[0].above, days[0].recorded);
        }
    }

    #[test]
    fn a_value_on_the_level_is_not_above_and_an_unrecorded_day_has_no_share() {
        let (from, to) = (utc("2026-06-01T00:00:00Z"), utc("2026-06-03T00:00:00Z"));
        let hour = samples("2026-06-01T00:00:00Z", "2026-06-01T01:00:00Z", |at| {
            if at < utc("2026-06-01T00:20:00Z") { 250.1 } else { 250.0 }
        });
        let days = above_by_day(hour, INTERVAL, 250.0, from, to, Tz::UTC);
        assert_eq!(days.len(), 2);
        assert_eq!(days[0].above, Duration::from_secs(1_200));
        assert!((days[0].share().unwrap() - 1.0 / 3.0).abs() < 1e-12);
        assert_eq!(days[1].share(), None);
    }

    #[test]
    fn the_highest_come_first_and_the_earlier_of_two_alike() {
        let of = |start: i64, rms_v: f64| Interval {
            start: Utc(start),
            rms_v,
            min_v: rms_v,
            max_v: rms_v,
            count: 1,
            covered: 1.0,
            flagged: false,
        };
        let all = [of(0, 240.0), of(1, 243.0), of(2, 239.0), of(3, 243.0)];
        let starts: Vec<i64> = highest(&all, 3).iter().map(|i| i.start.0).collect();
        assert_eq!(starts, [1, 3, 0]);
        assert_eq!(highest(&all, 9).len(), 4);
    }
}
