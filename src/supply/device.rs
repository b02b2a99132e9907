//! The laws of the parts that conduct one way: the rectifying device and a dropper in the rectifier's return.

use super::circuit::{Device, Dropper};

/// Volts across one conducting device as a function of its current.
#[derive(Clone, Copy, Debug)]
pub(super) enum DiodeLaw {
    /// v = offset + ohm·i.
    Straight {
        /// V.
        offset_v: f64,
        /// Ω.
        ohm: f64,
    },
    /// Child–Langmuir: i = k·v^1.5, so v = (i/k)^(2/3).
    SpaceCharge {
        /// k, A/V^1.5.
        perveance: f64,
    },
}

impl DiodeLaw {
    pub(super) fn of(device: &Device) -> Self {
        match *device {
            Device::Silicon { forward_v, on_ohm } => DiodeLaw::Straight { offset_v: forward_v, ohm: on_ohm },
            Device::Valve { perveance, .. } => DiodeLaw::SpaceCharge { perveance },
        }
    }

    /// Volts at which conduction sets in.
    pub(super) fn knee_v(self) -> f64 {
        match self {
            DiodeLaw::Straight { offset_v, .. } => offset_v,
            DiodeLaw::SpaceCharge { .. } => 0.0,
        }
    }

    /// Volts across it at `i` > 0, and their slope in Ω.
    pub(super) fn volts(self, i: f64) -> (f64, f64) {
        match self {
            DiodeLaw::Straight { offset_v, ohm } => (offset_v + ohm * i, ohm),
            DiodeLaw::SpaceCharge { perveance } => {
                let root = (i / perveance).cbrt();
                (root * root, 2.0 / (3.0 * perveance * root))
            }
        }
    }
}

/// What a dropper in the return takes: knee + ohm·i + root·√i while i > 0, nothing in reverse.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct ReturnDrop {
    /// V.
    pub(super) knee_v: f64,
    /// Ω.
    pub(super) ohm: f64,
    /// 1/√k of the MOSFET's square law, V/√A; zero without one.
    pub(super) root: f64,
}

impl ReturnDrop {
    pub(super) fn of(dropper: Option<&Dropper>) -> Self {
        match dropper {
            Some(&Dropper::ReturnMosfet { zener_v, threshold_v, k_a_per_v2, .. }) => {
                ReturnDrop { knee_v: zener_v + threshold_v, ohm: 0.0, root: 1.0 / k_a_per_v2.sqrt() }
            }
            Some(&Dropper::ReturnZener { zener_v, zener_ohm }) => {
                ReturnDrop { knee_v: zener_v, ohm: zener_ohm, root: 0.0 }
            }
            Some(&Dropper::ReturnResistor(ohm)) => ReturnDrop { ohm, ..ReturnDrop::default() },
            Some(Dropper::LineResistor(_)) | None => ReturnDrop::default(),
        }
    }

    /// Volts across it at `i`, and their slope in Ω: nothing at no current.
    pub(super) fn volts(self, i: f64) -> (f64, f64) {
        if i <= 0.0 {
            return (0.0, 0.0);
        }
        let above = self.root * i.sqrt();
        (self.knee_v + self.ohm * i + above, self.ohm + 0.5 * above / i)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn space_charge_carries_a_data_sheet_point_to_another_current() {
        // Child–Langmuir from data-sheet points (computed): 22 V at 70 mA, 45 V at 225 mA, 67 V at 250 mA → volts at
        // 100 mA.
        for (drop_v, at_a, at_100_ma) in [(22.0, 0.070, 27.9), (45.0, 0.225, 26.2), (67.0, 0.250, 36.4)] {
            let law = DiodeLaw::SpaceCharge { perveance: at_a / f64::powf(drop_v, 1.5) };
            assert!((law.volts(0.1).0 - at_100_ma).abs() < 0.1, "{drop_v} V: {}", law.volts(0.1).0);
        }
    }

    #[test]
    fn slopes_are_the_derivatives_of_the_volts() {
        let valve = DiodeLaw::SpaceCharge { perveance: 8e-4 };
        let mosfet = ReturnDrop { knee_v: 40.0, ohm: 2.0, root: 1.5 };
        let step = 1e-7;
        for i in [0.01, 0.3, 2.0] {
            let numeric = (valve.volts(i + step).0 - valve.volts(i - step).0) / (2.0 * step);
            assert!((numeric / valve.volts(i).1 - 1.0).abs() < 1e-6);
            let numeric = (mosfet.volts(i + step).0 - mosfet.volts(i - step).0) / (2.0 * step);
            assert!((numeric / mosfet.volts(i).1 - 1.0).abs() < 1e-6);
        }
    }
}
