//! The interval: the r.m.s. value of ten minutes of one channel, and how readings become one.

use std::time::Duration;

use serde::{Deserialize, Serialize};

use crate::quantity::Utc;
use crate::reading::{Quality, Reading};

/// The length of an interval (IEC 61000-4-30: 10 minutes, aligned to UTC).
pub const INTERVAL: Duration = Duration::from_secs(600);

/// An interval is flagged when readings stand for less than this share of it. Less than the whole, since a logger
/// that sends once a second by its own clock is never exactly on ours. Our own choice, no source.
pub const WHOLE_FROM: f64 = 0.95;

/// What one channel did during one interval. Labelled by its start, as the record and the JSON are; the standard's
/// own label is the interval's end.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Interval {
    /// Its start, a whole multiple of its length since 1970-01-01T00:00:00Z.
    pub start: Utc,
    /// Root of the mean of the squares of the sound readings (IEC 61000-4-30: never the mean of r.m.s. values), V.
    pub rms_v: f64,
    /// Lowest sound reading, V.
    pub min_v: f64,
    /// Highest sound reading, V.
    pub max_v: f64,
    /// How many sound readings it rests on; at least one.
    pub count: u32,
    /// Which part of it sound readings stand for, 0 to 1.
    pub covered: f64,
    /// It holds doubtful readings (of any quality but good), or readings are missing ([`WHOLE_FROM`]).
    pub flagged: bool,
}

impl Interval {
    /// The start of the interval of `length` that holds `at`.
    pub fn start_of(at: Utc, length: Duration) -> Utc {
        let length_ms = length.as_millis() as i64;
        Utc(at.0.div_euclid(length_ms) * length_ms)
    }
}

/// Makes intervals of one channel's readings as they come.
///
/// Readings must come in the order of their time; one that belongs before the interval being filled is left out,
/// since that one has been given out already. Readings of unsound value lend no volts and cover nothing, they only
/// flag. A stretch without any sound reading gives no interval.
#[derive(Clone, Debug)]
pub struct Aggregator {
    length: Duration,
    sample_period: Duration,
    /// Until when the sound readings so far stand, ms UTC. The last reading of one interval may reach into the next.
    covered_until: i64,
    open: Option<Open>,
}

/// An interval being filled.
#[derive(Clone, Copy, Debug)]
struct Open {
    start: Utc,
    /// Sum of squares, mV². Whole numbers below 2⁵³ (ten minutes of 1 kV at 15 kHz) add without rounding.
    square_sum: f64,
    min: i32,
    max: i32,
    count: u32,
    covered_ms: i64,
    doubtful: bool,
}

impl Aggregator {
    /// For 10-minute intervals of a channel whose readings each stand for `sample_period`.
    pub fn new(sample_period: Duration) -> Self {
        Aggregator::with_length(INTERVAL, sample_period)
    }

    /// The same for intervals of another `length`, which must be at least a millisecond.
    pub fn with_length(length: Duration, sample_period: Duration) -> Self {
        Aggregator { length, sample_period, covered_until: i64::MIN, open: None }
    }

    /// Takes one reading; gives the interval before it, if this reading is the first of a later one.
    pub fn push(&mut self, reading: Reading) -> Option<Interval> {
        let start = Interval::start_of(reading.at, self.length);
        let done = match self.open {
            Some(open) if start < open.start => return None,
            Some(open) if start == open.start => None,
            _ => self.begin(start),
        };
        self.add(reading);
        done
    }

    /// The interval being filled, as far as it has come; `None` if it holds no sound reading.
    pub fn finish(self) -> Option<Interval> {
        self.open.and_then(|open| open.close(self.length))
    }

    fn begin(&mut self, start: Utc) -> Option<Interval> {
        let done = self.open.and_then(|open| open.close(self.length));
        let carried_ms = self.covered_until.saturating_sub(start.0).clamp(0, self.length_ms());
        self.open = Some(Open {
            start,
            square_sum: 0.0,
            min: i32::MAX,
            max: i32::MIN,
            count: 0,
            covered_ms: carried_ms,
            doubtful: false,
        });
        done
    }

