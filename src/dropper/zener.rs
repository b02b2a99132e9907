//! Zeners by their nominal volts: tolerance, temperature, and strings that make a wanted drop.

use super::e_series::{ESeries, Fit};

/// Temperature coefficient by nominal volts, %/K: the family 1N957–1N978 (its data sheet), 6.8 V and up.
const COEFFICIENT: [(f64, f64); 14] = [
    (6.8, 0.050),
    (7.5, 0.058),
    (8.2, 0.062),
    (9.1, 0.068),
    (10.0, 0.075),
    (12.0, 0.077),
    (15.0, 0.082),
    (18.0, 0.085),
    (22.0, 0.087),
    (27.0, 0.090),
    (33.0, 0.092),
    (39.0, 0.094),
    (47.0, 0.095),
    (51.0, 0.096),
];

/// Limits at test current by nominal volts where the 500 mW E24 family's sheet gives others than ±5 % rounded, V.
const LIMITS: [(f64, f64, f64); 14] = [
    (5.1, 4.8, 5.4),
    (6.8, 6.4, 7.2),
    (10.0, 9.4, 10.6),
    (12.0, 11.4, 12.7),
    (15.0, 13.8, 15.6),
    (18.0, 16.8, 19.1),
    (22.0, 20.8, 23.3),
    (27.0, 25.1, 28.9),
    (33.0, 31.0, 35.0),
    (39.0, 37.0, 41.0),
    (47.0, 44.0, 50.0),
    (56.0, 52.0, 60.0),
    (68.0, 64.0, 72.0),
    (75.0, 70.0, 79.0),
];

/// The tolerance assumed where no sheet's limits are at hand, as a fraction; the family's own reach 8 %.
const TOLERANCE: f64 = 0.08;

/// One zener.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Zener {
    /// Nominal volts, V.
    pub nominal_v: f64,
}

impl Zener {
    /// Lowest and highest volts at test current and 25 °C, V.
    pub fn limits_v(self) -> (f64, f64) {
        LIMITS
            .iter()
            .find(|row| same(row.0, self.nominal_v))
            .map_or((self.nominal_v * (1.0 - TOLERANCE), self.nominal_v * (1.0 + TOLERANCE)), |row| {
                (row.1, row.2)
            })
    }

    /// Temperature coefficient, %/K, interpolated; beyond the table's ends that end's. `None` below 6.8 V, where it
    /// passes through zero and differs from part to part.
    pub fn coefficient_pct_per_k(self) -> Option<f64> {
        let at = COEFFICIENT.partition_point(|row| row.0 <= self.nominal_v);
        let below = COEFFICIENT.get(at.checked_sub(1)?)?;
        let Some(above) = COEFFICIENT.get(at) else { return Some(below.1) };
        Some(below.1 + (self.nominal_v - below.0) / (above.0 - below.0) * (above.1 - below.1))
    }

    /// By how much its volts rise when it is `rise_k` warmer, V.
    pub fn drift_v(self, rise_k: f64) -> Option<f64> {
        Some(self.nominal_v * self.coefficient_pct_per_k()? / 100.0 * rise_k)
    }
}

fn same(a: f64, b: f64) -> bool {
    (a - b).abs() < 1e-6
}

/// Zeners in series, all of one nominal.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ZenerString {
    /// Each of them.
    pub zener: Zener,
    /// How many.
    pub count: u32,
}

impl ZenerString {
    /// One, or two in series, from E24: the string whose nominal is the nearest that is not below `wanted_v`; of equals the
    /// single one. `None` unless `wanted_v` is at least 5.1 V, below which a zener is soft, and at most twice 75 V.
    pub fn at_least(wanted_v: f64) -> Option<Self> {
        let of = |count: u32| {
            let nominal_v = ESeries::E24.choose(wanted_v / f64::from(count), Fit::Above)?;
            (5.1..=75.0).contains(&nominal_v).then_some(ZenerString { zener: Zener { nominal_v }, count })
        };
        let strings = [of(1), of(2)].into_iter().flatten();
        strings.min_by(|a, b| a.nominal_v().total_cmp(&b.nominal_v()))
    }

    /// Sum of the nominals, V.
    pub fn nominal_v(&self) -> f64 {
        self.zener.nominal_v * f64::from(self.count)
    }

    /// Sums of the limits, V.
    pub fn limits_v(&self) -> (f64, f64) {
        let (low, high) = self.zener.limits_v();
        (low * f64::from(self.count), high * f64::from(self.count))
    }

    /// Lowest cold and highest `rise_k` warmer, V. Below 6.8 V, where the sign is unknown, the limits alone.
    pub fn range_v(&self, rise_k: f64) -> (f64, f64) {
        let (low, high) = self.limits_v();
        (low, high + f64::from(self.count) * self.zener.drift_v(rise_k).unwrap_or(0.0).max(0.0))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_warm_zener_stands_higher() {
        // Handbook oracle O28 (sheet of 1N957–1N978): 39 V, 0.094 %/K, 50 K make +1.83 V.
        let drift = Zener { nominal_v: 39.0 }.drift_v(50.0).unwrap();
        assert!((drift - 1.83).abs() < 0.01, "{drift}");
        assert_eq!(Zener { nominal_v: 5.1 }.drift_v(50.0), None);
        assert_eq!(Zener { nominal_v: 75.0 }.coefficient_pct_per_k(), Some(0.096));
        let between = Zener { nominal_v: 20.0 }.coefficient_pct_per_k().unwrap();
        assert!((between - 0.086).abs() < 1e-9, "{between}");
    }

    #[test]
    fn a_strings_limits_add_up() {
        // Handbook oracle O28 (sheet of the 500 mW family): three of 27 V span 75.3 to 86.7 V.
        let three = ZenerString { zener: Zener { nominal_v: 27.0 }, count: 3 };
        let (low, high) = three.limits_v();
        assert!((low - 75.3).abs() < 0.01 && (high - 86.7).abs() < 0.01, "{low} {high}");
        // Common practice, no source: two of 18 V span 33.6 to 38.2 V over their tolerance.
        let two = ZenerString { zener: Zener { nominal_v: 18.0 }, count: 2 };
        let (low, high) = two.limits_v();
        assert!((low - 33.6).abs() < 1e-9 && (high - 38.2).abs() < 1e-9, "{low} {high}");
        // 0.085 %/K of 18 V (the same sheet) over 50 K, twice.
        let (cold, warm) = two.range_v(50.0);
        assert!((cold - 33.6).abs() < 1e-9 && (warm - 38.2 - 1.53).abs() < 1e-9, "{cold} {warm}");
    }

    #[test]
    fn the_nearest_string_that_is_enough_is_taken() {
        let count_and_each = |v| ZenerString::at_least(v).map(|s| (s.count, s.zener.nominal_v));
        assert_eq!(count_and_each(36.0), Some((1, 36.0)));
        assert_eq!(count_and_each(53.5), Some((2, 27.0)));
        assert_eq!(count_and_each(90.0), Some((2, 47.0)));
        assert_eq!(count_and_each(151.0), None);
        assert_eq!(count_and_each(1.0), None);
    }
}
