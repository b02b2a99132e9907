//! The fit: recorded pairs of mains and rail choose the supply's weak parameters.
//!
//! Two figures of a supply are weak on paper: the secondary's e.m.f. (windings, labels) and the drop under load
//! (source resistance, or the idle current that makes it). The fit moves both by regularised, robust least squares
//! with the nameplate as prior, as far as the record can tell; where it cannot tell them apart, the second stays at
//! its nameplate and only the first moves. Everything that can't be known from inside the record (the accuracy of
//! both channels, how the mains' crest moves with its height) is carried along as a parameter of its own with a prior
//! and no say in the result, so that its doubt is in every figure that comes out.
//!
//! Layers: [`pairs`] makes pairs of readings, `sort` says what the amplifier did at each, `surface` is the solved
//! model over mains and parameter, `least_squares` moves the parameters.

mod least_squares;
mod pairs;
mod projection;
mod sort;
mod surface;

pub use pairs::{Pair, Sampled, pairs};
pub use sort::Doing;

use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};

use super::circuit::{Circuit, Load, Loading};
use super::steady::SolveError;
use crate::quantity::{Utc, rectangular_u};
use least_squares::{Data, Posterior, Priors};
use surface::Surfaces;

/// Fewer pairs than this say nothing that the nameplate doesn't say better.
const FEWEST_PAIRS: usize = 20;

/// Half-width of a stated idle current as a fraction: valves drift, and the rail moves while one reads (common
/// practice, no source).
const IDLE_CURRENT_DOUBT: f64 = 0.05;

/// A record whose level is this many standard uncertainties off the nameplate's is of another supply.
const FARTHEST: f64 = 5.0;

/// The record has told the second parameter if by itself, whatever the secondary, it has shrunk its doubt to this part
/// of the prior's.
const TOLD: f64 = 0.6;

/// The parameter that is fitted beside the secondary's e.m.f.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Second {
    /// Resistance in one conducting path.
    SourceResistance,
    /// What all loads draw at idle, by one factor.
    IdleCurrent,
}

impl Second {
    /// In words, as reports name it.
    pub fn words(self) -> &'static str {
        match self {
            Second::SourceResistance => "source resistance",
            Second::IdleCurrent => "idle current",
        }
    }

    /// The circuit with this parameter multiplied by `factor`.
    pub fn applied(self, circuit: &Circuit, factor: f64) -> Circuit {
        let mut circuit = circuit.clone();
        match self {
            Second::SourceResistance => circuit.transformer.source_ohm.value *= factor,
            Second::IdleCurrent => {
                for load in &mut circuit.loads {
                    if let Load::Law { idle_a, .. } = load {
                        *idle_a *= factor;
                    }
                }
            }
        }
        circuit
    }

    /// Its nameplate value, Ω or A.
    pub fn nameplate(self, circuit: &Circuit) -> f64 {
        match self {
            Second::SourceResistance => circuit.transformer.source_ohm.value,
            Second::IdleCurrent => circuit
                .loads
                .iter()
                .map(|load| if let Load::Law { idle_a, .. } = load { *idle_a } else { 0.0 })
                .sum(),
        }
    }

    /// Standard uncertainty of its nameplate value as a fraction of it.
    fn prior_u(self, circuit: &Circuit) -> f64 {
        match self {
            Second::SourceResistance => {
                let ohm = circuit.transformer.source_ohm;
                standard(ohm.half_width / ohm.value)
            }
            Second::IdleCurrent => standard(IDLE_CURRENT_DOUBT),
        }
    }
}

/// A fitted parameter beside its nameplate.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Parameter {
    /// As the config states it.
    pub nameplate: f64,
    /// Expanded uncertainty (k = 2) of that.
    pub nameplate_u: f64,
    /// As fitted.
    pub fitted: f64,
    /// Expanded uncertainty (k = 2) of that.
    pub fitted_u: f64,
}

/// How many pairs the record holds of each thing that the amplifier did.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct PairsSeen {
    /// All of them.
    pub all: usize,
    /// Switched off.
    pub off: usize,
    /// Switching on, warming up, switching off.
    pub warming_up: usize,
    /// With cold valves or in standby.
    pub unloaded: usize,
    /// At rest.
    pub idle: usize,
    /// Playing loudly, which is nobody's loading, or at full output by the owner's word.
    pub loaded: usize,
    /// Unloaded, idle or full by the owner's word, but so far off the others that they count for nothing.
    pub outliers: usize,
}

