//! Regularised, robust least squares: Gauss–Newton steps with Tukey's weights, and every doubt a parameter.
//!
//! With a pair's recorded mains m and rail r the model is
//!
//! ```text
//! r = (1 + g_r)·(1 + c·z)·f(m/(1 + g_m)·(1 + s), 1 + p),   z = (m − m₀)/m₁
//! ```
//!
//! s, p: secondary and second parameter, relative to their nameplates; g_m, g_r: gain errors of the two channels; c:
//! how much the mains' crest (which the rail follows) moves from one end of the recorded mains to the other. At idle
//! a sixth is added to the model: what quiet music, seen only on one side, leaves of itself in a robust mean. Each has
//! a normal prior of its standard uncertainty about nothing. The covariance is the inverse of the normal matrix
//! (JCGM 100 C.3.5), residuals' correlation allowed for by the number of independent pairs.

use nalgebra::{SMatrix, SVector};

use super::Pair;
use super::pairs::median;
use super::sort::Doing;
use super::surface::Surfaces;
use crate::supply::circuit::Loading;

const N: usize = 6;
type Vector = SVector<f64, N>;
type Matrix = SMatrix<f64, N, N>;

/// The crest factor of a household's mains moves over a day within about ±1 % of its middle (from memory: 1.36 to
/// 1.41, no survey found), and lowest in the evening, as mains itself is: so it may pose as a parameter.
pub(super) const CREST_HALF_WIDTH: f64 = 0.01;

/// Tukey's biweight leaves nothing to what lies this many standard deviations off, and costs 5 % of efficiency with
/// normal residuals (A. E. Beaton and J. W. Tukey, Technometrics 16, 1974).
const TUKEY: f64 = 4.685;
const TUKEY_EFFICIENCY: f64 = 0.95;

/// Huber's constant for 95 % efficiency.
const HUBER: f64 = 1.345;

/// Bias of a robust mean by outliers that all lie on one side and too close to be told, as a part of the spread: for a
/// biweight and a share of 5 to 10 % of them (from memory, of the order of the maximum bias of such estimators).
const ONE_SIDED: f64 = 0.2;

/// Resolution of a logger: a spread below it is none, V.
const LEAST_SCATTER_V: f64 = 0.02;

/// Steps; the problem is nearly linear, and four are enough.
const STEPS: usize = 30;
const SETTLED: f64 = 1e-9;

/// More pairs than this are thinned evenly: neighbouring minutes hardly say more, and a year has half a million.
const MOST_PAIRS: usize = 20_000;

/// Standard uncertainties of the parameters before the record is looked at, all relative.
#[derive(Clone, Copy, Debug)]
pub(super) struct Priors {
    pub(super) secondary: f64,
    pub(super) second: f64,
    pub(super) mains_gain: f64,
    pub(super) rail_gain: f64,
    pub(super) crest: f64,
}

impl Priors {
    fn array(&self) -> [f64; N] {
        // A prior without any doubt is one that the record can't move; its weight must stay finite.
        [self.secondary, self.second, self.mains_gain, self.rail_gain, self.crest, 1.0].map(|u| u.max(1e-6))
    }

    /// How far a level of the rail lies from its projection, in standard uncertainties.
    pub(super) fn unlikely(&self, ratio: f64) -> f64 {
        let u = [self.secondary, self.mains_gain, self.rail_gain, CREST_HALF_WIDTH]
            .iter()
            .map(|u| u * u)
            .sum::<f64>()
            .sqrt();
        (ratio - 1.0).abs() / u
    }
}

/// The pairs that count, each with its loading.
#[derive(Debug)]
pub(super) struct Data<'a> {
    points: Vec<(Pair, Loading)>,
    surfaces: &'a Surfaces,
    middle_v: f64,
    half_range_v: f64,
}

