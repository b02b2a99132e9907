//! The time base: from the host's clocks and the logger's own milliseconds to a reading's time. Pure.
//!
//! - Within a run time never goes back. When the host's clock steps back, readings continue on the monotonic clock,
//!   flagged, until UTC has caught up; the same holds at the start, while the host's clock is earlier than the newest
//!   stored reading.
//! - When the host's clock steps forward, readings follow it at once.
//! - A logger that counts its own milliseconds spaces its readings by them, so that a busy host or a driver that
//!   delivers in bursts doesn't move them; arrival keeps the two from drifting apart.

use std::collections::HashMap;

use crate::quantity::{Moment, Mono, Utc};
use crate::reading::Stamp;

/// Differences between UTC and monotonic time up to this are slewing, not a step, ms.
const STEP_MS: i64 = 1_000;

/// A logger's own time may differ from arrival by this much before it's tied to arrival anew, ms.
const LOGGER_SLACK_MS: i64 = 2_000;

/// How much of the difference between a logger's time and arrival is taken up with each line: its crystal may be
/// 100 ppm off, which at a line a second is 0.1 ms a line.
const FOLLOW: f64 = 0.005;

/// A step of the host's clock that was noticed.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct ClockStep {
    /// How far, ms; negative if backwards.
    pub by_ms: i64,
}

/// Gives every reading its time.
#[derive(Debug)]
pub struct TimeBase {
    /// UTC less monotonic time, as used, ms.
    offset_ms: i64,
    /// The same as the host's clock has it now, ms.
    host_offset_ms: i64,
    loggers: HashMap<usize, LoggerTime>,
}

#[derive(Clone, Copy, Debug)]
struct LoggerTime {
    /// Used time (in the base of monotonic time) less the logger's milliseconds, ms.
    offset_ms: f64,
    last_logger_ms: u64,
    last_mono_ms: i64,
}

impl TimeBase {
    /// Starts at `now`; `newest_stored` is the latest time in the record, which no new reading may precede.
    pub fn new(now: Moment, newest_stored: Option<Utc>) -> Self {
        let host_offset_ms = offset(now);
        let floor = newest_stored.map_or(i64::MIN, |newest| newest.0 + 1 - now.mono.0 as i64);
        TimeBase { offset_ms: host_offset_ms.max(floor), host_offset_ms, loggers: HashMap::new() }
    }

    /// Compares the host's two clocks; says if UTC has stepped since the last look.
    pub fn look(&mut self, now: Moment) -> Option<ClockStep> {
        let host = offset(now);
        let moved = host - self.host_offset_ms;
        self.host_offset_ms = host;
        if host >= self.offset_ms {
            self.offset_ms = host;
        } else if moved.abs() < STEP_MS && self.offset_ms - host < STEP_MS {
            // Slewed back a little: follow so slowly that time still goes forward from line to line.
            self.offset_ms -= 1;
        }
        (moved.abs() >= STEP_MS).then_some(ClockStep { by_ms: moved })
    }

    /// Whether readings are labelled by the monotonic clock because UTC lies behind what was already used.
    pub fn is_doubtful(&self) -> bool {
        self.offset_ms - self.host_offset_ms >= STEP_MS
    }

    /// UTC at a monotonic time, as readings are labelled.
    pub fn utc(&self, mono: Mono) -> Utc {
        Utc(mono.0 as i64 + self.offset_ms)
    }

    /// The monotonic time that [`TimeBase::utc`] gave `at`.
    pub fn mono(&self, at: Utc) -> Mono {
        Mono((at.0 - self.offset_ms).max(0) as u64)
    }

    /// The time of a line of `logger` that arrived at `received`.
    pub fn stamp(&mut self, logger: usize, received: Moment, logger_ms: Option<u64>) -> Stamp {
        let arrival_ms = received.mono.0 as i64;
        let mono_ms = match logger_ms {
            None => {
                self.loggers.remove(&logger);
                arrival_ms
            }
            Some(logger_ms) => self.even_time(logger, arrival_ms, logger_ms),
        };
        Stamp { at: Utc(mono_ms + self.offset_ms), doubtful: self.is_doubtful() }
    }

