//! Chance that can be repeated: numbers that depend on a seed and a place alone.

/// A source of numbers for each place in a hall's time; the same seed and place give the same number.
#[derive(Clone, Copy, Debug)]
pub(super) struct Dice {
    seed: u64,
}

impl Dice {
    pub(super) fn new(seed: u64) -> Self {
        Dice { seed }
    }

    /// 64 evenly spread bits for the `n`th place of what `what` numbers (SplitMix64's finisher, by Steele, Lea and
    /// Flood, over the mixed inputs).
    pub(super) fn bits(self, what: u64, n: i64) -> u64 {
        let mut z = self.seed ^ what.rotate_left(48);
        for word in [what, n as u64] {
            z = z.wrapping_add(word).wrapping_add(0x9E37_79B9_7F4A_7C15);
            z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
            z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
            z ^= z >> 31;
        }
        z
    }

    /// Even between 0 and 1.
    pub(super) fn even(self, what: u64, n: i64) -> f64 {
        (self.bits(what, n) >> 11) as f64 / (1u64 << 53) as f64
    }

    /// About normal, mean 0 and standard deviation 1, never beyond ±3.5: the sum of four even numbers.
    pub(super) fn normal(self, what: u64, n: i64) -> f64 {
        let bits = self.bits(what, n);
        let sum: f64 = (0..4).map(|i| f64::from((bits >> (16 * i)) as u16) / 65_535.0).sum();
        // Each has variance 1/12, the sum 1/3.
        (sum - 2.0) * 3f64.sqrt()
    }

    /// A curve through a normal number each `step` of `t`, smooth between them.
    pub(super) fn wander(self, what: u64, t: f64, step: f64) -> f64 {
        let place = t / step;
        let n = place.floor();
        let between = smooth(place - n);
        let (from, to) = (self.normal(what, n as i64), self.normal(what, n as i64 + 1));
        from + (to - from) * between
    }
}

/// From 0 to 1 without a kink at either end.
pub(super) fn smooth(x: f64) -> f64 {
    x * x * (3.0 - 2.0 * x)
}
