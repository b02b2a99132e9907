//! Percentiles, shares and the duration curve of values that each stand for some time.

/// Values in rising order, each with the time that it stands for.
///
/// The percentile is the linear one, "type 7" of Hyndman and Fan (The American Statistician 50, 1996): of n equally
/// weighted values the k-th smallest (from 0) is the percentile 100·k/(n − 1), and between two of them the line. With
/// unequal weights the k-th stands at the middle of its own weight, counted from the middle of the first to the
/// middle of the last; with equal weights that is the same.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Distribution {
    /// Rising.
    values: Vec<f64>,
    /// Weight of all values before, and half of its own: the middle of each value's weight. Never falling.
    middles: Vec<f64>,
    /// Weight of all values before. One longer than `values`: the last is the whole weight.
    before: Vec<f64>,
}

impl Distribution {
    /// Of values that stand for equal times. Values that aren't finite are left out.
    pub fn new(values: impl IntoIterator<Item = f64>) -> Self {
        Distribution::weighted(values.into_iter().map(|v| (v, 1.0)))
    }

    /// Of values, each with the time that it stands for, in any unit. Pairs with a value that isn't finite, or a
    /// weight that isn't above zero, are left out.
    pub fn weighted(pairs: impl IntoIterator<Item = (f64, f64)>) -> Self {
        let mut pairs: Vec<(f64, f64)> =
            pairs.into_iter().filter(|(v, w)| v.is_finite() && w.is_finite() && *w > 0.0).collect();
        // By weight too, so that the order in which equal values came never matters.
        pairs.sort_unstable_by(|a, b| a.0.total_cmp(&b.0).then(a.1.total_cmp(&b.1)));
        let mut middles = Vec::with_capacity(pairs.len());
        let mut before = Vec::with_capacity(pairs.len() + 1);
        let mut sum = 0.0;
        for (_, weight) in &pairs {
            before.push(sum);
            middles.push(sum + weight / 2.0);
            sum += weight;
        }
        before.push(sum);
        Distribution { values: pairs.into_iter().map(|(v, _)| v).collect(), middles, before }
    }

    /// How many values.
    pub fn len(&self) -> usize {
        self.values.len()
    }

    /// Whether there is no value at all.
    pub fn is_empty(&self) -> bool {
        self.values.is_empty()
    }

    /// The lowest value.
    pub fn min(&self) -> Option<f64> {
        self.values.first().copied()
    }

    /// The highest value.
    pub fn max(&self) -> Option<f64> {
        self.values.last().copied()
    }

    /// The percentile `pct`, 0 to 100 (beyond these: the lowest, the highest); `None` of nothing.
    pub fn percentile(&self, pct: f64) -> Option<f64> {
        let (first, last) = (*self.middles.first()?, *self.middles.last()?);
        let at = first + (last - first) * (pct / 100.0).clamp(0.0, 1.0);
        let above = self.middles.partition_point(|m| *m <= at);
        if above == self.values.len() {
            return self.max();
        }
        // `at` is never below the first middle, so there is always one at or below it.
        let below = above - 1;
        let part = (at - self.middles[below]) / (self.middles[above] - self.middles[below]);
        Some(self.values[below] + part * (self.values[above] - self.values[below]))
    }

    /// The share of the time, 0 to 1, that values above `level` stand for; `None` of nothing.
    pub fn share_above(&self, level: f64) -> Option<f64> {
        let total = *self.before.last().filter(|t| **t > 0.0)?;
        let first_above = self.values.partition_point(|v| *v <= level);
        Some((total - self.before[first_above]) / total)
    }

    /// The share of the time, 0 to 1, that values from `low` to `high`, both included, stand for; `None` of nothing.
    pub fn share_within(&self, low: f64, high: f64) -> Option<f64> {
        let total = *self.before.last().filter(|t| **t > 0.0)?;
        let first = self.values.partition_point(|v| *v < low);
        let end = self.values.partition_point(|v| *v <= high).max(first);
        Some((self.before[end] - self.before[first]) / total)
    }

