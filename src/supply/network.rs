//! The circuit as numbers for one loading: what each node, each series part and the source contribute to its
//! equations, and where each state stands.

use super::circuit::{Circuit, Dropper, Load, Loading, RectifierCircuit, SeriesPart};
use super::device::{DiodeLaw, ReturnDrop};
use super::paths::{DropIn, PathParts};

/// Below this part of its `at_v` a load's law gives way to a resistor: no valve draws its current from no rail, and
/// the law's slope stays finite. No steady state lies there.
const LAW_FOOT: f64 = 0.01;

/// I = I0·(V/at_v)^law.
#[derive(Clone, Copy, Debug)]
pub(super) struct LoadLaw {
    i0_a: f64,
    at_v: f64,
    law: f64,
}

impl LoadLaw {
    /// Current at `v` and its slope, A and S.
    pub(super) fn current(&self, v: f64) -> (f64, f64) {
        let ratio = v / self.at_v;
        if ratio <= LAW_FOOT {
            let siemens = self.i0_a * LAW_FOOT.powf(self.law - 1.0) / self.at_v;
            return (siemens * v, siemens);
        }
        if self.law == 0.0 {
            return (self.i0_a, 0.0);
        }
        let i = self.i0_a * ratio.powf(self.law);
        (i, self.law * i / v)
    }
}

/// A shunt capacitor and the place of its voltage among the states.
#[derive(Clone, Copy, Debug)]
pub(super) struct Shunt {
    pub(super) farad: f64,
    pub(super) esr_ohm: f64,
    pub(super) state: usize,
}

/// A choke and the place of its current among the states.
#[derive(Clone, Copy, Debug)]
pub(super) struct Choke {
    pub(super) henry: f64,
    pub(super) state: usize,
}

/// One section: what leads to its node and what stands there.
#[derive(Clone, Debug)]
pub(super) struct Node {
    /// Resistance of the series part, with a dropper in the line, Ω.
    pub(super) series_ohm: f64,
    /// Of it, what a dropper in the line contributes, Ω.
    pub(super) dropper_ohm: f64,
    pub(super) choke: Option<Choke>,
    pub(super) shunt: Option<Shunt>,
    /// Bleeders, balance resistors and loads of law 1 together, S.
    pub(super) siemens: f64,
    /// Loads of any other law.
    pub(super) laws: Vec<LoadLaw>,
    /// Above this no load stands on its law's foot, V.
    pub(super) foot_v: f64,
    /// Greatest ½·law·|law − 1|: the straight line at v misses a current by at most this times (Δv/v)² of it.
    pub(super) bend: f64,
}

impl Node {
    /// All that draws from the node at `v`, and its slope, A and S.
    pub(super) fn drawn(&self, v: f64) -> (f64, f64) {
        self.laws
            .iter()
            .map(|law| law.current(v))
            .fold((self.siemens * v, self.siemens), |sum, one| (sum.0 + one.0, sum.1 + one.1))
    }
}

/// The doubler's two capacitors across the first node.
#[derive(Clone, Copy, Debug)]
pub(super) struct Pair {
    pub(super) farad: [f64; 2],
    /// The upper one's voltage; the lower one's follows it.
    pub(super) state: usize,
}

/// The whole circuit under one loading.
#[derive(Clone, Debug)]
pub(super) struct Network {
    pub(super) wiring: RectifierCircuit,
    pub(super) parts: PathParts,
    pub(super) source_ohm: f64,
    pub(super) leakage_h: f64,
    /// The winding's current, or both halves' (positive first), where there is leakage.
    pub(super) leak_state: Option<usize>,
    pub(super) pair: Option<Pair>,
    pub(super) nodes: Vec<Node>,
    /// How many nodes there are up to the last whose loads follow a law that bends.
    pub(super) bent: usize,
    /// How many states there are.
    pub(super) states: usize,
    /// Whether the second half-period repeats the first with the halves exchanged (the wave permitting).
    pub(super) symmetric: bool,
    /// Whether nothing at all draws current.
    pub(super) draws_nothing: bool,
}

