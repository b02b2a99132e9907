//! The solved model of one node over mains and the second parameter, so that a least-squares step costs nanoseconds.
//!
//! The secondary's e.m.f. needs no axis of its own: e.m.f. and mains enter the circuit as their product, so the rail
//! at (mains, e.m.f. factor) is that at (mains × factor, 1) exactly. On the other two axes the rail is a smooth
//! function, interpolated through Chebyshev points by the barycentric formula (J.-P. Berrut and L. N. Trefethen,
//! "Barycentric Lagrange interpolation", SIAM Review 46, 2004, eq. 4.2 and 5.4).

use super::{Pair, Second};
use crate::supply::circuit::{Circuit, Loading};
use crate::supply::steady::{SolveError, SolveOptions, Solver};

/// Points along the mains and along the parameter.
const MAINS_POINTS: usize = 9;
const SECOND_POINTS: usize = 5;

/// How far the axes reach beyond what the pairs and priors ask for.
const MAINS_MARGIN: f64 = 0.12;
const SECOND_REACH: f64 = 4.0;

/// The mean rail of one node of `circuit`, V.
pub(super) fn rail(
    circuit: &Circuit,
    node: usize,
    loading: Loading,
    mains_v: f64,
) -> Result<f64, SolveError> {
    Ok(Solver::new(circuit, loading, SolveOptions::default())?.at(mains_v)?.nodes[node].mean_v)
}

/// The rail at one node for every loading that is known.
#[derive(Clone, Debug)]
pub(super) struct Surfaces {
    mains: Axis,
    second: Axis,
    /// By loading: rows along the second parameter, columns along mains.
    rails: Vec<(Loading, Vec<f64>)>,
}

impl Surfaces {
    /// Solves `circuit` where the `pairs` may take it; `second_u` is the relative standard uncertainty of the second
    /// parameter.
    pub(super) fn solve(
        circuit: &Circuit,
        node: usize,
        second: Second,
        second_u: f64,
        pairs: &[Pair],
    ) -> Result<Self, SolveError> {
        let wound_for_v = circuit.transformer.wound_for_v;
        let plausible =
            || pairs.iter().map(|p| p.mains_v).filter(|v| *v > wound_for_v / 2.0 && *v < wound_for_v * 2.0);
        let lowest = plausible().fold(f64::INFINITY, f64::min).min(wound_for_v);
        let highest = plausible().fold(0.0, f64::max).max(wound_for_v);
        let mains = Axis::new(lowest * (1.0 - MAINS_MARGIN), highest * (1.0 + MAINS_MARGIN), MAINS_POINTS);
        let reach = SECOND_REACH * second_u;
        let second_axis = Axis::new((1.0 - reach).max(0.2), 1.0 + reach, SECOND_POINTS);
        let mut rails = Vec::new();
        for loading in Loading::ALL.into_iter().filter(|l| circuit.knows(*l)) {
            let mut values = Vec::with_capacity(MAINS_POINTS * SECOND_POINTS);
            for factor in &second_axis.points {
                let changed = second.applied(circuit, *factor);
                let mut solver = Solver::new(&changed, loading, SolveOptions::default())?;
                for mains_v in &mains.points {
                    values.push(solver.at(*mains_v)?.nodes[node].mean_v);
                }
            }
            rails.push((loading, values));
        }
        Ok(Surfaces { mains, second: second_axis, rails })
    }

    /// Which loadings it holds.
    pub(super) fn has(&self, loading: Loading) -> bool {
        self.rails.iter().any(|(l, _)| *l == loading)
    }

    /// The rail at `mains_v` with the second parameter at `second` times its nameplate; `None` for an unknown loading.
    pub(super) fn rail_v(&self, loading: Loading, mains_v: f64, second: f64) -> Option<f64> {
        let (_, values) = self.rails.iter().find(|(l, _)| *l == loading)?;
        let (along_mains, along_second) = (self.mains.weights(mains_v), self.second.weights(second));
        let row = |row: &[f64]| row.iter().zip(&along_mains).map(|(v, w)| v * w).sum::<f64>();
        Some(values.chunks(MAINS_POINTS).zip(&along_second).map(|(values, w)| row(values) * w).sum())
    }

    /// ∂rail/∂mains and ∂rail/∂second there, by central differences.
    pub(super) fn slopes(&self, loading: Loading, mains_v: f64, second: f64) -> Option<[f64; 2]> {
        let (dm, ds) = (1e-4 * mains_v, 1e-4);
        let rail = |m: f64, s: f64| self.rail_v(loading, m, s);
        Some([
            (rail(mains_v + dm, second)? - rail(mains_v - dm, second)?) / (2.0 * dm),
            (rail(mains_v, second + ds)? - rail(mains_v, second - ds)?) / (2.0 * ds),
        ])
    }
}

/// Chebyshev points of the second kind, with their barycentric weights 1, −1, 1 … halved at the ends.
#[derive(Clone, Debug)]
struct Axis {
    points: Vec<f64>,
}

impl Axis {
    fn new(low: f64, high: f64, count: usize) -> Self {
        let last = (count - 1) as f64;
        let points = (0..count)
            .map(|i| {
                let cos = (std::f64::consts::PI * i as f64 / last).cos();
                (low + high) / 2.0 - (high - low) / 2.0 * cos
            })
            .collect();
        Axis { points }
    }

    /// The share of each point in the value at `x`; held at the ends.
    fn weights(&self, x: f64) -> Vec<f64> {
        let x = x.clamp(self.points[0], self.points[self.points.len() - 1]);
        let mut weights = vec![0.0; self.points.len()];
        if let Some(hit) = self.points.iter().position(|p| *p == x) {
            weights[hit] = 1.0;
            return weights;
        }
        let last = self.points.len() - 1;
        let mut sum = 0.0;
        for (i, (weight, point)) in weights.iter_mut().zip(&self.points).enumerate() {
            let sign = if i % 2 == 0 { 1.0 } else { -1.0 };
            let end = if i == 0 || i == last { 0.5 } else { 1.0 };
            *weight = sign * end / (x - point);
            sum += *weight;
        }
        weights.iter_mut().for_each(|w| *w /= sum);
        weights
    }
}

#[cfg(test)]
mod tests {
    use super::super::super::findings::tests::plain;
    use super::*;

    #[test]
    fn the_surface_is_the_solved_rail_between_its_points_and_the_emf_moves_it_as_mains_does() {
        let circuit = plain();
        let pairs = [215.0, 250.0].map(|mains_v| Pair { at_ms: 0, mains_v, rail_v: 450.0 });
        let surfaces = Surfaces::solve(&circuit, 0, Second::SourceResistance, 0.06, &pairs).unwrap();
        for (mains_v, emf, second) in [(223.4, 1.0, 1.0), (231.0, 1.02, 0.9), (244.0, 0.97, 1.13)] {
            for loading in Loading::ALL {
                let mut changed = Second::SourceResistance.applied(&circuit, second);
                changed.transformer.secondary_v.value *= emf;
                let solved = rail(&changed, 0, loading, mains_v).unwrap();
                let read = surfaces.rail_v(loading, mains_v * emf, second).unwrap();
                assert!((read - solved).abs() < 1e-4 * solved, "{loading:?} {mains_v}: {read} {solved}");
            }
        }
        let slopes = surfaces.slopes(Loading::Idle, 230.0, 1.0).unwrap();
        assert!(slopes[0] > 1.5 && slopes[0] < 2.5 && slopes[1] < 0.0, "{slopes:?}");
    }
}