    /// Arrival, evened out by the logger's own milliseconds; two lines of one logger never share a millisecond.
    fn even_time(&mut self, logger: usize, arrival_ms: i64, logger_ms: u64) -> i64 {
        let fresh = LoggerTime {
            offset_ms: (arrival_ms - logger_ms as i64) as f64,
            last_logger_ms: logger_ms,
            last_mono_ms: i64::MIN,
        };
        let known = self.loggers.get(&logger).copied().filter(|t| logger_ms >= t.last_logger_ms);
        let last_mono_ms = self.loggers.get(&logger).map_or(i64::MIN, |t| t.last_mono_ms);
        let mut time = known.unwrap_or(fresh);
        let ahead_ms = logger_ms as f64 + time.offset_ms - arrival_ms as f64;
        if ahead_ms.abs() > LOGGER_SLACK_MS as f64 {
            time.offset_ms = fresh.offset_ms;
        } else if ahead_ms > 0.0 {
            // A line can't have been sent after it arrived: the least delay seen is the best estimate.
            time.offset_ms -= ahead_ms;
        } else {
            time.offset_ms -= ahead_ms * FOLLOW;
        }
        let mono_ms =
            ((logger_ms as f64 + time.offset_ms).round() as i64).max(last_mono_ms.saturating_add(1));
        self.loggers.insert(logger, LoggerTime { last_logger_ms: logger_ms, last_mono_ms: mono_ms, ..time });
        mono_ms
    }
}

fn offset(now: Moment) -> i64 {
    now.utc.0 - now.mono.0 as i64
}

#[cfg(test)]
mod tests {
    use super::*;

    const START: i64 = 1_790_000_000_000;

    fn at(mono_ms: u64, utc_step_ms: i64) -> Moment {
        Moment { mono: Mono(mono_ms), utc: Utc(START + mono_ms as i64 + utc_step_ms) }
    }

    fn feed(base: &mut TimeBase, moment: Moment) -> (i64, bool, Option<i64>) {
        let step = base.look(moment);
        let stamp = base.stamp(0, moment, None);
        (stamp.at.0 - START, stamp.doubtful, step.map(|s| s.by_ms))
    }

    #[test]
    fn after_a_backward_step_time_runs_on_flagged_until_utc_has_caught_up() {
        let mut base = TimeBase::new(at(0, 0), None);
        assert_eq!(feed(&mut base, at(1_000, 0)), (1_000, false, None));
        assert_eq!(feed(&mut base, at(2_000, -60_000)), (2_000, true, Some(-60_000)));
        assert_eq!(feed(&mut base, at(3_000, -60_000)), (3_000, true, None));
        assert_eq!(feed(&mut base, at(4_000, 500)), (4_500, false, Some(60_500)));
    }

    #[test]
    fn a_forward_step_is_followed_at_once_and_said() {
        let mut base = TimeBase::new(at(0, 0), None);
        assert_eq!(feed(&mut base, at(1_000, 86_400_000)), (86_401_000, false, Some(86_400_000)));
    }

    #[test]
    fn a_board_without_a_battery_clock_starts_after_the_newest_stored_reading_and_says_so() {
        let newest = Utc(START + 5_000_000);
        let mut base = TimeBase::new(at(0, 0), Some(newest));
        assert_eq!(feed(&mut base, at(0, 0)), (5_000_001, true, None));
        assert_eq!(feed(&mut base, at(1_000, 6_000_000)), (6_001_000, false, Some(6_000_000)));
    }

    #[test]
    fn slewing_back_by_a_few_milliseconds_is_no_step_and_never_turns_time_round() {
        let mut base = TimeBase::new(at(0, 0), None);
        let mut last = i64::MIN;
        for s in 1..600 {
            let (time, doubtful, step) = feed(&mut base, at(s * 1000, -(s as i64)));
            assert!(time > last && !doubtful && step.is_none(), "{s}");
            last = time;
        }
    }

    #[test]
    fn the_loggers_own_milliseconds_even_out_arrival_in_bursts() {
        let mut base = TimeBase::new(at(0, 0), None);
        let mut times = vec![];
        for i in 0..40u64 {
            // One line a second, delivered by the driver up to 300 ms late, in turn.
            let arrival = at(10_000 + i * 1000 + (i % 4) * 100, 0);
            times.push(base.stamp(0, arrival, Some(77 + i * 1000)).at.0);
        }
        for pair in times.windows(2) {
            assert!((pair[1] - pair[0] - 1000).abs() <= 10, "{pair:?}");
        }
    }

    #[test]
    fn a_logger_that_restarts_or_runs_away_is_tied_to_arrival_anew() {
        let mut base = TimeBase::new(at(0, 0), None);
        base.stamp(0, at(1_000, 0), Some(500_000));
        assert_eq!(base.stamp(0, at(2_000, 0), Some(10)).at.0 - START, 2_000);
        assert_eq!(base.stamp(0, at(3_000, 0), Some(90_000)).at.0 - START, 3_000);
    }

    #[test]
    fn a_flood_within_one_millisecond_keeps_every_line_apart() {
        let mut base = TimeBase::new(at(0, 0), None);
        let times: Vec<i64> = (0..50).map(|i| base.stamp(0, at(5_000, 0), Some(i)).at.0).collect();
        assert!(times.windows(2).all(|pair| pair[1] > pair[0]), "{times:?}");
    }
}