impl<'a> Data<'a> {
    pub(super) fn new(pairs: &[Pair], doing: &[Doing], surfaces: &'a Surfaces) -> Self {
        let points: Vec<_> = pairs
            .iter()
            .zip(doing)
            .filter_map(|(pair, doing)| match doing {
                Doing::In(loading) if surfaces.has(*loading) => Some((*pair, *loading)),
                _ => None,
            })
            .collect();
        let every = points.len().div_ceil(MOST_PAIRS).max(1);
        let points: Vec<_> = points.into_iter().step_by(every).collect();
        let mut mains: Vec<f64> = points.iter().map(|(pair, _)| pair.mains_v).collect();
        mains.sort_by(f64::total_cmp);
        let at = |share: f64| mains.get(((mains.len() as f64 - 1.0).max(0.0) * share) as usize).copied();
        let (low, high) = (at(0.05).unwrap_or(0.0), at(0.95).unwrap_or(0.0));
        Data { points, surfaces, middle_v: (low + high) / 2.0, half_range_v: ((high - low) / 2.0).max(0.5) }
    }

    pub(super) fn len(&self) -> usize {
        self.points.len()
    }

    /// Median of recorded over projected rail by the nameplate, and its standard uncertainty by the priors.
    pub(super) fn level(&self, priors: &Priors) -> (f64, f64) {
        let mut ratios = Vec::new();
        let mut widest: f64 = 0.0;
        for (pair, loading) in &self.points {
            let rail_v = self.surfaces.rail_v(*loading, pair.mains_v, 1.0).unwrap_or(f64::NAN);
            ratios.push(pair.rail_v / rail_v);
            if let Some([_, by_second]) = self.surfaces.slopes(*loading, pair.mains_v, 1.0) {
                widest = widest.max((by_second * priors.second / rail_v).abs());
            }
        }
        let u = [priors.secondary, priors.mains_gain, priors.rail_gain, CREST_HALF_WIDTH, widest];
        (median(ratios), u.iter().map(|u| u * u).sum::<f64>().sqrt())
    }

    pub(super) fn mains_range(&self) -> [f64; 2] {
        let mains = || self.points.iter().map(|(pair, _)| pair.mains_v);
        [mains().fold(f64::INFINITY, f64::min), mains().fold(f64::NEG_INFINITY, f64::max)]
    }

    /// Every residual and its slopes against the parameters; `sigma` is the residuals' spread, as far as it's known.
    fn residuals(&self, x: &Vector, sigma: f64) -> Vec<(f64, Vector)> {
        self.points.iter().map(|point| self.residual(point, x, sigma)).collect()
    }

    fn residual(&self, (pair, loading): &(Pair, Loading), x: &Vector, sigma: f64) -> (f64, Vector) {
        let z = ((pair.mains_v - self.middle_v) / self.half_range_v).clamp(-1.0, 1.0);
        let mains_v = pair.mains_v / (1.0 + x[2]) * (1.0 + x[0]);
        let model = self.surfaces.rail_v(*loading, mains_v, 1.0 + x[1]).unwrap_or(f64::NAN);
        let [by_mains, by_second] = self.surfaces.slopes(*loading, mains_v, 1.0 + x[1]).unwrap_or([0.0; 2]);
        let (gain, crest) = (1.0 + x[3], 1.0 + x[4] * z);
        let slopes = Vector::from([
            gain * crest * by_mains * pair.mains_v / (1.0 + x[2]),
            gain * crest * by_second,
            -gain * crest * by_mains * mains_v / (1.0 + x[2]),
            crest * model,
            gain * z * model,
            if *loading == Loading::Idle { ONE_SIDED * sigma } else { 0.0 },
        ]);
        (pair.rail_v - gain * crest * model - slopes[5] * x[5], slopes)
    }
}

/// What the record makes of the parameters.
#[derive(Clone, Debug)]
pub(super) struct Posterior {
    /// (s, p, g_m, g_r, c, and the idle level's shift).
    pub(super) x: Vector,
    pub(super) covariance: Matrix,
    /// Robust standard deviation of the residuals, V.
    pub(super) scatter_v: f64,
    pub(super) independent: f64,
    /// Pairs without any weight.
    pub(super) outliers: usize,
    /// Standard uncertainty of p if nothing were known of s beforehand: what the record itself knows of p.
    pub(super) second_by_record: f64,
}

