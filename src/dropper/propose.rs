//! The least change of each way that keeps every bound, and which comes first for this supply.

use super::bucking::{Bucking, STANDARD_SECONDARIES_V};
use super::change::{Change, Way};
use super::e_series::ESeries;
use super::mosfet::VGS_UNKNOWN_V;
use super::outcome::{Bound, Outcome};
use super::zener::ZenerString;
use crate::mains::Distribution;
use crate::supply::{CORE_LIMIT, Circuit, Dropper, SolveError, SolveOptions, core_ratio};

/// How much warmer than 25 °C a zener at the gate gets inside a chassis, K. Our judgement, no source.
const GATE_ZENER_RISE_K: f64 = 50.0;

/// The same for a power zener that carries the whole current. Our judgement, no source.
const POWER_ZENER_RISE_K: f64 = 100.0;

/// What is to be brought down, and over which mains.
#[derive(Clone, Debug)]
pub struct Task<'a> {
    /// The supply as it stands.
    pub circuit: &'a Circuit,
    /// What its nodes must keep.
    pub bounds: &'a [Bound],
    /// The mains at the socket, recorded or assumed.
    pub mains: &'a Distribution,
    /// The mains that a bucking transformer's primary is made for, V.
    pub declared_v: f64,
    /// The bias is known to be fed from a winding of its own, or there is none.
    pub bias_stays: bool,
}

/// One way with the least value that does it, or the nearest that was found.
#[derive(Clone, Debug, PartialEq)]
pub struct Proposal {
    /// Which way.
    pub way: Way,
    /// Whether every bound is kept over all of the mains, at both ends of the parts' tolerance.
    pub meets: bool,
    /// The change at the end of its tolerance that drops least.
    pub weakest: Change,
    /// The one that drops most.
    pub strongest: Change,
    /// The zeners, where there are any.
    pub zeners: Option<ZenerString>,
    /// One for each bound, of the weakest.
    pub at_weakest: Vec<Outcome>,
    /// One for each bound, of the strongest.
    pub at_strongest: Vec<Outcome>,
}

/// A value of a way before it is solved.
struct Candidate {
    weakest: Change,
    strongest: Change,
    zeners: Option<ZenerString>,
}

impl Task<'_> {
    /// Whether the supply keeps its bounds as it stands, so that no way is needed.
    ///
    /// # Errors
    /// As [`Outcome::of`].
    pub fn none_needed(&self) -> Result<bool, SolveError> {
        let kept = self.solve(self.circuit, None)?;
        Ok(!kept.is_empty() && kept.iter().all(|o| o.share_under_setpoint_pct >= 100.0))
    }

    /// Whether heaters or core stand too high at the highest mains, so that a dropper in the rail alone is not enough:
    /// heaters beyond their tolerance, core more than 6 % over what it was wound for.
    pub fn primary_side_first(&self) -> bool {
        let Some(high) = self.mains.max() else { return false };
        let heaters = self.circuit.heater.is_some_and(|heater| {
            heater.per_mains_v * high > heater.nominal_v * (1.0 + heater.tolerance_pct / 100.0)
        });
        heaters || core_ratio(self.circuit, high) > CORE_LIMIT
    }

    /// A proposal of each way that fits this supply, best first: those that keep every bound, then by the cure's reach.
    /// Empty where no mains or no bound is known.
    ///
    /// # Errors
    /// As [`Outcome::of`].
    pub fn proposals(&self) -> Result<Vec<Proposal>, SolveError> {
        let mut all = Vec::new();
        if self.bounds.is_empty() || self.mains.is_empty() {
            return Ok(all);
        }
        for candidates in [self.taps(), self.buckings(), mosfets(), zeners(), resistors()] {
            all.extend(self.least(candidates)?);
        }
        let order = match self.primary_side_first() {
            true => [Way::Tap, Way::Bucking, Way::ReturnMosfet, Way::ReturnZener, Way::SeriesResistor],
            false => [Way::Tap, Way::ReturnMosfet, Way::ReturnZener, Way::Bucking, Way::SeriesResistor],
        };
        all.sort_by_key(|p| (!p.meets, order.iter().position(|way| *way == p.way)));
        Ok(all)
    }

    /// The first of `candidates`, which drop more and more, under all setpoints even at its weakest; else the last.
    fn least(&self, candidates: Vec<Candidate>) -> Result<Option<Proposal>, SolveError> {
        let mut nearest = None;
        for candidate in candidates {
            let Ok(weak) = candidate.weakest.apply(self.circuit, self.bias_stays) else { continue };
            let Ok(strong) = candidate.strongest.apply(self.circuit, self.bias_stays) else { continue };
            let at_weakest = self.solve(&weak, Some(&candidate.weakest))?;
            let at_strongest = self.solve(&strong, Some(&candidate.strongest))?;
            let low_enough = at_weakest.iter().all(|o| o.share_under_setpoint_pct >= 100.0);
            let high_enough = at_strongest.iter().all(|o| o.share_above_min_pct >= 100.0);
            nearest = Some(Proposal {
                way: candidate.weakest.way(),
                meets: low_enough && high_enough,
                weakest: candidate.weakest,
                strongest: candidate.strongest,
                zeners: candidate.zeners,
                at_weakest,
                at_strongest,
            });
            // More drop only starves it further.
            if low_enough {
                break;
            }
        }
        Ok(nearest)
    }

    fn solve(&self, circuit: &Circuit, change: Option<&Change>) -> Result<Vec<Outcome>, SolveError> {
        let options = SolveOptions::default();
        let solved = self.bounds.iter().map(|b| Outcome::of(circuit, change, b, self.mains, &options));
        Ok(solved.collect::<Result<Vec<_>, _>>()?.into_iter().flatten().collect())
    }

    fn taps(&self) -> Vec<Candidate> {
        let transformer = &self.circuit.transformer;
        let mut taps: Vec<f64> =
            transformer.taps_v.iter().copied().filter(|t| *t > transformer.wound_for_v).collect();
        taps.sort_by(f64::total_cmp);
        taps.into_iter().map(|tap_v| exact(Change::Tap(tap_v))).collect()
    }

    fn buckings(&self) -> Vec<Candidate> {
        let of = |secondary_v| exact(Change::Bucking(Bucking { secondary_v, nominal_v: self.declared_v }));
        STANDARD_SECONDARIES_V.into_iter().filter(|v| *v < self.declared_v / 4.0).map(of).collect()
    }
}