    fn add(&mut self, reading: Reading) {
        let end = self.open.map_or(0, |open| open.start.0) + self.length_ms();
        let Some(open) = &mut self.open else { return };
        open.doubtful |= reading.quality != Quality::Good;
        if !reading.quality.value_is_sound() {
            return;
        }
        let mv = reading.value.0;
        open.square_sum += f64::from(mv) * f64::from(mv);
        open.min = open.min.min(mv);
        open.max = open.max.max(mv);
        open.count += 1;
        let until = reading.at.0 + self.sample_period.as_millis() as i64;
        let from = reading.at.0.max(self.covered_until);
        open.covered_ms += (until.min(end) - from).max(0);
        self.covered_until = self.covered_until.max(until);
    }

    fn length_ms(&self) -> i64 {
        self.length.as_millis() as i64
    }
}

impl Open {
    fn close(self, length: Duration) -> Option<Interval> {
        if self.count == 0 {
            return None;
        }
        let covered = self.covered_ms as f64 / length.as_millis() as f64;
        Some(Interval {
            start: self.start,
            rms_v: (self.square_sum / f64::from(self.count)).sqrt() / 1000.0,
            min_v: f64::from(self.min) / 1000.0,
            max_v: f64::from(self.max) / 1000.0,
            count: self.count,
            covered,
            flagged: self.doubtful || covered < WHOLE_FROM,
        })
    }
}

/// The 10-minute intervals of one channel's `readings`, which come in the order of their time and each stand for
/// `sample_period`; the last may be unfinished.
pub fn intervals(readings: impl IntoIterator<Item = Reading>, sample_period: Duration) -> Vec<Interval> {
    intervals_of(INTERVAL, readings, sample_period)
}

