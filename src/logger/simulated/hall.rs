//! A made-up hall: its mains over the day and the rail of the valve amplifier that stands in it.
//!
//! Nothing here is a measurement. The day's shape leans on the hour-of-day means of an open data set (one house near
//! Paris, 2006 to 2010, DOI 10.24432/C58K54), drawn larger; the rest is invented so as to look like what loggers show.

use super::dice::{Dice, smooth};
use crate::quantity::Utc;

/// Hour of the local day and the mains' deviation from its mean there, V, by that data set; the day closes on itself.
const DAY: [(f64, f64); 12] = [
    (0.0, 1.6),
    (3.0, 1.9),
    (6.0, 1.1),
    (7.0, -0.9),
    (10.0, -1.5),
    (12.0, -0.6),
    (15.0, 1.2),
    (17.0, -0.5),
    (19.0, -2.1),
    (22.0, 0.2),
    (23.0, 2.2),
    (24.0, 1.6),
];

/// The averages over years are flatter than one day is.
const DAY_SCALE: f64 = 1.6;

/// The late evening's peak, when the street's cookers and heaters go off: middle (h) and half-width (h).
const PEAK_AT_H: f64 = 22.5;
const PEAK_WIDTH_H: f64 = 0.35;

// The amplifier: 350 V r.m.s. of a winding for 220 V behind a silicon bridge; idle, its first node stands at 452 V.
const OPEN_PER_MAINS: f64 = 350.0 * std::f64::consts::SQRT_2 / 220.0;
const BRIDGE_V: f64 = 1.7;
/// What the idle current takes off, as a share of the rail: source resistance over the load's resistance.
const IDLE_SAG: f64 = 0.0913;
/// Heaters are half warm after this time, s, and go from cold to warm within a few of these widths.
const WARM_AFTER_S: f64 = 14.0;
const WARM_WIDTH_S: f64 = 1.6;
/// Charging through the source resistance, and discharging through the valves and the bleeder, s.
const CHARGE_S: f64 = 0.1;
const DISCHARGE_S: f64 = 2.0;

// What each sequence of chance is for.
const DRIFT: u64 = 1;
const FLICKER: u64 = 2;
const PEAK: u64 = 3;
const STEP_IS: u64 = 4;
const STEP_START: u64 = 5;
const STEP_SPAN: u64 = 6;
const STEP_DROP: u64 = 7;
const MUSIC: u64 = 8;
const MAINS_NOISE: u64 = 9;
const RAIL_NOISE: u64 = 10;

const DAY_S: f64 = 86_400.0;

/// The hall. What it shows at a time depends on its fields and that time alone.
#[derive(Clone, Debug, PartialEq)]
pub struct Hall {
    /// Another seed, another hall with the same habits.
    pub seed: u64,
    /// What its local clock is ahead of UTC, s. The day's shape follows that clock, so a demonstration can put the
    /// evening where it needs it.
    pub ahead_of_utc_s: i32,
    /// The mains over many days, V r.m.s.
    pub mean_v: f64,
    /// When the amplifier is switched on and off, hours of the local day; off may be after midnight.
    pub in_use_h: (f64, f64),
}

/// The hall at one time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct HallState {
    /// The mains at the socket as the logger measures it, V r.m.s.
    pub mains_v: f64,
    /// The amplifier's first rail as the logger measures it, V.
    pub rail_v: f64,
    /// Whether the amplifier is switched on.
    pub amplifier_on: bool,
    /// How far its valves conduct: 0 cold to 1 warm.
    pub warmth: f64,
}

impl Hall {
    /// A hall that lives by UTC around 236 V, its amplifier on from 17:00 to 23:50.
    pub fn new(seed: u64) -> Self {
        Hall { seed, ahead_of_utc_s: 0, mean_v: 236.0, in_use_h: (17.0, 23.0 + 50.0 / 60.0) }
    }

