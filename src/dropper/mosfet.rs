//! A power MOSFET whose gate stands on zeners above its drain's far end: drop = zeners + V_GS.

use super::e_series::{ESeries, Fit};

/// The range that V_GS may lie in where nothing is known of the part, V. Common practice, no source.
pub const VGS_UNKNOWN_V: (f64, f64) = (2.0, 6.0);

/// The square law i = k·(v_GS − threshold)².
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Square {
    /// Gate threshold, V.
    pub threshold_v: f64,
    /// A/V².
    pub k_a_per_v2: f64,
}

impl Square {
    /// The law through the threshold and one point of the part's transfer curve. `None` unless the point lies above the
    /// threshold at a current above zero.
    pub fn through(threshold_v: f64, vgs_v: f64, at_a: f64) -> Option<Self> {
        (vgs_v > threshold_v && at_a > 0.0)
            .then(|| Square { threshold_v, k_a_per_v2: at_a / (vgs_v - threshold_v).powi(2) })
    }

    /// V_GS at `current_a`, V; the threshold itself where none flows.
    pub fn vgs_v(&self, current_a: f64) -> f64 {
        self.threshold_v + (current_a.max(0.0) / self.k_a_per_v2).sqrt()
    }
}

/// The parts about the gate.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GateBias {
    /// From gate to source: V_GS over it draws the zeners' current, Ω (E12).
    pub bias_ohm: f64,
    /// In series with the gate, against oscillation, Ω.
    pub stopper_ohm: f64,
    /// The zener from gate to source, V: below the usual limit of ±20 V.
    pub clamp_v: f64,
}

impl GateBias {
    /// For `zener_a` through the zeners at `vgs_v`: the nearest E12 value. Stopper and clamp are common practice, no
    /// source. `None` unless both are above zero.
    pub fn new(vgs_v: f64, zener_a: f64) -> Option<Self> {
        let bias_ohm = ESeries::E12.choose(vgs_v / zener_a, Fit::Nearest)?;
        Some(GateBias { bias_ohm, stopper_ohm: 220.0, clamp_v: 12.0 })
    }

    /// What the zeners carry at `vgs_v`, A.
    pub fn zener_a(&self, vgs_v: f64) -> f64 {
        vgs_v / self.bias_ohm
    }
}

#[cfg(test)]
mod tests {
    use super::super::zener::{Zener, ZenerString};
    use super::*;

    #[test]
    fn the_bias_resistor_draws_the_zeners_current() {
        // Common practice, no source: 6 V and 5 mA through the zener ask for 1.2 kΩ, with a 220 Ω stopper.
        let bias = GateBias::new(6.0, 5e-3).unwrap();
        assert_eq!((bias.bias_ohm, bias.stopper_ohm, bias.clamp_v), (1200.0, 220.0, 12.0));
        assert!((bias.zener_a(6.0) - 5e-3).abs() < 1e-12);
        assert_eq!(GateBias::new(6.0, 0.0), None);
    }

    #[test]
    fn vgs_lies_where_such_parts_work() {
        // Common practice, no source: 5 to 6 V at 1 A for a high-voltage type, and 3 to 9 V over the current range.
        let part = Square::through(3.2, 5.5, 1.0).unwrap();
        for milliamperes in [10, 100, 500, 1000, 3000, 5000] {
            let vgs = part.vgs_v(f64::from(milliamperes) / 1000.0);
            assert!((3.0..=9.0).contains(&vgs), "{milliamperes} mA: {vgs} V");
        }
        assert!((part.vgs_v(1.0) - 5.5).abs() < 1e-12);
        assert_eq!(part.vgs_v(-1.0), 3.2);
        assert_eq!(Square::through(4.0, 4.0, 1.0), None);
    }

    #[test]
    fn two_zeners_and_the_gate_make_the_drop() {
        // Common practice, no source: two of 18 V and a V_GS of 2 to 3 V drop 38 to 39 V; 545 V become about 506 V.
        let string = ZenerString { zener: Zener { nominal_v: 18.0 }, count: 2 };
        let part = Square::through(2.0, 3.0, 0.5).unwrap();
        for current_a in [0.0, 0.1, 0.5] {
            let drop = string.nominal_v() + part.vgs_v(current_a);
            assert!((38.0..=39.0).contains(&drop), "{drop}");
            assert!((545.0 - drop - 506.0f64).abs() <= 1.0, "{drop}");
        }
    }
}
