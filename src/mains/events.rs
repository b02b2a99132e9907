//! Events: dips, swells and interruptions of the mains, and excursions of a rail over its setpoint.
//!
//! After the method of IEC 61000-4-30: a threshold starts an event, the threshold less a hysteresis ends it. The
//! standard looks at one-cycle r.m.s. values refreshed each half cycle; these are readings of a second or longer, so
//! short events are missed, their depth is understated, and no class is claimed.

use std::time::Duration;

use serde::{Deserialize, Serialize};

use crate::quantity::Utc;

/// One value at one time; it stands for its channel's sample period.
pub type Sample = (Utc, f64);

/// A stretch of time beyond a threshold.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Spell {
    /// Time of the first reading beyond the threshold.
    pub start: Utc,
    /// Time of the first reading back behind the hysteresis; where `whole` is false perhaps only the end of what was
    /// recorded.
    pub end: Utc,
    /// The value farthest beyond the threshold, V.
    pub extreme_v: f64,
    /// When that was; the first time, if several.
    pub extreme_at: Utc,
    /// False if a gap or the edge of the record hides when it began or ended: then it lasted at least this long.
    pub whole: bool,
}

impl Spell {
    /// From start to end.
    pub fn length(&self) -> Duration {
        Duration::from_millis(self.end.0.saturating_sub(self.start.0).max(0) as u64)
    }
}

/// What happened to the mains.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum EventKind {
    /// Below the dip threshold, and never as low as an interruption.
    Dip,
    /// Above the swell threshold.
    Swell,
    /// Below the dip threshold, and at some time below that of an interruption. Counted once, not as a dip too.
    Interruption,
}

impl EventKind {
    /// The word shown to people and programs.
    pub fn word(self) -> &'static str {
        match self {
            EventKind::Dip => "dip",
            EventKind::Swell => "swell",
            EventKind::Interruption => "interruption",
        }
    }
}

/// One event of the mains.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Event {
    /// What.
    pub kind: EventKind,
    /// When, how long, how far. The extreme of a dip or interruption is its residual voltage.
    #[serde(flatten)]
    pub spell: Spell,
}

/// Where events begin and end, V.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct EventLimits {
    /// A reading below starts a dip.
    pub dip_v: f64,
    /// A reading above starts a swell.
    pub swell_v: f64,
    /// A dip that goes below is an interruption.
    pub interruption_v: f64,
    /// How far back behind the threshold a reading must be to end the event.
    pub hysteresis_v: f64,
}

impl EventLimits {
    /// The usual ones: 90 % and 110 % of the declared voltage with 2 % of hysteresis (IEC 61000-4-30: "typically";
    /// the 2 % from memory) and 5 % for an interruption (EN 50160:2010, from memory).
    pub fn usual(declared_v: f64) -> Self {
        EventLimits {
            dip_v: 0.90 * declared_v,
            swell_v: 1.10 * declared_v,
            interruption_v: 0.05 * declared_v,
            hysteresis_v: 0.02 * declared_v,
        }
    }
}

/// Dips, swells and interruptions in `samples`, which come in the order of time and each stand for `sample_period`;
/// in the order of their start.
pub fn events(
    samples: impl IntoIterator<Item = Sample>,
    sample_period: Duration,
    limits: &EventLimits,
) -> Vec<Event> {
    let mut low = Tracker::new(Side::Below, limits.dip_v, limits.dip_v + limits.hysteresis_v, sample_period);
    let mut high =
        Tracker::new(Side::Above, limits.swell_v, limits.swell_v - limits.hysteresis_v, sample_period);
    let (mut lows, mut highs) = (Vec::new(), Vec::new());
    for sample in samples {
        lows.extend(low.push(sample));
        highs.extend(high.push(sample));
    }
    lows.extend(low.finish());
    highs.extend(high.finish());
    let below = |spell: Spell| {
        let interrupted = spell.extreme_v < limits.interruption_v;
        Event { kind: if interrupted { EventKind::Interruption } else { EventKind::Dip }, spell }
    };
    let above = |spell| Event { kind: EventKind::Swell, spell };
    let mut all: Vec<Event> = lows.into_iter().map(below).chain(highs.into_iter().map(above)).collect();
    all.sort_by_key(|event| event.spell.start);
    all
}

/// Stretches of `samples` above `setpoint_v`; each ends when a value is `deadband_v` or more below it. Samples come in
/// the order of time and each stand for `sample_period`.
pub fn excursions(
    samples: impl IntoIterator<Item = Sample>,
    sample_period: Duration,
    setpoint_v: f64,
    deadband_v: f64,
) -> Vec<Spell> {
    let mut tracker = Tracker::new(Side::Above, setpoint_v, setpoint_v - deadband_v, sample_period);
    let mut all: Vec<Spell> = samples.into_iter().filter_map(|s| tracker.push(s)).collect();
    all.extend(tracker.finish());
    all
}

/// Which side of the threshold is the event.
#[derive(Clone, Copy, Debug)]
enum Side {
    Above,
    Below,
}

/// Follows one threshold with hysteresis.
#[derive(Clone, Debug)]
struct Tracker {
    /// −1 for events below, so that everything inside is about values above.
    sign: f64,
    over: f64,
    back: f64,
    sample_period_ms: i64,
    last: Option<Utc>,
    spell: Option<Spell>,
}

impl Tracker {
    fn new(side: Side, over_v: f64, back_v: f64, sample_period: Duration) -> Self {
        let sign = match side {
            Side::Above => 1.0,
            Side::Below => -1.0,
        };
        Tracker {
            sign,
            over: sign * over_v,
            back: sign * back_v,
            sample_period_ms: sample_period.as_millis() as i64,
            last: None,
            spell: None,
        }
    }