    /// The hall at `t`.
    pub fn at(&self, t: Utc) -> HallState {
        let dice = Dice::new(self.seed);
        let local_s = t.0 as f64 / 1000.0 + f64::from(self.ahead_of_utc_s);
        let socket_v = self.socket_v(dice, local_s);
        let (on_h, off_h) = self.in_use_h;
        let on_for_s = (local_s - on_h * 3600.0).rem_euclid(DAY_S);
        let used_s = ((off_h - on_h) * 3600.0).rem_euclid(DAY_S);
        let amplifier_on = on_for_s < used_s;
        let warmth = if amplifier_on { logistic((on_for_s - WARM_AFTER_S) / WARM_WIDTH_S) } else { 0.0 };
        let rail_v = if amplifier_on {
            // Programme takes a little more than the idle current.
            let music = 0.04 * (1.0 + dice.wander(MUSIC, local_s, 4.0)).max(0.0);
            rail_v(socket_v, warmth * (1.0 + music)) * (1.0 - (-on_for_s / CHARGE_S).exp())
        } else {
            rail_v(socket_v, 1.0) * (-(on_for_s - used_s) / DISCHARGE_S).exp()
        };
        HallState {
            mains_v: socket_v + 0.08 * dice.normal(MAINS_NOISE, t.0),
            rail_v: rail_v + 0.15 * dice.normal(RAIL_NOISE, t.0),
            amplifier_on,
            warmth,
        }
    }

    fn socket_v(&self, dice: Dice, local_s: f64) -> f64 {
        let day = (local_s / DAY_S).floor();
        let hour = (local_s - day * DAY_S) / 3600.0;
        let peak_v = 4.5 + 1.5 * dice.even(PEAK, day as i64);
        let peak = peak_v * (-0.5 * ((hour - PEAK_AT_H) / PEAK_WIDTH_H).powi(2)).exp();
        self.mean_v
            + DAY_SCALE * day_shape(hour)
            + peak
            + 0.7 * dice.wander(DRIFT, local_s, 1_800.0)
            + 0.2 * dice.wander(FLICKER, local_s, 45.0)
            - load_steps_v(dice, local_s)
    }
}

fn logistic(x: f64) -> f64 {
    1.0 / (1.0 + (-x).exp())
}

/// The amplifier's first rail without noise, V; `load` 0 with cold valves, 1 at idle.
fn rail_v(mains_v: f64, load: f64) -> f64 {
    (mains_v * OPEN_PER_MAINS - BRIDGE_V).max(0.0) / (1.0 + IDLE_SAG * load)
}

fn day_shape(hour: f64) -> f64 {
    let next = DAY.iter().position(|&(h, _)| h > hour).unwrap_or(DAY.len() - 1);
    let ((from_h, from), (to_h, to)) = (DAY[next - 1], DAY[next]);
    from + (to - from) * smooth(((hour - from_h) / (to_h - from_h)).clamp(0.0, 1.0))
}