impl Network {
    /// Compiles `circuit` under `loading`; `Err` says what it lacks.
    pub(super) fn new(circuit: &Circuit, loading: Loading) -> Result<Network, String> {
        let mut states = 0;
        let mut next = |count: usize| {
            states += count;
            states - count
        };
        let line_ohm = match circuit.dropper {
            Some(Dropper::LineResistor(_)) if circuit.filter.len() < 2 => {
                return Err("a dropper in the line needs a section after the reservoir".to_owned());
            }
            Some(Dropper::LineResistor(ohm)) => ohm,
            _ => 0.0,
        };
        let mut nodes = Vec::with_capacity(circuit.filter.len());
        for (k, section) in circuit.filter.iter().enumerate() {
            let (ohm, henry) = match section.series {
                SeriesPart::None => (0.0, 0.0),
                SeriesPart::Resistor(ohm) => (ohm, 0.0),
                SeriesPart::Choke { henry, ohm } => (ohm, henry),
            };
            let doubler_node = k == 0 && circuit.doubler_f.is_some();
            if section.capacitor.is_none() && !doubler_node {
                return Err(format!("node {} has no capacitor", section.node));
            }
            if doubler_node && section.series != SeriesPart::None {
                return Err(format!("node {} is the doubler's own; it has no series part", section.node));
            }
            let dropper_ohm = if k == 1 { line_ohm } else { 0.0 };
            let balance =
                section.capacitor.and_then(|c| Some(1.0 / (c.balance_ohm? * f64::from(c.in_series))));
            nodes.push(Node {
                series_ohm: ohm + dropper_ohm,
                dropper_ohm,
                choke: (henry > 0.0).then(|| Choke { henry, state: next(1) }),
                shunt: section.capacitor.map(|c| Shunt {
                    farad: c.farad,
                    esr_ohm: c.esr_ohm,
                    state: next(1),
                }),
                siemens: balance.unwrap_or(0.0),
                laws: Vec::new(),
                foot_v: 0.0,
                bend: 0.0,
            });
        }
        add_loads(circuit, loading, &mut nodes)?;
        let doubler = circuit.rectifier == RectifierCircuit::Doubler;
        let pair = match circuit.doubler_f {
            Some(farad) if doubler => Some(Pair { farad, state: next(2) }),
            None if !doubler => None,
            _ => return Err("a doubler has two capacitors of its own, and nothing else has".to_owned()),
        };
        let leakage_h = circuit.transformer.leakage_h;
        let leaks = if circuit.rectifier == RectifierCircuit::FullWave { 2 } else { 1 };
        let leak_state = (leakage_h > 0.0).then(|| next(leaks));
        let drop = ReturnDrop::of(circuit.dropper.as_ref());
        let has_drop = drop.knee_v > 0.0 || drop.ohm > 0.0 || drop.root > 0.0;
        let symmetric = match circuit.rectifier {
            RectifierCircuit::Bridge | RectifierCircuit::FullWave => true,
            RectifierCircuit::HalfWave => false,
            RectifierCircuit::Doubler => !has_drop && pair.is_some_and(|p| p.farad[0] == p.farad[1]),
        };
        let bent = nodes.iter().rposition(|node| !node.laws.is_empty()).map_or(0, |last| last + 1);
        let draws_nothing = nodes.iter().all(|node| node.siemens == 0.0 && node.laws.is_empty());
        Ok(Network {
            wiring: circuit.rectifier,
            parts: PathParts {
                diode: DiodeLaw::of(&circuit.device),
                devices: if circuit.rectifier == RectifierCircuit::Bridge { 2.0 } else { 1.0 },
                drop,
                drop_in: if doubler { DropIn::Negative } else { DropIn::Shared },
            },
            source_ohm: circuit.transformer.source_ohm.value,
            leakage_h,
            leak_state,
            pair,
            nodes,
            bent,
            states,
            symmetric,
            draws_nothing,
        })
    }

    /// Takes a state to the nearest one that can be: a first choke carries what the rectifier gives and never less
    /// than nothing, and a winding no more than that choke.
    pub(super) fn keep_possible(&self, state: &mut [f64]) {
        let mut most = f64::INFINITY;
        if let Some(choke) = self.nodes[0].choke {
            state[choke.state] = state[choke.state].max(0.0);
            most = state[choke.state];
        }
        match (self.leak_state, self.wiring) {
            (None, _) => {}
            (Some(at), RectifierCircuit::FullWave) => {
                state[at..at + 2].iter_mut().for_each(|half| *half = half.clamp(0.0, most));
            }
            (Some(at), RectifierCircuit::HalfWave) => state[at] = state[at].clamp(0.0, most),
            (Some(at), _) => state[at] = state[at].clamp(-most, most),
        }
    }
}

fn add_loads(circuit: &Circuit, loading: Loading, nodes: &mut [Node]) -> Result<(), String> {
    for load in &circuit.loads {
        match *load {
            Load::Bleeder { node, ohm } => node_at(nodes, node)?.siemens += 1.0 / ohm,
            Load::Law { node, idle_a, full_a, at_v, law } => {
                let i0_a = match loading {
                    Loading::Unloaded => continue,
                    Loading::Idle => idle_a,
                    Loading::Full => full_a.ok_or("a load's current at full output is unknown")?,
                };
                let node = node_at(nodes, node)?;
                if i0_a == 0.0 {
                    continue;
                }
                if law == 1.0 {
                    node.siemens += i0_a / at_v;
                } else {
                    node.laws.push(LoadLaw { i0_a, at_v, law });
                    node.foot_v = node.foot_v.max(LAW_FOOT * at_v);
                    node.bend = node.bend.max(0.5 * law * (law - 1.0).abs());
                }
            }
        }
    }
    Ok(())
}

fn node_at(nodes: &mut [Node], index: usize) -> Result<&mut Node, String> {
    let count = nodes.len();
    nodes.get_mut(index).ok_or_else(|| format!("a load stands on node {index} of {count}"))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_load_follows_its_law_and_its_slope_is_the_derivative() {
        for law in [0.0, 0.5, 1.5, 4.0] {
            let load = LoadLaw { i0_a: 0.2, at_v: 450.0, law };
            assert!((load.current(450.0).0 - 0.2).abs() < 1e-15);
            // Dissipation-wise: +9 % of rail is +54 % of power at law 4, so +41 % of current (handbook arithmetic).
            if law == 4.0 {
                assert!((load.current(450.0 * 1.09).0 / 0.2 - 1.4116).abs() < 1e-4);
            }
            for v in [2.0, 300.0] {
                let numeric = (load.current(v + 1e-4).0 - load.current(v - 1e-4).0) / 2e-4;
                assert!((numeric - load.current(v).1).abs() < 1e-9, "law {law} at {v} V");
            }
            assert_eq!(load.current(0.0).0, 0.0);
        }
    }
}