    /// The duration curve in `steps` equal steps of time, at least one: pairs of the share of the time (0 to 1,
    /// rising) and the value that was exceeded for that share (falling). Empty of nothing.
    pub fn duration_curve(&self, steps: usize) -> Vec<(f64, f64)> {
        let steps = steps.max(1);
        (0..=steps)
            .map(|i| i as f64 / steps as f64)
            .filter_map(|share| Some((share, self.percentile(100.0 * (1.0 - share))?)))
            .collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn close(a: Option<f64>, b: f64) -> bool {
        a.is_some_and(|a| (a - b).abs() < 1e-9)
    }

    #[test]
    fn type_7_agrees_with_its_definition_on_a_worked_case() {
        // Hyndman and Fan 1996, definition 7: position (n − 1)·p. Of 10, 20, 30, 40: (3)·0.25 = 0.75 → 17.5.
        let four = Distribution::new([40.0, 10.0, 30.0, 20.0]);
        assert!(close(four.percentile(25.0), 17.5));
        assert!(close(four.percentile(50.0), 25.0));
        assert_eq!((four.percentile(0.0), four.percentile(100.0)), (Some(10.0), Some(40.0)));
        assert_eq!((four.min(), four.max(), four.len()), (Some(10.0), Some(40.0), 4));
    }

    #[test]
    fn of_nothing_there_is_no_percentile_and_of_one_value_all_are_it() {
        let nothing = Distribution::new([f64::NAN]);
        assert!(nothing.is_empty());
        assert_eq!(
            (nothing.percentile(50.0), nothing.share_above(1.0), nothing.share_within(0.0, 1.0)),
            (None, None, None)
        );
        assert_eq!(nothing.duration_curve(4), []);
        let one = Distribution::new([230.0]);
        assert_eq!((one.percentile(5.0), one.percentile(95.0)), (Some(230.0), Some(230.0)));
    }

    #[test]
    fn shares_count_time_and_a_value_on_the_limit_is_within() {
        let day = Distribution::weighted([(230.0, 12.0), (253.0, 6.0), (253.1, 5.0), (206.9, 1.0)]);
        assert!(close(day.share_above(253.0), 5.0 / 24.0));
        assert!(close(day.share_within(207.0, 253.0), 18.0 / 24.0));
        assert!(close(day.share_within(300.0, 200.0), 0.0));
    }

    #[test]
    fn the_duration_curve_falls_from_the_highest_to_the_lowest() {
        let curve = Distribution::new([220.0, 240.0, 230.0]).duration_curve(2);
        assert_eq!(curve, [(0.0, 240.0), (0.5, 230.0), (1.0, 220.0)]);
    }

    proptest! {
        #[test]
        fn equal_weights_of_any_size_change_nothing(
            values in prop::collection::vec(200.0..260.0f64, 1..60),
            weight in 0.001..1000.0f64,
            pct in 0.0..100.0f64,
        ) {
            let plain = Distribution::new(values.iter().copied());
            let weighted = Distribution::weighted(values.iter().map(|v| (*v, weight)));
            // Type 7 by its definition.
            let mut sorted = values.clone();
            sorted.sort_by(f64::total_cmp);
            let position = (sorted.len() - 1) as f64 * pct / 100.0;
            let low = position.floor() as usize;
            let high = (low + 1).min(sorted.len() - 1);
            let by_definition = sorted[low] + (position - low as f64) * (sorted[high] - sorted[low]);
            prop_assert!(close(plain.percentile(pct), by_definition));
            prop_assert!(close(weighted.percentile(pct), by_definition));
        }

        #[test]
        fn a_value_that_stands_longer_draws_the_median_to_itself(extra in 1.0..50.0f64) {
            let even = Distribution::weighted([(220.0, 1.0), (230.0, 1.0), (240.0, 1.0)]);
            let drawn = Distribution::weighted([(220.0, 1.0), (230.0, 1.0), (240.0, 1.0 + extra)]);
            prop_assert!(drawn.percentile(50.0) > even.percentile(50.0));
        }
    }
}