/// What the record says of a supply's weak parameters. Stored as JSON.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Fit {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node whose rail was recorded.
    pub node: String,
    /// What the record holds.
    pub seen: PairsSeen,
    /// Lowest and highest mains among the pairs that count, V.
    pub mains_v: [f64; 2],
    /// The secondary's open-circuit e.m.f. at the mains it was wound for, V r.m.s.
    pub secondary_v: Parameter,
    /// Which parameter was fitted beside it.
    pub second: Second,
    /// That parameter, in Ω or A.
    pub second_value: Parameter,
    /// Whether the record can tell the two apart; where not, the second stands at its nameplate.
    pub told_apart: bool,
    /// Spread of one pair about the fitted model (robust standard deviation), V: type A.
    pub residual_v: f64,
    /// How many independent pairs the record is worth, its residuals' correlation in time allowed for.
    pub independent_pairs: f64,
    /// Covariance of (secondary, second), both as fractions of their nameplates.
    pub covariance: [[f64; 2]; 2],
    /// What of the circuit this rests on: a fit of another circuit is no longer valid.
    pub rests_on: String,
}

impl Fit {
    /// (secondary, second) as factors of their nameplates.
    pub fn factors(&self) -> [f64; 2] {
        [
            self.secondary_v.fitted / self.secondary_v.nameplate,
            self.second_value.fitted / self.second_value.nameplate,
        ]
    }

    /// The circuit with the fitted parameters in it.
    pub fn applied(&self, circuit: &Circuit) -> Circuit {
        let [secondary, second] = self.factors();
        let mut fitted = self.second.applied(circuit, second);
        fitted.transformer.secondary_v.value *= secondary;
        fitted
    }

    /// Whether it was made of this circuit, as far as it rests on it.
    pub fn is_of(&self, circuit: &Circuit) -> bool {
        self.rests_on == rests_on(circuit)
    }

    /// Expanded uncertainty (k = 2) that the parameters leave in a rail whose relative sensitivities to (secondary,
    /// second) are `slopes`, V (JCGM 100 5.2.2, correlated inputs).
    pub fn rail_u(&self, slopes: [f64; 2]) -> f64 {
        2.0 * quadratic(&self.covariance, slopes).max(0.0).sqrt()
    }
}

fn quadratic(covariance: &[[f64; 2]; 2], g: [f64; 2]) -> f64 {
    (0..2).flat_map(|i| (0..2).map(move |j| g[i] * covariance[i][j] * g[j])).sum()
}

/// A fit as the record keeps it.
#[derive(Clone, Debug, PartialEq)]
pub struct RecordedFit {
    /// When it was made.
    pub made_at: Utc,
    /// The first of its pairs.
    pub from: Utc,
    /// The end of its last pair.
    pub to: Utc,
    /// What it says.
    pub fit: Fit,
}

/// Why there is no fit.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum FitError {
    /// Too little of the record counts.
    #[error(
        "a fit needs at least {FEWEST_PAIRS} pairs with the amplifier unloaded or idle, and the record has {usable} of \
         {all} ({off} with it off, {warming_up} warming up or switching, {loaded} loaded): record more, or say what it \
         did with --loading"
    )]
    TooFew {
        /// Pairs that count.
        usable: usize,
        /// All pairs.
        all: usize,
        /// Those with the amplifier off.
        off: usize,
        /// Warming up or switching.
        warming_up: usize,
        /// Loaded.
        loaded: usize,
    },
    /// The supply has no such node.
    #[error("the supply of {amplifier} has no node {node}")]
    NoNode {
        /// Amplifier.
        amplifier: String,
        /// Node.
        node: String,
    },
    /// The owner says "full", and the config doesn't say what full is.
    #[error(
        "the supply of {amplifier} doesn't say what it draws at full output: give full_ma, or another --loading"
    )]
    FullUnknown {
        /// Amplifier.
        amplifier: String,
    },
    /// The record contradicts the supply: no parameters near the nameplate explain it.
    #[error(
        "the record doesn't fit the supply of {amplifier}: the rail stands at {ratio_pct:.0} % of what the config gives, \
         further off than its doubts allow; check the config, or which node the channel measures"
    )]
    Contradiction {
        /// Amplifier.
        amplifier: String,
        /// Recorded over projected rail, %.
        ratio_pct: f64,
    },
    /// The model has no answer.
    #[error(transparent)]
    Solve(#[from] SolveError),
}

/// How well the two channels measure: half-widths of their accuracy as fractions of the reading, rectangular.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Accuracy {
    /// Of the mains channel.
    pub mains: f64,
    /// Of the rail channel.
    pub rail: f64,
}

/// Fits `circuit` to the recorded pairs of its `node`. `word` is the owner's: the amplifier was in this loading
/// whenever it was on. Pairs from both sides of a change to the amplifier must not be given together.
pub fn fit(
    circuit: &Circuit,
    node: &str,
    pairs: &[Pair],
    accuracy: Accuracy,
    word: Option<Loading>,
) -> Result<Fit, FitError> {
    let amplifier = || circuit.amplifier.clone();
    let index = circuit
        .node(node)
        .ok_or_else(|| FitError::NoNode { amplifier: amplifier(), node: node.to_owned() })?;
    if word == Some(Loading::Full) && !circuit.knows(Loading::Full) {
        return Err(FitError::FullUnknown { amplifier: amplifier() });
    }
    let second = weaker(circuit, index, pairs)?;
    let surfaces = Surfaces::solve(circuit, index, second, second.prior_u(circuit), pairs)?;
    fit_surfaces(circuit, node, &surfaces, second, pairs, accuracy, word)
}