/// The same for intervals of another `length`: quarter hours, say.
pub fn intervals_of(
    length: Duration,
    readings: impl IntoIterator<Item = Reading>,
    sample_period: Duration,
) -> Vec<Interval> {
    let mut aggregator = Aggregator::with_length(length, sample_period);
    let mut all: Vec<Interval> = readings.into_iter().filter_map(|r| aggregator.push(r)).collect();
    all.extend(aggregator.finish());
    all
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::Millivolts;
    use crate::reading::ChannelId;

    const MINUTE: Duration = Duration::from_secs(60);

    fn reading(at_s: i64, volts: f64) -> Reading {
        Reading {
            channel: ChannelId(1),
            at: Utc(at_s * 1000),
            value: Millivolts::from_volts(volts).unwrap(),
            quality: Quality::Good,
        }
    }

    fn minutes(values: &[f64]) -> Vec<Reading> {
        values.iter().enumerate().map(|(i, v)| reading(60 * i as i64, *v)).collect()
    }

    #[test]
    fn the_root_of_the_mean_of_squares_is_taken_not_the_mean() {
        // Handbook oracle O1 (method of IEC 61000-4-30): 200 and 260 V make 231.948 V, not 230 V.
        let two = intervals(minutes(&[200.0, 260.0]), Duration::from_secs(300));
        assert!((two[0].rms_v - 231.948).abs() < 1e-3, "{two:?}");
        // O1: eleven of 230 V and one of 253 V make 232.004 V.
        let mut twelve = vec![230.0; 11];
        twelve.push(253.0);
        let made = intervals(
            twelve.iter().enumerate().map(|(i, v)| reading(50 * i as i64, *v)),
            Duration::from_secs(50),
        );
        assert_eq!(made.len(), 1);
        assert!((made[0].rms_v - 232.004).abs() < 1e-3, "{made:?}");
        assert_eq!((made[0].min_v, made[0].max_v, made[0].count), (230.0, 253.0, 12));
        assert!(!made[0].flagged);
    }

    #[test]
    fn intervals_are_aligned_to_utc_and_begin_at_their_first_millisecond() {
        // IEC 61000-4-30 as in handbook section 2 (from memory): 10 minutes, synchronised to the UTC tick.
        let readings =
            [reading(1_199, 229.0), reading(1_200, 230.0), reading(1_799, 231.0), reading(1_800, 232.0)];
        let made = intervals(readings, Duration::from_secs(1));
        let starts: Vec<i64> = made.iter().map(|i| i.start.0 / 1000).collect();
        assert_eq!(starts, [600, 1_200, 1_800]);
        assert_eq!((made[1].min_v, made[1].max_v), (230.0, 231.0));
        assert_eq!(Interval::start_of(Utc(-1), INTERVAL), Utc(-600_000));
    }

    #[test]
    fn coverage_counts_what_readings_stand_for_whatever_their_period() {
        for (period_s, count) in [(1, 600), (60, 10), (300, 2)] {
            let readings = (0..count).map(|i| reading(i * period_s, 230.0));
            let made = intervals(readings, Duration::from_secs(period_s as u64));
            assert_eq!(made[0].covered, 1.0, "{period_s} s");
            assert!(!made[0].flagged, "{period_s} s");
        }
    }

    #[test]
    fn a_missing_minute_flags_and_a_late_second_does_not() {
        let made = intervals(minutes(&[230.0; 9]), MINUTE);
        assert!((made[0].covered - 0.9).abs() < 1e-12);
        assert!(made[0].flagged);
        // 595 readings, each 1.008 s after the last.
        let slow = (0..595).map(|i| Reading { at: Utc(i * 1_008), ..reading(0, 230.0) });
        let made = intervals(slow, Duration::from_secs(1));
        assert!(made[0].covered > 0.99 && !made[0].flagged, "{made:?}");
    }

    #[test]
    fn a_burst_of_readings_covers_no_more_time_than_it_took() {
        let burst = (0..600).map(|i| Reading { at: Utc(i * 10), ..reading(0, 230.0) });
        let made = intervals(burst, Duration::from_secs(1));
        assert!((made[0].covered - 6.99 / 600.0).abs() < 1e-12, "{made:?}");
        assert!(made[0].flagged);
    }

    #[test]
    fn a_reading_across_the_tick_covers_both_intervals() {
        // Five-minute readings at 2, 7, 12 and 17 minutes past.
        let readings = [120, 420, 720, 1_020].map(|s| reading(s, 230.0));
        let made = intervals(readings, Duration::from_secs(300));
        assert!((made[0].covered - 0.8).abs() < 1e-12);
        assert!((made[1].covered - 1.0).abs() < 1e-12);
    }

    #[test]
    fn doubtful_readings_flag_and_only_sound_ones_lend_volts() {
        let mut readings = minutes(&[230.0; 10]);
        readings[3].quality = Quality::ClockDoubtful;
        let made = intervals(readings.clone(), MINUTE);
        assert!(made[0].flagged);
        assert_eq!(made[0].count, 10);
        readings[3] = Reading { quality: Quality::OutOfRange, value: Millivolts(900_000), ..readings[3] };
        let made = intervals(readings, MINUTE);
        assert!(made[0].flagged);
        assert_eq!((made[0].count, made[0].max_v), (9, 230.0));
    }

    #[test]
    fn a_stretch_without_a_sound_reading_gives_no_interval() {
        let mut readings = minutes(&[230.0; 30]);
        for stuck in &mut readings[10..20] {
            stuck.quality = Quality::Stuck;
        }
        let starts: Vec<i64> = intervals(readings, MINUTE).iter().map(|i| i.start.0 / 60_000).collect();
        assert_eq!(starts, [0, 20]);
        assert_eq!(intervals([], MINUTE), []);
    }

    #[test]
    fn a_reading_before_the_open_interval_is_left_out() {
        let mut aggregator = Aggregator::new(MINUTE);
        assert_eq!(aggregator.push(reading(600, 230.0)), None);
        assert_eq!(aggregator.push(reading(599, 300.0)), None);
        assert_eq!(aggregator.finish().map(|i| i.max_v), Some(230.0));
    }
}
