//! When a receiver that failed is tried again: a pure function, so that an hour of failures is tested at a desk.

use std::time::Duration;

/// After the first failure.
const FIRST: Duration = Duration::from_secs(5);
/// However often it failed. A warning that is a quarter of an hour late can still save the valves.
const LONGEST: Duration = Duration::from_secs(15 * 60);
/// The longest wait that a receiver may ask for: none may silence the warnings for a day.
const LONGEST_ASKED: Duration = Duration::from_secs(60 * 60);

/// How long to wait after the `attempts`th failure in a row (1, 2, 3 …): 5 s, doubled each time, at most 15 min, and
/// each spread over ±25 % so that many senders don't come back to one receiver together.
///
/// `retry_after` is the wait that the receiver asked for; it is kept, up to one hour, where it is longer, and spread
/// only upwards: nobody comes earlier than asked. `jitter` is a random number in [0, 1).
pub(super) fn next_attempt(attempts: u32, retry_after: Option<Duration>, jitter: f64) -> Duration {
    let doublings = attempts.saturating_sub(1).min(16);
    let own = FIRST.saturating_mul(1 << doublings).min(LONGEST).mul_f64(0.75 + 0.5 * jitter);
    let asked = retry_after.unwrap_or_default().min(LONGEST_ASKED).mul_f64(1.0 + 0.25 * jitter);
    own.max(asked)
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    /// The middle of the jitter's range, where the wait is the nominal one.
    const MIDDLE: f64 = 0.5;

    #[test]
    fn the_wait_doubles_from_five_seconds_to_a_quarter_of_an_hour() {
        let waits: Vec<_> = (1..=10).map(|n| next_attempt(n, None, MIDDLE).as_secs()).collect();
        assert_eq!(waits, [5, 10, 20, 40, 80, 160, 320, 640, 900, 900]);
        assert_eq!(next_attempt(u32::MAX, None, MIDDLE), LONGEST);
    }

    #[test]
    fn a_longer_wait_that_the_receiver_asks_for_is_kept_up_to_an_hour() {
        let asked = |s| next_attempt(1, Some(Duration::from_secs(s)), 0.0);
        assert_eq!(asked(120), Duration::from_secs(120));
        assert_eq!(asked(1), Duration::from_millis(3_750), "a shorter one doesn't hurry us");
        assert_eq!(asked(86_400), LONGEST_ASKED);
    }

    proptest! {
        #[test]
        fn every_wait_stays_within_a_quarter_of_its_nominal_one(attempts in 0u32.., jitter in 0.0..1.0f64) {
            let nominal = next_attempt(attempts, None, MIDDLE);
            let wait = next_attempt(attempts, None, jitter);
            prop_assert!(wait >= nominal.mul_f64(0.749_999) && wait <= nominal.mul_f64(1.250_001));
        }

        #[test]
        fn nobody_comes_earlier_than_asked(attempts in 0u32..50, asked in 0u64..3_600, jitter in 0.0..1.0f64) {
            let asked = Duration::from_secs(asked);
            prop_assert!(next_attempt(attempts, Some(asked), jitter) >= asked);
        }
    }
}