/// The second part of [`fit`], the model being solved.
fn fit_surfaces(
    circuit: &Circuit,
    node: &str,
    surfaces: &Surfaces,
    second: Second,
    pairs: &[Pair],
    accuracy: Accuracy,
    word: Option<Loading>,
) -> Result<Fit, FitError> {
    let secondary = circuit.transformer.secondary_v;
    let priors = Priors {
        secondary: standard(secondary.half_width / secondary.value),
        second: second.prior_u(circuit),
        mains_gain: standard(accuracy.mains),
        rail_gain: standard(accuracy.rail),
        crest: standard(least_squares::CREST_HALF_WIDTH),
    };
    let doing = sort::sort(pairs, surfaces, &priors, word);
    let mut seen = sort::count(&doing);
    let data = Data::new(pairs, &doing, surfaces);
    if data.len() < FEWEST_PAIRS {
        let PairsSeen { all, off, warming_up, loaded, .. } = seen;
        return Err(FitError::TooFew { usable: data.len(), all, off, warming_up, loaded });
    }
    let (ratio, u) = data.level(&priors);
    if (ratio - 1.0).abs() > FARTHEST * u {
        return Err(FitError::Contradiction {
            amplifier: circuit.amplifier.clone(),
            ratio_pct: 100.0 * ratio,
        });
    }
    let free = least_squares::solve(&data, &priors, None);
    let told_apart = free.second_by_record < TOLD * priors.second;
    let posterior = if told_apart { free } else { least_squares::solve(&data, &priors, Some(0.0)) };
    seen.outliers = posterior.outliers;
    Ok(describe(circuit, node, second, told_apart, seen, &data, &priors, &posterior))
}

#[allow(clippy::too_many_arguments, reason = "the parts of one result")]
fn describe(
    circuit: &Circuit,
    node: &str,
    second: Second,
    told_apart: bool,
    seen: PairsSeen,
    data: &Data<'_>,
    priors: &Priors,
    posterior: &Posterior,
) -> Fit {
    let covariance = [0, 1].map(|i| [0, 1].map(|j| posterior.covariance[(i, j)]));
    let parameter = |nameplate: f64, prior: f64, i: usize| Parameter {
        nameplate,
        nameplate_u: 2.0 * nameplate * prior,
        fitted: nameplate * (1.0 + posterior.x[i]),
        fitted_u: 2.0 * nameplate * covariance[i][i].sqrt(),
    };
    Fit {
        amplifier: circuit.amplifier.clone(),
        node: node.to_owned(),
        seen,
        mains_v: data.mains_range(),
        secondary_v: parameter(circuit.transformer.secondary_v.value, priors.secondary, 0),
        second,
        second_value: parameter(second.nameplate(circuit), priors.second, 1),
        told_apart,
        residual_v: posterior.scatter_v,
        independent_pairs: posterior.independent,
        covariance,
        rests_on: rests_on(circuit),
    }
}

/// The parameter whose doubt moves the idle rail more.
fn weaker(circuit: &Circuit, node: usize, pairs: &[Pair]) -> Result<Second, SolveError> {
    let mains_v = middle_mains(circuit, pairs);
    let effect = |second: Second| -> Result<f64, SolveError> {
        let u = second.prior_u(circuit);
        let rail =
            |factor: f64| surface::rail(&second.applied(circuit, factor), node, Loading::Idle, mains_v);
        Ok((rail(1.0 - u)? - rail(1.0 + u)?).abs())
    };
    let source = effect(Second::SourceResistance)?;
    Ok(if effect(Second::IdleCurrent)? > source { Second::IdleCurrent } else { Second::SourceResistance })
}

fn middle_mains(circuit: &Circuit, pairs: &[Pair]) -> f64 {
    let mut mains: Vec<f64> = pairs.iter().map(|pair| pair.mains_v).collect();
    mains.sort_by(f64::total_cmp);
    mains.get(mains.len() / 2).copied().unwrap_or(circuit.transformer.wound_for_v)
}

/// Standard uncertainty of a rectangular half-width.
fn standard(half_width: f64) -> f64 {
    rectangular_u(half_width) / 2.0
}

/// A fingerprint of what a fit rests on: all that moves a rail. Ratings, taps that aren't in use and the heater don't.
pub fn rests_on(circuit: &Circuit) -> String {
    let mut moving = circuit.clone();
    moving.amplifier.clear();
    moving.transformer.taps_v.clear();
    moving.heater = None;
    for section in &mut moving.filter {
        if let Some(capacitor) = &mut section.capacitor {
            capacitor.rated_v = None;
        }
    }
    let digest = Sha256::digest(format!("{moving:?}"));
    digest.iter().take(12).map(|byte| format!("{byte:02x}")).collect()
}

#[cfg(test)]
mod tests;