/// What kettles, heaters and cookers on the same line take off, V: each quarter of an hour one may be switched on, for
/// two to forty minutes.
fn load_steps_v(dice: Dice, local_s: f64) -> f64 {
    const SLOT_S: f64 = 900.0;
    let slot = (local_s / SLOT_S).floor() as i64;
    (slot - 3..=slot)
        .filter(|&n| dice.even(STEP_IS, n) < 0.5)
        .filter_map(|n| {
            let start_s = (n as f64 + dice.even(STEP_START, n)) * SLOT_S;
            let span_s = 120.0 + 2_280.0 * dice.even(STEP_SPAN, n).powi(2);
            let running = (start_s..start_s + span_s).contains(&local_s);
            running.then(|| 0.5 + 1.5 * dice.even(STEP_DROP, n))
        })
        .sum()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Milliseconds of 2026-11-30, 00:00 UTC.
    const MIDNIGHT: i64 = 1_795_996_800_000;

    fn at(hall: &Hall, hour: f64) -> HallState {
        hall.at(Utc(MIDNIGHT + (hour * 3_600_000.0) as i64))
    }

    /// The mean mains over half an hour around each of ten days' `hour`.
    fn mean_mains(hall: &Hall, hour: f64) -> f64 {
        let seconds = || (0..10).flat_map(|day| (-900..900).step_by(10).map(move |s| day * 86_400 + s));
        let sum: f64 = seconds().map(|s| at(hall, hour + f64::from(s) / 3600.0).mains_v).sum();
        sum / seconds().count() as f64
    }

    #[test]
    fn a_time_always_shows_the_same_and_another_seed_something_else() {
        let t = Utc(MIDNIGHT + 70_123_456);
        assert_eq!(Hall::new(1).at(t), Hall::new(1).at(t));
        assert_ne!(Hall::new(1).at(t), Hall::new(2).at(t));
        let shifted = Hall { ahead_of_utc_s: 3_600, ..Hall::new(1) };
        let (early, late) = (Hall::new(1).at(Utc(t.0 + 3_600_000)), shifted.at(t));
        // The noise follows UTC, all else the local clock.
        assert!((early.mains_v - late.mains_v).abs() < 0.6, "{early:?} {late:?}");
    }

    #[test]
    fn the_day_dips_in_the_morning_and_at_dinner_and_peaks_late_in_the_evening() {
        // Shape: handbook section 11, "morning and evening dips with load, night rise" (open data set, computed).
        let hall = Hall::new(7);
        let [night, morning, afternoon, dinner, late] =
            [3.0, 9.5, 15.0, 19.0, 22.5].map(|h| mean_mains(&hall, h));
        assert!(night > morning + 2.0 && afternoon > morning + 2.0, "{night} {morning} {afternoon}");
        assert!(afternoon > dinner + 2.0 && late > dinner + 6.0, "{afternoon} {dinner} {late}");
        assert!(late > night + 1.0, "{late} {night}");
    }

    #[test]
    fn a_day_ranges_over_about_as_many_volts_as_a_real_one() {
        // Handbook section 11: daily range of 5-minute means, median 11.5 V.
        for day in 0..7 {
            let mains =
                (0..288).map(|i| at(&Hall::new(7), f64::from(day * 24) + f64::from(i) / 12.0).mains_v);
            let (low, high) = mains.fold((f64::MAX, f64::MIN), |(l, h), v| (l.min(v), h.max(v)));
            assert!((8.0..20.0).contains(&(high - low)), "day {day}: {low} to {high}");
            assert!(low > 220.0 && high < 253.0, "day {day}: {low} to {high}");
        }
    }

    #[test]
    fn the_rail_rises_unloaded_and_falls_as_the_valves_warm_and_dies_away_when_switched_off() {
        let hall = Hall::new(7);
        let off = at(&hall, 16.99);
        assert!(!off.amplifier_on && off.rail_v.abs() < 1.0, "{off:?}");
        let cold = at(&hall, 17.0 + 3.0 / 3600.0);
        let warm = at(&hall, 17.0 + 60.0 / 3600.0);
        assert!(cold.warmth < 0.01 && warm.warmth > 0.99);
        assert!((cold.rail_v - rail_v(cold.mains_v, 0.0)).abs() < 2.0, "{cold:?}");
        assert!((warm.rail_v / warm.mains_v) < 0.95 * (cold.rail_v / cold.mains_v), "{cold:?} {warm:?}");
        let gone = at(&hall, 23.0 + 51.0 / 60.0);
        assert!(!gone.amplifier_on && gone.rail_v.abs() < 1.0, "{gone:?}");
    }

    #[test]
    fn the_made_up_supply_keeps_the_figures_it_was_made_to() {
        // Unloaded: the winding's peak less two diodes, 350·√2 − 1.7 = 493.27 V at 220 V; idle: 452 V.
        assert!((rail_v(220.0, 0.0) - 493.27).abs() < 0.01);
        assert!((rail_v(220.0, 1.0) - 452.0).abs() < 0.05);
    }

    #[test]
    fn the_noise_of_a_second_is_what_a_logger_shows() {
        let hall = Hall::new(7);
        let start = MIDNIGHT + 12 * 3_600_000;
        let steps: Vec<f64> = (0..1_000)
            .map(|i| hall.at(Utc(start + i * 100)).mains_v - hall.at(Utc(start + i * 100 + 1)).mains_v)
            .collect();
        // The difference of two readings has √2 times the noise of one, 0.08 V.
        let sd = (steps.iter().map(|d| d * d).sum::<f64>() / steps.len() as f64).sqrt();
        assert!((sd - 0.113).abs() < 0.02, "{sd}");
    }
}