fn exact(change: Change) -> Candidate {
    Candidate { weakest: change.clone(), strongest: change, zeners: None }
}

/// Zener strings of rising nominal, one or two in series.
fn strings() -> Vec<ZenerString> {
    let mut wanted = 5.1;
    let mut strings = Vec::new();
    while let Some(string) = ZenerString::at_least(wanted) {
        wanted = string.nominal_v() * 1.001;
        strings.push(string);
    }
    strings
}

fn zener_drop(volts: f64) -> Change {
    Change::Dropper(Dropper::ReturnZener { zener_v: volts, zener_ohm: 0.0 })
}

fn zeners() -> Vec<Candidate> {
    let of = |string: ZenerString| {
        let (low, high) = string.range_v(POWER_ZENER_RISE_K);
        Candidate { weakest: zener_drop(low), strongest: zener_drop(high), zeners: Some(string) }
    };
    strings().into_iter().map(of).collect()
}

/// Nothing is known of the MOSFET yet: V_GS anywhere in its range, as a threshold under a steep law.
fn mosfets() -> Vec<Candidate> {
    let drop = |zener_v, threshold_v| {
        Change::Dropper(Dropper::ReturnMosfet { zener_v, threshold_v, k_a_per_v2: 1e3, half_width_v: 0.0 })
    };
    let of = |string: ZenerString| {
        let (low, high) = string.range_v(GATE_ZENER_RISE_K);
        Candidate {
            weakest: drop(low, VGS_UNKNOWN_V.0),
            strongest: drop(high, VGS_UNKNOWN_V.1),
            zeners: Some(string),
        }
    };
    strings().into_iter().map(of).collect()
}

/// E12 resistors of ±5 % in the return, 10 Ω to 820 Ω.
fn resistors() -> Vec<Candidate> {
    let values = [0.1, 1.0]
        .into_iter()
        .flat_map(|by| ESeries::E12.decade().into_iter().map(move |v| f64::from(v) * by));
    let drop = |ohm| Change::Dropper(Dropper::ReturnResistor(ohm));
    values
        .map(|ohm| Candidate { weakest: drop(0.95 * ohm), strongest: drop(1.05 * ohm), zeners: None })
        .collect()
}
