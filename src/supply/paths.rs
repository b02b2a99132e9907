//! Which of the rectifier's two conducting paths carry current, and how much: for each path either its current is
//! zero and its driving voltage below the knee, or the voltages around it balance. This is a convex minimisation, so
//! it has one answer; it is found by trying each set of conducting paths.

use super::device::{DiodeLaw, ReturnDrop};

/// The paths' voltage balance at one instant, the rest of the circuit reduced to a source and a resistance:
/// drive − ohm·i − devices·v(i) − drop = 0 in each path that conducts.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Balance {
    /// Driving voltage of the path that the positive and of that which the negative half-wave feeds, V.
    pub(super) drive: [f64; 2],
    /// Own resistances, Ω.
    pub(super) own_ohm: [f64; 2],
    /// Mutual resistance, Ω.
    pub(super) mutual_ohm: f64,
}

/// What stands in the paths.
#[derive(Clone, Copy, Debug)]
pub(super) struct PathParts {
    /// The device's law.
    pub(super) diode: DiodeLaw,
    /// Devices in series in a path.
    pub(super) devices: f64,
    /// The dropper in the return.
    pub(super) drop: ReturnDrop,
    /// Where that dropper stands.
    pub(super) drop_in: DropIn,
}

/// Which paths a dropper in the return belongs to.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) enum DropIn {
    /// Both return through it.
    Shared,
    /// In a doubler only the lower device's current comes back from 0 V.
    Negative,
}

/// The currents, and how they answer to the drives.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct PathCurrents {
    /// A, never negative.
    pub(super) i: [f64; 2],
    /// ∂i[0]/∂drive[0], ∂i/∂drive across, ∂i[1]/∂drive[1], S.
    pub(super) siemens: [f64; 3],
}

/// Newton steps that a single scalar balance may take; convexity makes it need a handful.
const MOST_STEPS: usize = 60;

impl PathParts {
    fn has_drop(&self, path: usize) -> bool {
        path == 1 || self.drop_in == DropIn::Shared
    }

    /// Solves the balance. `guess` are currents near the answer. `None` when no set of paths was found to balance.
    pub(super) fn solve(&self, balance: &Balance, guess: [f64; 2]) -> Option<PathCurrents> {
        let first = usize::from(balance.drive[1] > balance.drive[0]);
        for path in [first, 1 - first] {
            let (i, slope) = self.one(balance.drive[path], balance.own_ohm[path], 0.0, path, guess[path])?;
            let mut found = PathCurrents::default();
            found.i[path] = i;
            if i > 0.0 {
                found.siemens[2 * path] = 1.0 / slope;
            }
            let other = 1 - path;
            let left = balance.drive[other] - balance.mutual_ohm * i - self.knee(other, i, path);
            // The weaker path alone is an answer only where the stronger one stays off beside it.
            if left <= 0.0 {
                return Some(found);
            }
        }
        self.both(balance, guess)
    }

    /// Volts that a path at no current needs before it conducts, while the other one carries `other_i`.
    fn knee(&self, path: usize, other_i: f64, other: usize) -> f64 {
        let dropper = if !self.has_drop(path) {
            0.0
        } else if self.has_drop(other) && other_i > 0.0 {
            self.drop.volts(other_i).0
        } else {
            self.drop.knee_v
        };
        self.devices * self.diode.knee_v() + dropper
    }

