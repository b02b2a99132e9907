//! A bucking winding: a small transformer's secondary in series with the mains and against it.

/// Standard secondary volts, V r.m.s. Common practice, no source.
pub const STANDARD_SECONDARIES_V: [f64; 9] = [6.0, 9.0, 12.0, 15.0, 18.0, 24.0, 30.0, 36.0, 48.0];

/// The preferred sizes of small transformers, VA. Common practice, no source.
const SIZES_VA: [f64; 12] = [15.0, 20.0, 30.0, 50.0, 60.0, 80.0, 100.0, 120.0, 160.0, 225.0, 300.0, 500.0];

/// A bucking transformer, its primary across the mains ahead of it.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Bucking {
    /// Its secondary, V r.m.s. at `nominal_v`.
    pub secondary_v: f64,
    /// The mains that its primary is made for, V r.m.s.
    pub nominal_v: f64,
}

impl Bucking {
    /// What it leaves of any mains, as a factor: 1 − V_b/V_n.
    pub fn factor(&self) -> f64 {
        1.0 - self.secondary_v / self.nominal_v
    }

    /// What its secondary must bear while the amplifier draws `primary_a` r.m.s. at `mains_v`, VA: the whole primary
    /// current.
    pub fn load_va(&self, mains_v: f64, primary_a: f64) -> f64 {
        self.secondary_v * mains_v / self.nominal_v * primary_a
    }

    /// The least preferred size that has half as much again as that load; `None` above 500 VA.
    pub fn size_va(&self, mains_v: f64, primary_a: f64) -> Option<f64> {
        let wanted = 1.5 * self.load_va(mains_v, primary_a);
        SIZES_VA.into_iter().find(|size| *size >= wanted)
    }

    /// The least standard winding that leaves `wanted` of the mains or less, as a factor; `None` where none does.
    pub fn for_factor(wanted: f64, nominal_v: f64) -> Option<Self> {
        STANDARD_SECONDARIES_V
            .into_iter()
            .map(|secondary_v| Bucking { secondary_v, nominal_v })
            .find(|bucking| bucking.factor() <= wanted)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_winding_of_12_v_takes_its_share() {
        // Handbook oracle O37: 12 V on 230 V leave 0.9478.
        let bucking = Bucking { secondary_v: 12.0, nominal_v: 230.0 };
        assert!((bucking.factor() - 0.9478).abs() < 1e-4);
        // Handbook section 5, fact 5: VA = V_b·I.
        assert!((bucking.load_va(230.0, 1.5) - 18.0).abs() < 1e-9);
        assert_eq!(bucking.size_va(230.0, 1.5), Some(30.0));
        // 10 % more mains, 10 % more volts across it.
        assert!((bucking.load_va(253.0, 1.5) - 19.8).abs() < 1e-9);
        assert_eq!(bucking.size_va(230.0, 40.0), None);
    }

    #[test]
    fn the_least_winding_that_is_enough_is_taken() {
        let of = |factor| Bucking::for_factor(factor, 230.0).map(|b| b.secondary_v);
        assert_eq!(of(0.95), Some(12.0));
        assert_eq!(of(0.94), Some(15.0));
        assert_eq!(of(0.5), None);
    }
}
