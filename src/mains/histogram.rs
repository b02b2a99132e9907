//! Exact percentiles of very many readings: counted by the millivolt, so that a year of them takes no sorting and no
//! memory of its own size.

use crate::quantity::Millivolts;

/// How often each millivolt value occurred.
#[derive(Clone, Debug, Default)]
pub struct Histogram {
    /// The value that `counts[0]` counts.
    first_mv: i32,
    counts: Vec<u32>,
    total: u64,
}

impl Histogram {
    /// Counts one value. Memory follows the range of the values, 4 bytes a millivolt.
    pub fn add(&mut self, value: Millivolts) {
        let index = i64::from(value.0) - i64::from(self.first_mv);
        match usize::try_from(index).ok().filter(|index| *index < self.counts.len()) {
            Some(index) => self.counts[index] += 1,
            None => self.widen(value.0),
        }
        self.total += 1;
    }

    /// How many values were counted.
    pub fn len(&self) -> u64 {
        self.total
    }

    /// Whether none was.
    pub fn is_empty(&self) -> bool {
        self.total == 0
    }

    /// The percentile `pct` (0 to 100) by linear interpolation between ranks, type 7 of Hyndman and Fan (1996), V; `None`
    /// of nothing.
    pub fn percentile(&self, pct: f64) -> Option<f64> {
        if self.total == 0 {
            return None;
        }
        let rank = pct.clamp(0.0, 100.0) / 100.0 * (self.total - 1) as f64;
        let (low, high) = (self.at_rank(rank.floor() as u64), self.at_rank(rank.ceil() as u64));
        Some((low + (high - low) * rank.fract()) / 1000.0)
    }

    fn at_rank(&self, rank: u64) -> f64 {
        let mut passed = 0;
        for (index, count) in self.counts.iter().enumerate() {
            passed += u64::from(*count);
            if passed > rank {
                return f64::from(self.first_mv) + index as f64;
            }
        }
        f64::from(self.first_mv)
    }

    /// Makes room for `mv`, ten volts to spare on its side, and counts it.
    fn widen(&mut self, mv: i32) {
        const SPARE: i32 = 10_000;
        if self.counts.is_empty() {
            self.first_mv = mv.saturating_sub(SPARE);
            self.counts = vec![0; SPARE as usize];
        }
        if mv < self.first_mv {
            let first = mv.saturating_sub(SPARE);
            let more = (i64::from(self.first_mv) - i64::from(first)) as usize;
            self.counts.splice(0..0, std::iter::repeat_n(0, more));
            self.first_mv = first;
        }
        let index = (i64::from(mv) - i64::from(self.first_mv)) as usize;
        if index >= self.counts.len() {
            self.counts.resize(index + SPARE as usize, 0);
        }
        self.counts[index] += 1;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::mains::Distribution;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn it_says_what_sorting_all_of_them_says(values in prop::collection::vec(-60_000..400_000_i32, 1..200)) {
            let mut histogram = Histogram::default();
            values.iter().for_each(|mv| histogram.add(Millivolts(*mv)));
            let sorted = Distribution::new(values.iter().map(|mv| f64::from(*mv) / 1000.0));
            for pct in [0.0, 1.0, 5.0, 50.0, 95.0, 99.0, 100.0] {
                let (a, b) = (histogram.percentile(pct).unwrap(), sorted.percentile(pct).unwrap());
                prop_assert!((a - b).abs() < 1e-9, "{pct}: {a} {b}");
            }
            prop_assert_eq!(histogram.len(), values.len() as u64);
        }
    }

    #[test]
    fn nothing_has_no_percentile() {
        assert_eq!(Histogram::default().percentile(50.0), None);
    }
}
