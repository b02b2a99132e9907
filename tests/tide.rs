//! The tide table against plain guesses, on the part of the open recording that it was not tuned on.

#[path = "support/backtest.rs"]
mod backtest;
#[path = "support/recording.rs"]
mod recording;

use std::time::Duration;

use backtest::{DAY, GUESSES, Method, OURS, Recording, judge, judge_with};
use recording::utc;

/// The tide table's constants were chosen on the days before this one.
const HELD_OUT_FROM: &str = "2007-08-29T00:00:00Z";

#[test]
fn on_days_it_was_not_tuned_on_it_beats_every_plain_guess_by_a_tenth_with_an_honest_band() {
    let house = Recording::new(recording::year_of_intervals());
    let held_out = house.day_of(utc(HELD_OUT_FROM))..house.days();
    let methods: Vec<&Method> = [&OURS].into_iter().chain(GUESSES).collect();
    let scores = judge(&house, &methods, held_out, Duration::ZERO, DAY);
    assert!(scores[0].days >= 100, "{scores:?}");
    for (guess, score) in GUESSES.iter().zip(&scores[1..]) {
        assert!(scores[0].loss <= 0.9 * score.loss, "{}: {score:?} against {:?}", guess.name, scores[0]);
    }
    assert!((0.85..=0.95).contains(&scores[0].coverage), "{:?}", scores[0]);
}

#[test]
fn the_last_hours_improve_the_next_ones() {
    let house = Recording::new(recording::year_of_intervals());
    let held_out = house.day_of(utc(HELD_OUT_FROM))..house.days();
    // From 18:00 to 24:00, once as known at midnight and once as known at 18:00.
    let evening = |m: usize| m + 108..m + 144;
    let early = judge_with(&house, &[&OURS], held_out.clone(), |_, m| (m, evening(m)))[0];
    let late = judge_with(&house, &[&OURS], held_out, |_, m| (m + 108, evening(m)))[0];
    assert!(late.loss < early.loss, "{late:?} {early:?}");
    assert!((0.85..=0.95).contains(&late.coverage), "{late:?}");
}
