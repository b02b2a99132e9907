//! Heat: what a part in the pulsed path takes, and the way out of the junction.

/// R.m.s. over mean of the charging current, as it is where nothing was solved: full wave at Rs/R = 4 to 6 % (the
/// closed form of the large capacitor, handbook section 5).
pub const PULSED_TYPICAL: f64 = 1.8;

/// Preferred ratings of wire-wound resistors, W. Common practice, no source.
const RATINGS_W: [f64; 12] = [0.5, 1.0, 2.0, 3.0, 5.0, 7.0, 10.0, 17.0, 25.0, 50.0, 100.0, 200.0];

/// The heat of a resistor in the charging path, W: R·(F·I)², with `form` the r.m.s. over the mean current `mean_a`. A part
/// of constant voltage takes V·I only.
pub fn pulsed_resistor_w(ohm: f64, form: f64, mean_a: f64) -> f64 {
    ohm * (form * mean_a).powi(2)
}

/// The least preferred rating at which a resistor that takes `loss_w` works at half of it or less (common practice, no
/// source); `None` above 100 W.
pub fn rated_power_w(loss_w: f64) -> Option<f64> {
    RATINGS_W.into_iter().find(|rated| *rated >= 2.0 * loss_w)
}

/// From junction to the air, K/W: T_j = T_a + P·(R_jc + R_cs + R_sa), IEC 60747.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct HeatPath {
    /// The hottest that the junction may be, °C.
    pub junction_c: f64,
    /// The air inside the chassis, °C.
    pub ambient_c: f64,
    /// Junction to case, K/W.
    pub junction_case_k_per_w: f64,
    /// Case to heat sink with its insulator, K/W.
    pub case_sink_k_per_w: f64,
}

impl HeatPath {
    /// The greatest thermal resistance of a heat sink that keeps the junction within its limit at `loss_w`, K/W; `None`
    /// where no heat sink can, or there is nothing to cool.
    pub fn heat_sink_k_per_w(&self, loss_w: f64) -> Option<f64> {
        let all = (self.junction_c - self.ambient_c) / loss_w;
        let sink = all - self.junction_case_k_per_w - self.case_sink_k_per_w;
        (loss_w > 0.0 && sink > 0.0).then_some(sink)
    }

    /// The junction at `loss_w` on a heat sink of `sink_k_per_w`, °C.
    pub fn junction_at_c(&self, loss_w: f64, sink_k_per_w: f64) -> f64 {
        self.ambient_c + loss_w * (self.junction_case_k_per_w + self.case_sink_k_per_w + sink_k_per_w)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Handbook oracle O25 (a heat-sink lecture): TO-220, 5 W, R_jc 3, R_cs 1 K/W, 150 °C, 50 °C.
    const LECTURE: HeatPath =
        HeatPath { junction_c: 150.0, ambient_c: 50.0, junction_case_k_per_w: 3.0, case_sink_k_per_w: 1.0 };

    #[test]
    fn the_heat_sink_leaves_the_junction_its_limit() {
        let sink = LECTURE.heat_sink_k_per_w(5.0).unwrap();
        assert!((sink - 16.0).abs() < 1e-12, "{sink}");
        // The same example's sink of 66 K at 5 W is accepted.
        assert!(66.0 / 5.0 < sink);
        assert!((LECTURE.junction_at_c(5.0, sink) - 150.0).abs() < 1e-9);
        assert_eq!(LECTURE.heat_sink_k_per_w(25.0), None);
        assert_eq!(LECTURE.heat_sink_k_per_w(0.0), None);
    }

    #[test]
    fn a_resistor_in_the_pulses_takes_more_than_a_constant_drop() {
        // Handbook oracle O26: 40 V at 150 mA is 6.0 W; made by a resistor at F = 1.8 it takes R·0.27².
        let ohm = 40.0 / 0.15;
        let heat = pulsed_resistor_w(ohm, PULSED_TYPICAL, 0.15);
        assert!((heat - ohm * 0.27f64.powi(2)).abs() < 1e-9, "{heat}");
        assert!(heat > 3.2 * 40.0 * 0.15);
        // 19.4 W at half its rating or less.
        assert_eq!(rated_power_w(heat), Some(50.0));
        assert_eq!(rated_power_w(2.5), Some(5.0));
        assert_eq!(rated_power_w(101.0), None);
    }
}
