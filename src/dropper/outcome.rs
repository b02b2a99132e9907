//! What a changed supply does over the mains that was recorded.

use super::change::Change;
use crate::mains::Distribution;
use crate::supply::{Circuit, Loading, SolveError, SolveOptions, SteadyState, sweep};

/// Solved points between the lowest and the highest mains, both included.
const POINTS: usize = 7;

/// Equal steps of time over which a mean loss is taken.
const STEPS: usize = 400;

/// What one node must keep.
#[derive(Clone, Debug, PartialEq)]
pub struct Bound {
    /// Index into the circuit's filter.
    pub node: usize,
    /// The loading that it is judged at.
    pub loading: Loading,
    /// The rail must stay under this, V: its limit less the guard band.
    pub setpoint_v: f64,
    /// The lowest rail that the owner accepts, V.
    pub min_v: Option<f64>,
}

/// A change over the recorded mains.
#[derive(Clone, Debug, PartialEq)]
pub struct Outcome {
    /// Mains at the socket and the supply's state there, rising.
    states: Vec<(f64, SteadyState)>,
    node: usize,
    /// Share of the time in which the rail is at or under the setpoint, %.
    pub share_under_setpoint_pct: f64,
    /// Share of the time in which it is at or above the lowest that is accepted, %; 100 where none is stated.
    pub share_above_min_pct: f64,
    /// A dropper's mean loss over the time, W; `None` without one.
    pub mean_loss_w: Option<f64>,
    /// Its loss at the highest mains, W.
    pub worst_loss_w: Option<f64>,
    /// The heaters at the lowest and the highest mains, V.
    pub heater_v: Option<(f64, f64)>,
}

impl Outcome {
    /// Solves `circuit`, which is already changed (`None`: as it stands), at the mains of `mains`; `None` of nothing.
    ///
    /// # Errors
    /// As [`sweep`].
    pub fn of(
        circuit: &Circuit,
        change: Option<&Change>,
        bound: &Bound,
        mains: &Distribution,
        options: &SolveOptions,
    ) -> Result<Option<Self>, SolveError> {
        let (Some(low), Some(high)) = (mains.min(), mains.max()) else { return Ok(None) };
        let factor = change.map_or(1.0, Change::mains_factor);
        // A single value still gets a curve about it.
        let high_end = if high > low { high } else { low + 1.0 };
        let socket: Vec<f64> =
            (0..POINTS).map(|i| low + (high_end - low) * i as f64 / (POINTS - 1) as f64).collect();
        let at_primary: Vec<f64> = socket.iter().map(|v| v * factor).collect();
        let states: Vec<_> =
            socket.into_iter().zip(sweep(circuit, bound.loading, &at_primary, options)?).collect();
        let mut outcome = Outcome {
            states,
            node: bound.node,
            share_under_setpoint_pct: 0.0,
            share_above_min_pct: 100.0,
            mean_loss_w: None,
            worst_loss_w: None,
            heater_v: None,
        };
        let share = |from: f64, to: f64| 100.0 * mains.share_within(from, to).unwrap_or(0.0);
        outcome.share_under_setpoint_pct = share(f64::NEG_INFINITY, outcome.mains_for(bound.setpoint_v));
        if let Some(min_v) = bound.min_v {
            outcome.share_above_min_pct = share(outcome.mains_for(min_v), f64::INFINITY);
        }
        let loss = |state: &SteadyState| state.dropper.map_or(0.0, |d| d.loss_w);
        if outcome.states.iter().any(|(_, state)| state.dropper.is_some()) {
            let curve = mains.duration_curve(STEPS);
            let sum: f64 = curve.iter().map(|(_, mains_v)| outcome.at(*mains_v, loss)).sum();
            outcome.mean_loss_w = Some(sum / curve.len() as f64);
            outcome.worst_loss_w = Some(outcome.at(high, loss));
        }
        let heater = |state: &SteadyState| state.heater_v.unwrap_or(f64::NAN);
        let heaters = (outcome.at(low, heater), outcome.at(high, heater));
        outcome.heater_v = heaters.0.is_finite().then_some(heaters);
        Ok(Some(outcome))
    }

    /// The rail at `mains_v` at the socket, V; beyond the solved mains the last stretch goes on.
    pub fn rail_v(&self, mains_v: f64) -> f64 {
        self.at(mains_v, |state| state.nodes[self.node].mean_v)
    }

    /// The mains at the socket at which the rail stands at `rail_v`, V.
    pub fn mains_for(&self, rail_v: f64) -> f64 {
        let rail = |i: usize| self.states[i].1.nodes[self.node].mean_v;
        let upper = (1..self.states.len() - 1).find(|i| rail(*i) >= rail_v).unwrap_or(self.states.len() - 1);
        let (v0, v1) = (self.states[upper - 1].0, self.states[upper].0);
        v0 + (rail_v - rail(upper - 1)) / (rail(upper) - rail(upper - 1)) * (v1 - v0)
    }

    fn at(&self, mains_v: f64, value: impl Fn(&SteadyState) -> f64) -> f64 {
        let upper = self.states.partition_point(|(v, _)| *v < mains_v).clamp(1, self.states.len() - 1);
        let ((v0, s0), (v1, s1)) = (&self.states[upper - 1], &self.states[upper]);
        value(s0) + (mains_v - v0) / (v1 - v0) * (value(s1) - value(s0))
    }
}
