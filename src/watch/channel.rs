//! One channel as it is watched: calibration, plausibility, and how fresh its last sound value is.

use std::time::Duration;

use crate::config::Channel;
use crate::quantity::{Millivolts, Mono, Uncertain, rectangular_u};
use crate::reading::{ChannelId, ChannelQuantity, Quality, Reading, Stamp};

/// A value is old news after this, or after three sample periods if those are longer.
const FRESH_FOR: Duration = Duration::from_secs(5);

/// The same value for this long, and ten times longer than the channel ever did before, is no measurement.
const STUCK_AFTER: Duration = Duration::from_secs(600);
const STUCK_FACTOR: u32 = 10;

/// No rail of a valve amplifier lies outside this, V.
const RAIL_RANGE_V: std::ops::RangeInclusive<f64> = -20.0..=2000.0;

/// A channel and what is known of it.
#[derive(Clone, Debug)]
pub(super) struct WatchedChannel {
    pub(super) id: ChannelId,
    pub(super) config: Channel,
    declared_v: f64,
    latest: Option<(Mono, f64)>,
    run: Option<Run>,
    longest_run: Duration,
}

/// The present run of one and the same value.
#[derive(Clone, Copy, Debug)]
struct Run {
    value: Millivolts,
    began: Mono,
}

impl WatchedChannel {
    pub(super) fn new(id: ChannelId, config: Channel, declared_v: f64) -> Self {
        WatchedChannel { id, config, declared_v, latest: None, run: None, longest_run: Duration::ZERO }
    }

    /// Calibrates and judges a raw value; `None` if the result can't be kept as millivolts at all.
    pub(super) fn take(&mut self, raw_v: f64, stamp: Stamp, now: Mono) -> Option<Reading> {
        let volts = raw_v * self.config.gain + self.config.offset_v;
        let value = Millivolts::from_volts(volts)?;
        let stuck = self.is_stuck(value, now);
        let quality = if !is_plausible(self.config.quantity, volts, self.declared_v) {
            Quality::OutOfRange
        } else if stuck {
            Quality::Stuck
        } else if stamp.doubtful {
            Quality::ClockDoubtful
        } else {
            Quality::Good
        };
        if quality.value_is_sound() {
            self.latest = Some((now, volts));
        }
        Some(Reading { channel: self.id, at: stamp.at, value, quality })
    }

    /// The last sound value with the channel's own uncertainty; `None` once it's too old.
    pub(super) fn fresh(&self, now: Mono) -> Option<Uncertain> {
        let (at, volts) = self.latest?;
        (now.since(at) <= fresh_for(self.config.sample_period)).then(|| uncertain(&self.config, volts))
    }

    fn is_stuck(&mut self, value: Millivolts, now: Mono) -> bool {
        match self.run {
            // Nothing at all is a value that rests by itself: an amplifier that is off, mains that has failed.
            Some(run) if run.value == value && value.0 != 0 => {
                let lasted = now.since(run.began);
                lasted >= STUCK_AFTER && lasted > self.longest_run * STUCK_FACTOR
            }
            Some(run) => {
                // A run that was judged stuck is no measure of what this channel does by itself.
                let lasted = now.since(run.began);
                if lasted < STUCK_AFTER {
                    self.longest_run = self.longest_run.max(lasted);
                }
                self.run = Some(Run { value, began: now });
                false
            }
            None => {
                self.run = Some(Run { value, began: now });
                false
            }
        }
    }
}

/// Whether `volts` can be a value of `quantity` at all, where the mains is declared `declared_v`.
pub fn is_plausible(quantity: ChannelQuantity, volts: f64, declared_v: f64) -> bool {
    match quantity {
        ChannelQuantity::MainsRms => (0.0..=2.0 * declared_v).contains(&volts),
        ChannelQuantity::Rail => RAIL_RANGE_V.contains(&volts),
    }
}

/// How long a value of a channel with this sample period stays fresh.
pub fn fresh_for(sample_period: Duration) -> Duration {
    FRESH_FOR.max(3 * sample_period)
}

