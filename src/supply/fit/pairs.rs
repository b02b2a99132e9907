//! Pairs of mains and rail, made of two channels' readings.

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

/// Pairs of the stretches of `width_ms` in which both channels have readings, in order of time. Each channel's readings
/// come in order of time, so that a year of them needs no room.
pub fn pairs(
    mains: impl IntoIterator<Item = Sampled>,
    rail: impl IntoIterator<Item = Sampled>,
    width_ms: i64,
) -> Vec<Pair> {
    let mut rail = stretches(rail, width_ms).into_iter().peekable();
    let mut pairs = Vec::new();
    for (stretch, mains_v) in stretches(mains, width_ms) {
        while rail.next_if(|(other, _)| *other < stretch).is_some() {}
        if let Some((_, rail_v)) = rail.next_if(|(other, _)| *other == stretch) {
            pairs.push(Pair { at_ms: stretch * width_ms, mains_v, rail_v });
        }
    }
    pairs
}

/// The median of each stretch that holds a reading.
fn stretches(readings: impl IntoIterator<Item = Sampled>, width_ms: i64) -> Vec<(i64, f64)> {
    let mut done: Vec<(i64, f64)> = Vec::new();
    let (mut now, mut values) = (i64::MIN, Vec::new());
    for (at_ms, volts) in readings {
        let stretch = at_ms.div_euclid(width_ms);
        if stretch != now && !values.is_empty() {
            done.push((now, median(std::mem::take(&mut values))));
        }
        now = stretch;
        values.push(volts);
    }
    if !values.is_empty() {
        done.push((now, median(values)));
    }
    done
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