    /// One path's current with the other's (`beside`, A) given, and the total slope of its voltages, Ω.
    fn one(&self, drive: f64, ohm: f64, beside: f64, path: usize, guess: f64) -> Option<(f64, f64)> {
        let drop = if self.has_drop(path) { self.drop } else { ReturnDrop::default() };
        // A current beside it lifts the shared dropper.
        let beside = if self.drop_in == DropIn::Shared { beside } else { 0.0 };
        let drive = drive - drop.knee_v - drop.ohm * beside;
        let ohm = ohm + drop.ohm;
        match self.diode {
            DiodeLaw::Straight { offset_v, ohm: on_ohm } => {
                let drive = drive - self.devices * offset_v;
                let ohm = ohm + self.devices * on_ohm;
                if drive - drop.root * beside.sqrt() <= 0.0 {
                    return Some((0.0, ohm));
                }
                if drop.root == 0.0 {
                    return Some((drive / ohm, ohm));
                }
                // ohm·(q² − beside) + root·q = drive with q = √(i + beside), in the form without cancellation.
                let c = drive + ohm * beside;
                let q = 2.0 * c / (drop.root + (drop.root * drop.root + 4.0 * ohm * c).sqrt());
                Some(((q * q - beside).max(0.0), ohm + 0.5 * drop.root / q))
            }
            DiodeLaw::SpaceCharge { perveance } => {
                if drive - drop.root * beside.sqrt() <= 0.0 {
                    return Some((0.0, ohm));
                }
                self.one_valve(drive, ohm, beside, drop.root, perveance, guess)
            }
        }
    }

    /// With i = k·s³ the balance devices·s² + ohm·k·s³ + root·√(k·s³ + beside) = drive is convex and rises, so that
    /// Newton's method comes down on its root from above.
    fn one_valve(
        &self,
        drive: f64,
        ohm: f64,
        beside: f64,
        root: f64,
        k: f64,
        guess: f64,
    ) -> Option<(f64, f64)> {
        let m = self.devices;
        let highest = (drive / m).sqrt();
        let mut s =
            if guess > 1e-4 * k * highest.powi(3) { (guess / k).cbrt().min(highest) } else { highest };
        for _ in 0..MOST_STEPS {
            let i = k * s * s * s;
            let (mut excess, mut slope) = (m * s * s + ohm * i - drive, 2.0 * m * s + 3.0 * ohm * k * s * s);
            if root > 0.0 {
                let q = (i + beside).sqrt();
                excess += root * q;
                slope += 1.5 * root * k * s * s / q;
            }
            let step = excess / slope;
            s = (s - step).clamp(0.0, highest);
            if step.abs() <= 1e-13 * s {
                let i = k * s * s * s;
                let above = if root > 0.0 { 0.5 * root / (i + beside).sqrt() } else { 0.0 };
                return Some((i, ohm + 2.0 * m / (3.0 * k * s) + above));
            }
        }
        None
    }

