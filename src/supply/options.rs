//! What may be asked of the solver, and why it may refuse.

use super::mesh::Window;
use super::shooting::Periodic;

/// How finely and how closely to solve.
#[derive(Clone, Debug, PartialEq)]
pub struct SolveOptions {
    /// Steps in half a mains period.
    pub steps: usize,
    /// Greatest residual at the fixed point, (I − M)⁻¹·r over each state's size: by how much the state at the period's
    /// start may still be wrong.
    pub residual: f64,
    /// Walks through the period before giving up.
    pub tries: usize,
    /// Where to start: a neighbouring solution of the same circuit.
    pub warm: Option<Warm>,
}

impl Default for SolveOptions {
    fn default() -> Self {
        SolveOptions { steps: 128, residual: 1e-7, tries: 80, warm: None }
    }
}

/// A solution's state, to start its neighbour from.
#[derive(Clone, Debug, PartialEq)]
pub struct Warm {
    pub(super) mains_v: f64,
    pub(super) state: Vec<f64>,
    pub(super) conducts: Vec<Window>,
    pub(super) overlaps: Vec<Window>,
}

impl Warm {
    pub(super) fn new(mains_v: f64, periodic: &Periodic) -> Warm {
        let Periodic { state, walk, .. } = periodic;
        Warm {
            mains_v,
            state: state.clone(),
            conducts: walk.conducts.clone(),
            overlaps: walk.overlaps.clone(),
        }
    }
}

/// Why a supply has no answer.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum SolveError {
    /// The circuit or what is asked of it can't be solved as it is stated.
    #[error("the supply of {amplifier} can't be solved: {what}")]
    Circuit {
        /// Amplifier.
        amplifier: String,
        /// What is wrong.
        what: String,
    },
    /// No currents were found that balance at one instant.
    #[error(
        "the supply of {amplifier} has no balance of currents at {at_deg:.0}° of the mains period ({loading}, \
         {mains_v:.1} V mains); check its part values"
    )]
    Balance {
        /// Amplifier.
        amplifier: String,
        /// Mains, V r.m.s.
        mains_v: f64,
        /// Word of the loading.
        loading: &'static str,
        /// Where in the period, degrees from the fundamental's rise.
        at_deg: f64,
    },
    /// The state did not come to repeat itself.
    #[error(
        "the supply of {amplifier} finds no steady state ({loading}, {mains_v:.1} V mains): after {tries} tries its \
         period's start is still {residual:.1e} of its value off, and {wanted:.1e} is wanted; check its part values"
    )]
    Period {
        /// Amplifier.
        amplifier: String,
        /// Mains, V r.m.s.
        mains_v: f64,
        /// Word of the loading.
        loading: &'static str,
        /// The residual reached.
        residual: f64,
        /// The residual wanted.
        wanted: f64,
        /// Walks through the period.
        tries: usize,
    },
}
