//! The supply's periodic steady state at one mains voltage and loading.

use super::circuit::{Circuit, Loading};
pub(super) use super::options::{SolveError, SolveOptions};
pub(super) use super::solver::Solver;
use super::state::SteadyState;

/// Solves `circuit` under `loading` at `mains_v` r.m.s.
///
/// # Errors
/// When the circuit can't be stated as equations, the loading's current is unknown, or no steady state is found.
pub fn steady_state(
    circuit: &Circuit,
    mains_v: f64,
    loading: Loading,
    options: &SolveOptions,
) -> Result<SteadyState, SolveError> {
    Solver::new(circuit, loading, options.clone())?.at(mains_v)
}

/// Solves `circuit` under `loading` at each of `mains_v`, each solution starting the next.
///
/// # Errors
/// As [`steady_state`], for the first mains that fails.
pub fn sweep(
    circuit: &Circuit,
    loading: Loading,
    mains_v: &[f64],
    options: &SolveOptions,
) -> Result<Vec<SteadyState>, SolveError> {
    let mut solver = Solver::new(circuit, loading, options.clone())?;
    mains_v.iter().map(|&mains_v| solver.at(mains_v)).collect()
}
