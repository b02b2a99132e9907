//! Deadband, on-delay and off-delay: from a figure that moves to a condition that is raised or cleared.

use std::time::Duration;

use super::Event;
use crate::quantity::Mono;

/// Which side of the setpoint is the bad one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Side {
    /// Bad above the setpoint.
    Over,
    /// Bad below the setpoint.
    Under,
}

/// Where a figure stands against its setpoint.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Level {
    /// Beyond the setpoint, on the bad side.
    Beyond,
    /// On the good side, but not yet further from the setpoint than the deadband.
    InDeadband,
    /// On the good side and out of the deadband.
    Clear,
    /// Nobody knows: whatever stands, stands.
    Unknown,
}

impl Level {
    /// Judges `value` against `setpoint`; `deadband` is in the same unit and never negative.
    pub fn of(value: Option<f64>, setpoint: f64, side: Side, deadband: f64) -> Level {
        let excess = match (value, side) {
            (None, _) => return Level::Unknown,
            (Some(value), Side::Over) => value - setpoint,
            (Some(value), Side::Under) => setpoint - value,
        };
        if excess > 0.0 {
            Level::Beyond
        } else if excess >= -deadband {
            Level::InDeadband
        } else {
            Level::Clear
        }
    }
}

/// The delays of one alarm and how far it has come in them.
///
/// The on-delay (off-delay) runs while the figure is beyond (clear) and starts anew when it isn't; while the figure
/// is unknown it stands still, so that a short gap neither raises an alarm nor hides one.
#[derive(Clone, Debug, Default)]
pub struct Delay {
    active: bool,
    held: Duration,
    counting_since: Option<Mono>,
}

impl Delay {
    /// One that starts in the given state.
    pub fn starting(active: bool) -> Self {
        Delay { active, ..Delay::default() }
    }

    /// Takes the level at `now`; says [`Event::Raise`] or [`Event::Clear`] when a delay has run out.
    pub fn step(
        &mut self,
        level: Level,
        now: Mono,
        on_delay: Duration,
        off_delay: Duration,
    ) -> Option<Event> {
        let (towards, delay, event) = if self.active {
            (Level::Clear, off_delay, Event::Clear)
        } else {
            (Level::Beyond, on_delay, Event::Raise)
        };
        if let Some(since) = self.counting_since.take() {
            self.held += now.since(since);
        }
        if level == Level::Unknown {
            return None;
        }
        if level != towards {
            self.held = Duration::ZERO;
            return None;
        }
        if self.held >= delay {
            *self = Delay::starting(!self.active);
            return Some(event);
        }
        self.counting_since = Some(now);
        None
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    const SECOND: Duration = Duration::from_secs(1);

    /// A high alarm at 450 V, deadband 5 V, on-delay 10 s, fed once a second; says what it said and when.
    fn feed(values: &[(u64, f64)]) -> Vec<(u64, Event)> {
        let mut delay = Delay::default();
        let level = |v| Level::of(Some(v), 450.0, Side::Over, 5.0);
        values
            .iter()
            .filter_map(|&(s, v)| {
                delay.step(level(v), Mono(s * 1000), 10 * SECOND, Duration::ZERO).map(|event| (s, event))
            })
            .collect()
    }

    #[test]
    fn the_on_delay_and_the_deadband_behave_as_opc_10000_9_b_1_5_describes() {
        // OPC 10000-9 v1.05 B.1.5 (on-delay, off-delay, deadband): 451 V for 9 s raises nothing, for 10 s it does;
        // 446 V is within the deadband of 5 V, 444.9 V is out of it.
        let high = |s| (s, 451.0);
        let mut nine_seconds: Vec<_> = (0..=9).map(high).collect();
        nine_seconds.push((10, 449.0));
        assert_eq!(feed(&nine_seconds), []);
        let mut ten_seconds: Vec<_> = (0..=10).map(high).collect();
        assert_eq!(feed(&ten_seconds), [(10, Event::Raise)]);
        ten_seconds.extend([(11, 446.0), (12, 445.0), (13, 444.9)]);
        assert_eq!(feed(&ten_seconds), [(10, Event::Raise), (13, Event::Clear)]);
    }

    #[test]
    fn a_dip_below_the_setpoint_starts_the_on_delay_anew() {
        let mut values: Vec<_> = (0..=9).map(|s| (s, 451.0)).collect();
        values.push((10, 450.0));
        values.extend((11..=21).map(|s| (s, 451.0)));
        assert_eq!(feed(&values), [(21, Event::Raise)]);
    }

    #[test]
    fn unknown_holds_the_state_and_stops_the_delay_without_undoing_it() {
        let mut delay = Delay::default();
        let mut step = |s: u64, level| delay.step(level, Mono(s * 1000), 10 * SECOND, Duration::ZERO);
        assert_eq!(step(0, Level::Beyond), None);
        assert_eq!(step(6, Level::Unknown), None, "6 s are held");
        assert_eq!(step(3600, Level::Beyond), None, "an unknown hour adds nothing");
        assert_eq!(step(3603, Level::Beyond), None);
        assert_eq!(step(3604, Level::Beyond), Some(Event::Raise));
        assert_eq!(step(3605, Level::Unknown), None);
        assert_eq!(step(3606, Level::Clear), Some(Event::Clear));
    }

    #[test]
    fn a_low_alarm_is_the_mirror_image() {
        assert_eq!(Level::of(Some(206.9), 207.0, Side::Under, 2.0), Level::Beyond);
        assert_eq!(Level::of(Some(208.9), 207.0, Side::Under, 2.0), Level::InDeadband);
        assert_eq!(Level::of(Some(209.1), 207.0, Side::Under, 2.0), Level::Clear);
    }
}