    /// Both paths at once, as while the current changes over under leakage or a choke input.
    fn both(&self, balance: &Balance, guess: [f64; 2]) -> Option<PathCurrents> {
        // The negative path's balance with the positive one solved for it falls steadily with its current.
        let inner = |i: f64, near: f64| {
            self.one(balance.drive[0] - balance.mutual_ohm * i, balance.own_ohm[0], i, 0, near)
        };
        let outer = |i: f64, near: f64| -> Option<(f64, f64, [f64; 2], PathCurrents)> {
            let (p, p_slope) = inner(i, near)?;
            let shared = self.drop_in == DropIn::Shared;
            let (v, v_slope) = if i > 0.0 { self.diode.volts(i) } else { (self.diode.knee_v(), 0.0) };
            let through = if shared { p + i } else { i };
            let (drop_v, drop_slope) =
                if through > 0.0 { self.drop.volts(through) } else { (self.drop.knee_v, 0.0) };
            let left = balance.drive[1]
                - balance.mutual_ohm * p
                - balance.own_ohm[1] * i
                - self.devices * v
                - drop_v;
            let mutual = balance.mutual_ohm + if shared { drop_slope } else { 0.0 };
            let own = balance.own_ohm[1] + self.devices * v_slope + drop_slope;
            let determinant = own * p_slope - if p > 0.0 { mutual * mutual } else { 0.0 };
            let slope = determinant / p_slope;
            let siemens = if p > 0.0 && determinant > 0.0 {
                [own / determinant, -mutual / determinant, p_slope / determinant]
            } else {
                [0.0, 0.0, 1.0 / own]
            };
            Some((left, slope, [p, i], PathCurrents { i: [p, i], siemens }))
        };
        let scale = guess[0].max(guess[1]).max(1e-9);
        let (mut low, mut high) = (0.0, f64::INFINITY);
        let mut i = if guess[1] > 0.0 { guess[1] } else { scale * 1e-2 };
        let mut near = guess[0];
        for _ in 0..4 * MOST_STEPS {
            let (left, slope, currents, found) = outer(i, near)?;
            near = currents[0];
            if left > 0.0 {
                low = i;
            } else {
                high = i;
            }
            let step = left / slope;
            let settled = step.is_finite() && step.abs() <= 1e-12 * (i + currents[0]);
            if settled || high.is_finite() && high - low <= 1e-15 * high {
                return Some(found);
            }
            let newton = i + step;
            i = if newton.is_finite() && newton > low && newton < high {
                newton
            } else if high.is_finite() {
                0.5 * (low + high)
            } else {
                4.0 * i
            };
        }
        None
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn parts(diode: DiodeLaw, drop: ReturnDrop) -> PathParts {
        PathParts { diode, devices: 2.0, drop, drop_in: DropIn::Shared }
    }

    /// What is left of each path's balance: zero where it conducts, never above zero where it does not.
    fn left(parts: &PathParts, balance: &Balance, i: [f64; 2]) -> [f64; 2] {
        [0, 1].map(|path| {
            let other = 1 - path;
            let device_v = if i[path] > 0.0 { parts.diode.volts(i[path]).0 } else { parts.diode.knee_v() };
            let through = if parts.drop_in == DropIn::Shared { i[0] + i[1] } else { i[path] };
            let drop_v = match through > 0.0 {
                _ if !parts.has_drop(path) => 0.0,
                true => parts.drop.volts(through).0,
                false => parts.drop.knee_v,
            };
            balance.drive[path]
                - balance.own_ohm[path] * i[path]
                - balance.mutual_ohm * i[other]
                - parts.devices * device_v
                - drop_v
        })
    }

    #[test]
    fn every_answer_balances_whatever_the_parts() {
        let diodes = [
            DiodeLaw::Straight { offset_v: 0.0, ohm: 0.0 },
            DiodeLaw::Straight { offset_v: 0.85, ohm: 0.05 },
            DiodeLaw::SpaceCharge { perveance: 8.4e-4 },
        ];
        let drops = [
            ReturnDrop::default(),
            ReturnDrop { knee_v: 40.0, ohm: 2.0, root: 0.0 },
            ReturnDrop { knee_v: 38.0, ohm: 0.0, root: 1.5 },
        ];
        // (own, mutual): a reservoir, a choke input without and with leakage, a doubler.
        let circuits = [(60.0, 20.0), (2.3e6, 2.3e6 - 80.0), (2.31e6, 2.29e6), (60.0, -40.0)];
        let drives =
            [[300.0, -900.0], [-900.0, 300.0], [-5.0, -7.0], [60.0, 59.0], [4.3e5, 4.5e5], [4.4e5, 4.2e5]];
        for diode in diodes {
            for drop in drops {
                for (own, mutual) in circuits {
                    for drive in drives {
                        for drop_in in [DropIn::Shared, DropIn::Negative] {
                            let parts = PathParts { drop_in, ..parts(diode, drop) };
                            let balance = Balance { drive, own_ohm: [own; 2], mutual_ohm: mutual };
                            for guess in [[0.0, 0.0], [0.19, 5e-5], [3.0, 3.0]] {
                                let i = parts.solve(&balance, guess).expect("an answer").i;
                                let left = left(&parts, &balance, i);
                                let small = 1e-8 * (drive[0].abs() + drive[1].abs());
                                for path in [0, 1] {
                                    let holds = if i[path] > 0.0 { left[path].abs() } else { left[path] };
                                    assert!(
                                        i[path] >= 0.0 && holds <= small,
                                        "{parts:?} {balance:?}: {i:?} leave {left:?}"
                                    );
                                }
                            }
                        }
                    }
                }
            }
        }
    }
}
