//! The periodic steady state by shooting: Newton's method on the state at the start of the period, with the tangent
//! map of the walk through it (T. J. Aprille and T. N. Trick, "Steady-state analysis of nonlinear circuits with
//! periodic inputs", Proc. IEEE 60, 1972), damped by the natural monotonicity test (P. Deuflhard, "Newton Methods for
//! Nonlinear Problems", Springer 2004, section 3.3).

use nalgebra::{DMatrix, DVector, Dyn, LU};

use super::network::Network;
use super::period::{Drive, Stuck, Walk, Walker};

/// What the search must reach, and how long it may try.
#[derive(Clone, Copy, Debug)]
pub(super) struct Goal<'a> {
    /// Greatest residual (I − M)⁻¹·r of any state over its scale.
    pub(super) residual: f64,
    /// Walks through the period.
    pub(super) tries: usize,
    /// Size of each state, V or A.
    pub(super) scale: &'a [f64],
    /// A first-capacitor voltage at which the rectifier surely conducts, V, with the state that holds it.
    pub(super) conducting: (usize, f64),
}

/// The steady state.
#[derive(Clone, Debug)]
pub(super) struct Periodic {
    /// The state that Newton's method would have taken next: the best known.
    pub(super) state: Vec<f64>,
    pub(super) walk: Walk,
    pub(super) residual: f64,
    pub(super) tries: usize,
}

/// Why there is no steady state.
#[derive(Clone, Copy, Debug)]
pub(super) enum NoPeriod {
    /// A stage had no answer.
    Stuck(Stuck),
    /// The residual stayed too large.
    Residual { residual: f64, tries: usize },
}

/// Shortest part of a Newton step that is tried before plain periods are walked instead.
const SHORTEST: f64 = 1.0 / 64.0;

/// Plain periods that are walked where Newton's method gains nothing.
const PLAIN: usize = 4;

/// Finds the state that repeats after a period, from `start`.
pub(super) fn shoot(
    walker: &mut Walker,
    drive: &Drive<'_>,
    goal: &Goal<'_>,
    start: Vec<f64>,
) -> Result<Periodic, NoPeriod> {
    let mut here = start;
    let mut last: Option<Taken> = None;
    let mut plain = 0;
    let mut residual = f64::INFINITY;
    for tries in 1..=goal.tries {
        let walk = walker.walk(drive, &here).map_err(NoPeriod::Stuck)?;
        if walk.conducts.is_empty() {
            // Above every peak nothing says how far: a constant current would take it down for ever.
            lower(&mut here, goal);
            last = None;
            continue;
        }
        let r =
            DVector::from_iterator(here.len(), walk.end.iter().zip(&here).map(|(end, start)| end - start));
        if let Some(taken) = &last {
            let again = taken.matrix.solve(&r).map_or(f64::INFINITY, |step| goal.size(&step));
            if again > (1.0 - taken.part / 4.0) * taken.size && again > goal.residual {
                let part = taken.part / 2.0;
                if part >= SHORTEST {
                    here = moved(drive.net, &taken.from, &taken.step, part);
                    last = last.map(|taken| Taken { part, ..taken });
                    continue;
                }
                plain = PLAIN;
            }
        }
        if plain > 0 {
            plain -= 1;
            here = walk.end;
            last = None;
            continue;
        }
        let n = here.len();
        let matrix =
            DMatrix::from_fn(n, n, |i, j| f64::from(u8::from(i == j)) - walk.tangent[i * n + j]).lu();
        let Some(step) = matrix.solve(&r) else {
            plain = PLAIN;
            here = walk.end;
            last = None;
            continue;
        };
        let size = goal.size(&step);
        residual = size;
        let state = moved(drive.net, &here, &step, 1.0);
        if size <= goal.residual {
            return Ok(Periodic { state, walk, residual, tries });
        }
        last = Some(Taken { from: here, step, matrix, size, part: 1.0 });
        here = state;
    }
    Err(NoPeriod::Residual { residual, tries: goal.tries })
}

/// A Newton step that was taken, to judge it by where it led.
struct Taken {
    from: Vec<f64>,
    step: DVector<f64>,
    matrix: LU<f64, Dyn, Dyn>,
    size: f64,
    part: f64,
}

impl Goal<'_> {
    fn size(&self, step: &DVector<f64>) -> f64 {
        let size = step.iter().zip(self.scale).map(|(x, scale)| (x / scale).abs()).fold(0.0, f64::max);
        if size.is_finite() { size } else { f64::INFINITY }
    }
}

/// Along the step, but not to where a rectifier would carry current backwards: there the circuit is not the one that
/// the step was computed for, and Newton's method can go to and fro for ever.
fn moved(net: &Network, from: &[f64], step: &DVector<f64>, part: f64) -> Vec<f64> {
    let mut to: Vec<f64> = from.iter().zip(step.iter()).map(|(x, step)| x + part * step).collect();
    net.keep_possible(&mut to);
    to
}

fn lower(state: &mut [f64], goal: &Goal<'_>) {
    let (first, volts) = goal.conducting;
    let part = if state[first] > volts { volts / state[first] } else { 0.9 };
    state.iter_mut().for_each(|x| *x *= part);
}
