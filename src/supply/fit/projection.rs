//! From a fit to the rail curves that it gives.

use std::sync::Arc;

use super::Fit;
use crate::quantity::Uncertain;
use crate::supply::circuit::{Circuit, Dropper, Loading};
use crate::supply::curve::{RailCurve, SolvedCurve};
use crate::supply::steady::{SolveError, SolveOptions, sweep};
use crate::supply::{Basis, Grid, NodeCurve, Projector, doubt};

/// Step of the second parameter for its sensitivity.
const STEP: f64 = 0.02;

/// Doubts bend far less than rails do: they are worked out at so many mains of the grid.
const DOUBTED: usize = 9;

impl Projector {
    /// Solves `circuit` with the fitted parameters: a curve for every node and every loading whose currents are known.
    ///
    /// Its uncertainty is that of the fit (the parameters' covariance, both channels' accuracy being in it, and the
    /// spread of one moment about the model), and of what a fit can't take away: the crest's moving over the day and
    /// the loads' currents. What the circuit's own statements leave open of secondary, source and dropper, and how
    /// flat-topped the mains is on the whole, the fitted level has in it already.
    ///
    /// # Errors
    /// As [`crate::supply::steady_state`], for the first point that fails.
    pub fn from_fit(
        circuit: &Circuit,
        fit: &Fit,
        grid: Grid,
        options: &SolveOptions,
    ) -> Result<Self, SolveError> {
        let fitted = settled(fit.applied(circuit));
        let mut curves = Vec::new();
        for loading in Loading::ALL.into_iter().filter(|&loading| circuit.knows(loading)) {
            curves.extend(curves_of(&fitted, fit, loading, grid, options)?);
        }
        Ok(Projector::new(Basis::Fit, curves))
    }
}

/// The circuit without the doubts that the fit stands for.
fn settled(mut circuit: Circuit) -> Circuit {
    circuit.wave.known = true;
    circuit.transformer.secondary_v.half_width = 0.0;
    circuit.transformer.source_ohm.half_width = 0.0;
    if let Some(Dropper::ReturnMosfet { half_width_v, .. }) = &mut circuit.dropper {
        *half_width_v = 0.0;
    }
    circuit
}

fn curves_of(
    fitted: &Circuit,
    fit: &Fit,
    loading: Loading,
    grid: Grid,
    options: &SolveOptions,
) -> Result<Vec<NodeCurve>, SolveError> {
    let means = |circuit: &Circuit, mains_v: &[f64]| -> Result<Vec<Vec<f64>>, SolveError> {
        let solved = sweep(circuit, loading, mains_v, options)?;
        Ok((0..circuit.filter.len()).map(|k| solved.iter().map(|s| s.nodes[k].mean_v).collect()).collect())
    };
    let mains_v = evenly(grid, grid.points.max(2));
    let at_v = evenly(grid, DOUBTED);
    let rails = means(fitted, &mains_v)?;
    let there = means(fitted, &at_v)?;
    let with_more = means(&fit.second.applied(fitted, 1.0 + STEP), &at_v)?;
    let higher_v: Vec<f64> = at_v.iter().map(|v| v * (1.0 + STEP)).collect();
    let with_higher = means(fitted, &higher_v)?;
    let doubts = doubt::expanded(fitted, loading, &at_v, &there, options)?;
    let [secondary, second] = fit.factors();
    let mut curves = Vec::new();
    for (k, section) in fitted.filter.iter().enumerate() {
        let u = (0..at_v.len())
            .map(|i| {
                // More e.m.f. is more mains; the covariance is of fractions of the nameplate, not of the fitted value.
                let slopes = [
                    (with_higher[k][i] - there[k][i]) / STEP / secondary,
                    (with_more[k][i] - there[k][i]) / STEP / second,
                ];
                Uncertain::combine([fit.rail_u(slopes), 2.0 * fit.residual_v, doubts[k][i]])
            })
            .collect();
        let curve =
            SolvedCurve::through(mains_v.clone(), rails[k].clone(), at_v.clone(), u).ok_or_else(|| {
                SolveError::Circuit {
                    amplifier: fitted.amplifier.clone(),
                    what: format!("mains from {} to {} V make no grid", grid.from_v, grid.to_v),
                }
            })?;
        let curve = RailCurve::Solved(Arc::new(curve));
        curves.push(NodeCurve { node: section.node.clone(), loading, curve });
    }
    Ok(curves)
}

fn evenly(grid: Grid, points: usize) -> Vec<f64> {
    let step = (grid.to_v - grid.from_v) / (points - 1) as f64;
    (0..points).map(|i| grid.from_v + i as f64 * step).collect()
}
