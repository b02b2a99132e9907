//! Pairs of mains and rail, made of two channels' readings.

use std::collections::BTreeMap;

/// One reading of a channel: milliseconds of universal time, and volts.
pub type Sampled = (i64, f64);

/// Mains and rail over the same short stretch.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pair {
    /// Where the stretch begins, ms of universal time.
    pub at_ms: i64,
    /// Median of the mains, V r.m.s.
    pub mains_v: f64,
    /// Median of the rail, V: a few loud moments don't move it.
    pub rail_v: f64,
}

/// Pairs of the stretches of `width_ms` in which both channels have readings, in order of time. Readings may come in
/// any order.
pub fn pairs(
    mains: impl IntoIterator<Item = Sampled>,
    rail: impl IntoIterator<Item = Sampled>,
    width_ms: i64,
) -> Vec<Pair> {
    let (mains, mut rail) = (stretches(mains, width_ms), stretches(rail, width_ms));
    mains
        .into_iter()
        .filter_map(|(stretch, mains)| {
            let rail = rail.remove(&stretch)?;
            Some(Pair { at_ms: stretch * width_ms, mains_v: median(mains), rail_v: median(rail) })
        })
        .collect()
}

fn stretches(readings: impl IntoIterator<Item = Sampled>, width_ms: i64) -> BTreeMap<i64, Vec<f64>> {
    let mut stretches: BTreeMap<i64, Vec<f64>> = BTreeMap::new();
    for (at_ms, volts) in readings {
        stretches.entry(at_ms.div_euclid(width_ms)).or_default().push(volts);
    }
    stretches
}

/// The middle value, of an even number the mean of the two middle ones; `values` isn't empty.
pub(super) fn median(mut values: Vec<f64>) -> f64 {
    values.sort_by(f64::total_cmp);
    let middle = values.len() / 2;
    if values.len() % 2 == 1 { values[middle] } else { (values[middle - 1] + values[middle]) / 2.0 }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn readings_of_one_minute_become_one_pair_and_a_minute_that_lacks_one_channel_none() {
        let mains = [(1_000, 230.0), (2_000, 231.0), (3_000, 232.0), (61_000, 229.0), (125_000, 228.0)];
        let rail = [(1_500, 450.0), (2_500, 300.0), (3_500, 452.0), (121_000, 440.0), (122_000, 442.0)];
        let found = pairs(mains, rail, 60_000);
        let first = Pair { at_ms: 0, mains_v: 231.0, rail_v: 450.0 };
        assert_eq!(found, [first, Pair { at_ms: 120_000, mains_v: 228.0, rail_v: 441.0 }]);
    }
}