/// Finds the parameters. `second`: holds p at this value, its prior's doubt kept.
pub(super) fn solve(data: &Data<'_>, priors: &Priors, second: Option<f64>) -> Posterior {
    let prior = priors.array();
    let mut x = Vector::zeros();
    x[1] = second.unwrap_or(0.0);
    // From the middle of the residuals, so that a nameplate some per cent off isn't all outliers.
    let ratios: Vec<f64> = data
        .points
        .iter()
        .filter_map(|(pair, loading)| {
            Some(pair.rail_v / data.surfaces.rail_v(*loading, pair.mains_v, 1.0 + x[1])? - 1.0)
        })
        .collect();
    x[0] = median(ratios);
    // First with weights that no residual loses, so that a loading far off its nameplate pulls as it should; only
    // about that answer is a residual told to be an outlier.
    let (mut sigma, mut share) = (0.0, 0.1);
    for robust in [Robust::Bounded, Robust::Redescending] {
        for _ in 0..STEPS {
            let residuals = data.residuals(&x, sigma);
            let spread = Spread::of(&residuals, share);
            sigma = spread.sigma;
            let (normal, gradient) = spread.normal(&residuals, robust, &prior, &x);
            let step = held(&normal, &gradient, second.is_some());
            x += step;
            if step.amax() < SETTLED {
                break;
            }
        }
        share = independent_share(data, &data.residuals(&x, sigma), sigma);
    }
    let residuals = data.residuals(&x, sigma);
    let spread = Spread::of(&residuals, share);
    let (normal, _) = spread.normal(&residuals, Robust::Redescending, &prior, &x);
    let covariance = match second {
        None => inverse(&normal),
        Some(_) => held_covariance(&normal, prior[1]),
    };
    Posterior {
        x,
        covariance,
        scatter_v: spread.sigma,
        independent: data.len() as f64 * share,
        outliers: residuals
            .iter()
            .filter(|(r, _)| Robust::Redescending.of(r / spread.sigma).0 == 0.0)
            .count(),
        second_by_record: by_record(&normal, prior[0]),
    }
}

/// How a residual loses weight with its size.
#[derive(Clone, Copy, Debug)]
enum Robust {
    /// Huber's: beyond some standard deviations it pulls no more than there (P. J. Huber, "Robust estimation of a
    /// location parameter", 1964).
    Bounded,
    /// Tukey's biweight.
    Redescending,
}

impl Robust {
    /// Weight of a residual of `r` standard deviations, and what it adds to the normal matrix.
    fn of(self, r: f64) -> (f64, f64) {
        match self {
            Robust::Bounded => {
                let weight = (HUBER / r.abs()).min(1.0);
                (weight, weight)
            }
            Robust::Redescending => {
                let u = r / TUKEY;
                let weight = if u.abs() < 1.0 { (1.0 - u * u).powi(2) } else { 0.0 };
                (weight, weight)
            }
        }
    }
}

/// The residuals' spread.
struct Spread {
    sigma: f64,
    /// How many independent pairs each pair is worth.
    share: f64,
}

impl Spread {
    fn of(residuals: &[(f64, Vector)], share: f64) -> Self {
        // The median absolute deviation from nothing: the model has a level of its own.
        let sigma = (1.4826 * median(residuals.iter().map(|(r, _)| r.abs()).collect())).max(LEAST_SCATTER_V);
        Spread { sigma, share }
    }

    /// The normal matrix and the right-hand side for a step from `x`.
    fn normal(
        &self,
        residuals: &[(f64, Vector)],
        robust: Robust,
        prior: &[f64; N],
        x: &Vector,
    ) -> (Matrix, Vector) {
        let each = TUKEY_EFFICIENCY * self.share / (self.sigma * self.sigma);
        let mut normal = Matrix::zeros();
        let mut gradient = Vector::zeros();
        for (residual, slopes) in residuals {
            let (weight, slope) = robust.of(residual / self.sigma);
            normal += slopes * slopes.transpose() * (each * slope);
            gradient += slopes * (each * weight * residual);
        }
        for i in 0..N {
            normal[(i, i)] += 1.0 / (prior[i] * prior[i]);
            gradient[i] -= x[i] / (prior[i] * prior[i]);
        }
        (normal, gradient)
    }
}