/// A channel's value with its accuracy as a rectangular type B uncertainty (JCGM 100 4.3.7).
pub fn uncertain(channel: &Channel, volts: f64) -> Uncertain {
    Uncertain::new(volts, rectangular_u(channel.half_width_v(volts)))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::Utc;

    fn mains() -> WatchedChannel {
        let config = Channel {
            name: "mains".into(),
            was: None,
            quantity: ChannelQuantity::MainsRms,
            sample_period: Duration::from_secs(1),
            gain: 1.01,
            offset_v: -0.2,
            accuracy_pct: 0.5,
            accuracy_v: 0.2,
            rail: None,
        };
        WatchedChannel::new(ChannelId(1), config, 230.0)
    }

    fn stamp(doubtful: bool) -> Stamp {
        Stamp { at: Utc(1_000), doubtful }
    }

    #[test]
    fn gain_comes_before_offset_and_the_accuracy_becomes_a_type_b_uncertainty() {
        let mut channel = mains();
        let reading = channel.take(230.0, stamp(false), Mono(0)).unwrap();
        assert_eq!(reading.value, Millivolts(232_100));
        // JCGM 100 4.3.7: ±(0.5 % of 232.1 V + 0.2 V) rectangular, k = 2.
        let u = channel.fresh(Mono(0)).unwrap().u;
        assert!((u - 2.0 * (1.1605 + 0.2) / 3f64.sqrt()).abs() < 1e-9, "{u}");
    }

    #[test]
    fn a_value_is_fresh_for_five_seconds_or_three_periods() {
        let mut channel = mains();
        channel.take(230.0, stamp(false), Mono(0)).unwrap();
        assert!(channel.fresh(Mono(5_000)).is_some());
        assert!(channel.fresh(Mono(5_001)).is_none());
        assert_eq!(fresh_for(Duration::from_secs(60)), Duration::from_secs(180));
    }

    #[test]
    fn implausible_values_are_kept_with_their_quality_and_never_projected() {
        let mut channel = mains();
        for raw in [-3.0, 470.0, 1e6] {
            assert_eq!(
                channel.take(raw, stamp(false), Mono(0)).unwrap().quality,
                Quality::OutOfRange,
                "{raw}"
            );
        }
        assert_eq!(channel.take(1e99, stamp(false), Mono(0)), None);
        assert_eq!(channel.take(f64::NAN, stamp(false), Mono(0)), None);
        assert!(channel.fresh(Mono(0)).is_none());
        assert_eq!(channel.take(230.0, stamp(true), Mono(0)).unwrap().quality, Quality::ClockDoubtful);
    }

    #[test]
    fn the_same_value_for_ten_minutes_is_stuck_until_it_moves_but_zero_is_not() {
        let mut channel = mains();
        let mut quality = |raw, s: u64| channel.take(raw, stamp(false), Mono(s * 1000)).unwrap().quality;
        assert_eq!(quality(230.0, 0), Quality::Good);
        assert_eq!(quality(230.0, 599), Quality::Good);
        assert_eq!(quality(230.0, 600), Quality::Stuck);
        assert_eq!(quality(230.1, 601), Quality::Good);

        let mut rail = mains();
        rail.config.offset_v = 0.0;
        for s in [0, 600, 86_400] {
            assert_eq!(rail.take(0.0, stamp(false), Mono(s * 1000)).unwrap().quality, Quality::Good);
        }
    }

    #[test]
    fn a_coarse_channel_that_rests_by_itself_earns_a_longer_patience() {
        let mut channel = mains();
        let mut quality = |raw, s: u64| channel.take(raw, stamp(false), Mono(s * 1000)).unwrap().quality;
        quality(230.0, 0);
        quality(231.0, 300);
        assert_eq!(quality(231.0, 300 + 2_000), Quality::Good, "it rested for 300 s before");
        assert_eq!(quality(231.0, 300 + 3_001), Quality::Stuck);
    }
}