    /// Takes a sample; gives the spell that it, or the gap before it, ends.
    fn push(&mut self, (at, volts): Sample) -> Option<Spell> {
        if !volts.is_finite() {
            return None;
        }
        let after_gap = self.last.is_none_or(|last| at.0 - last.0 > MISSED * self.sample_period_ms);
        let cut = if after_gap { self.cut() } else { None };
        self.last = Some(at);
        let height = self.sign * volts;
        match &mut self.spell {
            Some(spell) => {
                if height > self.sign * spell.extreme_v {
                    (spell.extreme_v, spell.extreme_at) = (volts, at);
                }
                if height <= self.back {
                    spell.end = at;
                    return self.spell.take();
                }
            }
            None if height > self.over => {
                self.spell =
                    Some(Spell { start: at, end: at, extreme_v: volts, extreme_at: at, whole: !after_gap });
            }
            None => {}
        }
        cut
    }

    fn finish(mut self) -> Option<Spell> {
        self.cut()
    }

    /// Ends the spell where the record stops.
    fn cut(&mut self) -> Option<Spell> {
        let last = self.last?;
        let spell = self.spell.take()?;
        Some(Spell { end: Utc(last.0 + self.sample_period_ms), whole: false, ..spell })
    }
}

/// Samples farther apart than this many sample periods have a gap between them: one lost line is none. Our own
/// choice, no source.
const MISSED: i64 = 3;

#[cfg(test)]
mod tests {
    use super::*;

    const SECOND: Duration = Duration::from_secs(1);

    fn seconds(values: &[f64]) -> Vec<Sample> {
        values.iter().enumerate().map(|(i, v)| (Utc(1000 * i as i64), *v)).collect()
    }

    fn found(values: &[f64]) -> Vec<(EventKind, i64, i64, f64, bool)> {
        events(seconds(values), SECOND, &EventLimits::usual(230.0))
            .into_iter()
            .map(|e| (e.kind, e.spell.start.0 / 1000, e.spell.end.0 / 1000, e.spell.extreme_v, e.spell.whole))
            .collect()
    }

    #[test]
    fn a_dip_starts_below_its_threshold_and_ends_behind_the_hysteresis() {
        // IEC 61000-4-30 by an application note (handbook section 2): threshold 90 % = 207 V, end at
        // threshold + hysteresis; 2 % of 230 V (from memory) makes that 211.6 V.
        assert_eq!(found(&[230.0, 207.0, 230.0]), []);
        assert_eq!(found(&[230.0, 206.9, 205.0, 211.5, 211.6, 230.0]), [(EventKind::Dip, 1, 4, 205.0, true)]);
    }

    #[test]
    fn a_swell_mirrors_a_dip() {
        // 110 % of 230 V = 253 V; ends at 253 − 4.6 = 248.4 V.
        assert_eq!(found(&[230.0, 253.0, 230.0]), []);
        assert_eq!(found(&[230.0, 253.1, 254.0, 248.5, 248.4]), [(EventKind::Swell, 1, 4, 254.0, true)]);
    }

    #[test]
    fn an_interruption_is_counted_once_and_not_as_a_dip_too() {
        // EN 50160:2010 (from memory): below 5 % of the declared voltage, 11.5 V.
        assert_eq!(
            found(&[230.0, 100.0, 3.0, 3.0, 100.0, 230.0]),
            [(EventKind::Interruption, 1, 5, 3.0, true)]
        );
        assert_eq!(found(&[230.0, 12.0, 230.0])[0].0, EventKind::Dip);
    }

    #[test]
    fn events_at_the_edge_of_the_record_lasted_at_least_that_long() {
        assert_eq!(found(&[200.0, 230.0]), [(EventKind::Dip, 0, 1, 200.0, false)]);
        assert_eq!(found(&[230.0, 200.0, 200.0]), [(EventKind::Dip, 1, 3, 200.0, false)]);
    }

    #[test]
    fn a_gap_ends_an_event_where_the_record_stopped() {
        let samples =
            [(0, 230.0), (1, 255.0), (2, 256.0), (60, 257.0), (61, 230.0)].map(|(s, v)| (Utc(1000 * s), v));
        let all = events(samples, SECOND, &EventLimits::usual(230.0));
        let lengths: Vec<(u64, bool)> =
            all.iter().map(|e| (e.spell.length().as_secs(), e.spell.whole)).collect();
        assert_eq!(lengths, [(2, false), (1, false)]);
    }

    #[test]
    fn one_lost_line_is_no_gap() {
        let samples = [(0, 230.0), (1, 255.0), (3, 256.0), (4, 230.0)].map(|(s, v)| (Utc(1000 * s), v));
        let all = events(samples, SECOND, &EventLimits::usual(230.0));
        assert_eq!(all.len(), 1);
        assert!(all[0].spell.whole);
    }

    #[test]
    fn an_excursion_has_its_start_its_length_and_its_highest_value() {
        let rail = seconds(&[470.0, 480.0, 481.0, 485.0, 477.0, 483.0, 476.0, 470.0, 482.0, 470.0]);
        let all = excursions(rail, SECOND, 480.0, 4.0);
        assert_eq!(all.len(), 2, "477 V is not yet 4 V below the setpoint, 476 V is");
        assert_eq!((all[0].start, all[0].length()), (Utc(2_000), Duration::from_secs(4)));
        assert_eq!((all[0].extreme_v, all[0].extreme_at), (485.0, Utc(3_000)));
        assert_eq!((all[1].start, all[1].length()), (Utc(8_000), SECOND));
    }
}