/// How many independent pairs each pair is worth: 1/τ with τ = 1 + 2·Σρₖ, the residuals' integrated correlation in
/// time, summed up to the first k that is five times what it makes of τ (A. Sokal, "Monte Carlo methods in statistical
/// mechanics", 1997, section 3).
fn independent_share(data: &Data<'_>, residuals: &[(f64, Vector)], sigma: f64) -> f64 {
    let bounded: Vec<f64> = residuals.iter().map(|(r, _)| r.clamp(-3.0 * sigma, 3.0 * sigma)).collect();
    let mean_square = bounded.iter().map(|r| r * r).sum::<f64>() / bounded.len() as f64;
    let usual_ms = usual_distance(data);
    let mut tau = 1.0;
    for k in 1..bounded.len() {
        let (mut products, mut neighbours) = (0.0, 0usize);
        for i in k..bounded.len() {
            if data.points[i].0.at_ms - data.points[i - k].0.at_ms <= usual_ms * k as i64 {
                products += bounded[i] * bounded[i - k];
                neighbours += 1;
            }
        }
        if neighbours < 10 || mean_square == 0.0 {
            break;
        }
        tau += 2.0 * products / neighbours as f64 / mean_square;
        if k as f64 >= 5.0 * tau {
            break;
        }
    }
    1.0 / tau.clamp(1.0, bounded.len() as f64)
}

/// The usual distance of neighbouring pairs, and a half more, ms.
fn usual_distance(data: &Data<'_>) -> i64 {
    let steps: Vec<f64> = data.points.windows(2).map(|p| (p[1].0.at_ms - p[0].0.at_ms) as f64).collect();
    if steps.is_empty() { 0 } else { (1.5 * median(steps)) as i64 }
}

/// Standard uncertainty of p with the prior of s, whose standard uncertainty is `prior`, taken away.
fn by_record(normal: &Matrix, prior: f64) -> f64 {
    let mut flat = *normal;
    // All but a trace of it: what the record says nothing of must stay finite.
    flat[(0, 0)] -= (1.0 - 1e-6) / (prior * prior);
    inverse(&flat)[(1, 1)].sqrt()
}

/// A step in which p stays where it is.
fn held(normal: &Matrix, gradient: &Vector, hold: bool) -> Vector {
    let (mut normal, mut gradient) = (*normal, *gradient);
    if hold {
        for i in 0..N {
            normal[(1, i)] = 0.0;
            normal[(i, 1)] = 0.0;
        }
        normal[(1, 1)] = 1.0;
        gradient[1] = 0.0;
    }
    inverse(&normal) * gradient
}

/// Covariance with p held at its nameplate: what the others' own doubt is at that p, and how they would move with p
/// over its prior.
fn held_covariance(normal: &Matrix, prior: f64) -> Matrix {
    let cross = normal.column(1).into_owned();
    let mut others = *normal;
    for i in 0..N {
        others[(1, i)] = 0.0;
        others[(i, 1)] = 0.0;
    }
    others[(1, 1)] = 1.0;
    let mut own = inverse(&others);
    own[(1, 1)] = 0.0;
    let mut along = -(own * cross);
    along[1] = 1.0;
    own + along * along.transpose() * (prior * prior)
}

/// The inverse of a matrix that the priors keep positive definite.
fn inverse(normal: &Matrix) -> Matrix {
    // Scaled to a unit diagonal first: the priors differ by powers of ten.
    let scale = Vector::from_fn(|i, _| 1.0 / normal[(i, i)].sqrt());
    let scaled = Matrix::from_fn(|i, j| normal[(i, j)] * scale[i] * scale[j]);
    let inverse = scaled.cholesky().map_or_else(Matrix::zeros, |c| c.inverse());
    Matrix::from_fn(|i, j| inverse[(i, j)] * scale[i] * scale[j])
}
