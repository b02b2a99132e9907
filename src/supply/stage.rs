//! One implicit stage: states y that satisfy y = base + a·f(y) at an instant, f the circuit's time derivative.
//!
//! Every reactance becomes a resistance and a source, the ladder of the filter is folded from its far end into one
//! source and one resistance at the rectifier, the rectifier's balance is solved exactly, and the ladder is unfolded
//! again. A load whose law is not linear is linearised about the last voltage and the walk repeated until its current
//! is right.

use super::circuit::RectifierCircuit;
use super::network::Network;
use super::paths::{Balance, PathCurrents};

/// Walks along the ladder that a stage may take for its loads' laws.
const MOST_WALKS: usize = 60;

/// A load's current counts as right when what the linearisation left out is less than this part of it.
const LOAD_TOLERANCE: f64 = 1e-8;

/// All that one stage knows; kept between stages as the next one's guess, and so that nothing is allocated.
#[derive(Clone, Debug, Default)]
pub(super) struct Stage {
    /// Node voltages, V.
    pub(super) v: Vec<f64>,
    /// Current in the series part ahead of each node, A.
    pub(super) i: Vec<f64>,
    /// Current into each capacitor, A.
    pub(super) shunt_i: Vec<f64>,
    /// Drawn by each node's loads, A.
    pub(super) drawn: Vec<f64>,
    /// The paths' currents.
    pub(super) paths: PathCurrents,
    pub(super) a: f64,
    pub(super) shunt_siemens: Vec<f64>,
    pub(super) shunt_ohm: Vec<f64>,
    pub(super) reactance: Vec<f64>,
    about_v: Vec<f64>,
    load_siemens: Vec<f64>,
    load_source: Vec<f64>,
    pub(super) node_siemens: Vec<f64>,
    pub(super) node_ohm: Vec<f64>,
    node_source: Vec<f64>,
    pub(super) series_siemens: Vec<f64>,
    series_v: Vec<f64>,
    pub(super) tangent_node: Vec<f64>,
    pub(super) tangent_series: Vec<f64>,
    pub(super) tangent_i: Vec<f64>,
    pub(super) tangent_v: Vec<f64>,
}

impl Stage {
    pub(super) fn new(net: &Network, volts: f64) -> Stage {
        let zeros = vec![0.0; net.nodes.len()];
        let columns = vec![0.0; net.nodes.len() * net.states];
        Stage {
            v: vec![volts; net.nodes.len()],
            i: zeros.clone(),
            shunt_i: zeros.clone(),
            drawn: zeros.clone(),
            shunt_siemens: zeros.clone(),
            shunt_ohm: zeros.clone(),
            reactance: zeros.clone(),
            about_v: zeros.clone(),
            load_siemens: zeros.clone(),
            load_source: zeros.clone(),
            node_siemens: zeros.clone(),
            node_ohm: zeros.clone(),
            node_source: zeros.clone(),
            series_siemens: zeros.clone(),
            series_v: zeros,
            tangent_node: columns.clone(),
            tangent_series: columns.clone(),
            tangent_i: vec![0.0; net.states],
            tangent_v: vec![0.0; net.states],
            ..Stage::default()
        }
    }

    /// Solves the stage at the e.m.f. `emf` (of one half if centre-tapped) into `y`. `None` if no answer was found.
    pub(super) fn solve(
        &mut self,
        net: &Network,
        emf: f64,
        a: f64,
        base: &[f64],
        y: &mut [f64],
    ) -> Option<()> {
        if a != self.a {
            self.settle_step(net, a);
        }
        for _ in 0..MOST_WALKS {
            self.linearise_loads(net);
            self.fold_siemens(net, net.bent);
            self.fold_sources(net, base);
            self.solve_paths(net, emf, base)?;
            self.unfold(net, base, y);
            if self.loads_are_right(net) {
                return Some(());
            }
        }
        None
    }

    /// Guesses the node voltages along a straight line, `part` times as far on from `from` as they lie now.
    pub(super) fn guess_along(&mut self, from: &[f64], part: f64) {
        for (v, from) in self.v.iter_mut().zip(from) {
            *v = from + part * (*v - from);
        }
    }

    /// How many paths conduct.
    pub(super) fn conducting(&self) -> usize {
        self.paths.i.iter().filter(|i| **i > 0.0).count()
    }

    fn linearise_loads(&mut self, net: &Network) {
        for (k, node) in net.nodes.iter().enumerate().take(net.bent) {
            if !node.laws.is_empty() {
                let v = self.v[k];
                let (i, siemens) = node.drawn(v);
                self.about_v[k] = v;
                self.load_siemens[k] = siemens;
                self.load_source[k] = i - siemens * v;
            }
        }
    }

    fn loads_are_right(&self, net: &Network) -> bool {
        net.nodes.iter().enumerate().take(net.bent).all(|(k, node)| {
            if node.laws.is_empty() {
                return true;
            }
            let (v, about_v) = (self.v[k], self.about_v[k]);
            let moved = (v - about_v) / v;
            if v.min(about_v) > node.foot_v && node.bend * moved * moved <= LOAD_TOLERANCE {
                return true;
            }
            let exact = node.drawn(v).0;
            (exact - self.drawn[k]).abs() <= LOAD_TOLERANCE * exact.abs()
        })
    }

    /// What of the ladder depends on the step alone.
    fn settle_step(&mut self, net: &Network, a: f64) {
        self.a = a;
        for (k, node) in net.nodes.iter().enumerate() {
            if let Some(shunt) = node.shunt {
                self.shunt_ohm[k] = a / shunt.farad;
                self.shunt_siemens[k] = 1.0 / (shunt.esr_ohm + self.shunt_ohm[k]);
            }
            self.reactance[k] = node.choke.map_or(0.0, |choke| choke.henry / a);
            self.load_siemens[k] = node.siemens;
        }
        self.fold_siemens(net, net.nodes.len());
    }

    /// From the far end: the conductance of each of the first `count` nodes with all behind it.
    fn fold_siemens(&mut self, net: &Network, count: usize) {
        for k in (0..count).rev() {
            let behind = self.series_siemens.get(k + 1).copied().unwrap_or(0.0);
            let siemens = self.load_siemens[k] + self.shunt_siemens[k] + behind;
            self.node_siemens[k] = siemens;
            // A doubler's first node may hold nothing but its pair.
            self.node_ohm[k] = if siemens > 0.0 { 1.0 / siemens } else { 0.0 };
            self.series_siemens[k] = 1.0 / (net.nodes[k].series_ohm + self.reactance[k] + self.node_ohm[k]);
        }
    }

    /// From the far end: the source of each node with all behind it.
    fn fold_sources(&mut self, net: &Network, base: &[f64]) {
        let mut behind = 0.0;
        for (k, node) in net.nodes.iter().enumerate().rev() {
            let mut source = self.load_source[k] + behind;
            if let Some(shunt) = node.shunt {
                source -= self.shunt_siemens[k] * base[shunt.state];
            }
            self.node_source[k] = source;
            let held = node.choke.map_or(0.0, |choke| self.reactance[k] * base[choke.state]);
            self.series_v[k] = -held - source * self.node_ohm[k];
            behind = -self.series_siemens[k] * self.series_v[k];
        }
    }

    fn solve_paths(&mut self, net: &Network, emf: f64, base: &[f64]) -> Option<()> {
        let reactance = net.leakage_h / self.a;
        let source_ohm = net.source_ohm + reactance;
        let held = net.leak_state.map_or(0.0, |at| reactance * base[at]);
        let behind_ohm = 1.0 / self.series_siemens[0];
        let behind_v = self.series_v[0];
        let balance = match net.wiring {
            RectifierCircuit::Bridge => Balance {
                drive: [emf + held - behind_v, -emf - held - behind_v],
                own_ohm: [source_ohm + behind_ohm; 2],
                mutual_ohm: behind_ohm - source_ohm,
            },
            RectifierCircuit::FullWave => {
                let other = net.leak_state.map_or(0.0, |at| reactance * base[at + 1]);
                Balance {
                    drive: [emf + held - behind_v, -emf + other - behind_v],
                    own_ohm: [source_ohm + behind_ohm; 2],
                    mutual_ohm: behind_ohm,
                }
            }
            RectifierCircuit::HalfWave => Balance {
                drive: [emf + held - behind_v, f64::NEG_INFINITY],
                own_ohm: [source_ohm + behind_ohm; 2],
                mutual_ohm: behind_ohm,
            },
            RectifierCircuit::Doubler => {
                let open = self.open_pair(net, base)?;
                let [upper, lower] = open.ohm;
                let shed = self.node_siemens[0] * open.share;
                Balance {
                    drive: [emf + held - open.volts[0], -emf - held - open.volts[1]],
                    own_ohm: [
                        source_ohm + upper * (1.0 - shed * upper),
                        source_ohm + lower * (1.0 - shed * lower),
                    ],
                    mutual_ohm: -source_ohm - upper * lower * shed,
                }
            }
        };
        self.paths = net.parts.solve(&balance, self.paths.i)?;
        Some(())
    }

    /// A doubler's capacitors with no current in the paths.
    fn open_pair(&self, net: &Network, base: &[f64]) -> Option<OpenPair> {
        let pair = net.pair?;
        let ohm = pair.farad.map(|farad| self.a / farad);
        let share = 1.0 / (1.0 + (ohm[0] + ohm[1]) * self.node_siemens[0]);
        let held = [base[pair.state], base[pair.state + 1]];
        let node_v = share * (held[0] + held[1] - (ohm[0] + ohm[1]) * self.node_source[0]);
        let drawn = self.node_siemens[0] * node_v + self.node_source[0];
        Some(OpenPair { ohm, share, node_v, volts: [held[0] - ohm[0] * drawn, held[1] - ohm[1] * drawn] })
    }

    /// From the rectifier: every voltage and current, and the new states.
    fn unfold(&mut self, net: &Network, base: &[f64], y: &mut [f64]) {
        let [positive, negative] = self.paths.i;
        if let Some(at) = net.leak_state {
            match net.wiring {
                RectifierCircuit::FullWave => {
                    y[at] = positive;
                    y[at + 1] = negative;
                }
                _ => y[at] = positive - negative,
            }
        }
        for (k, node) in net.nodes.iter().enumerate() {
            let (i, v) = match (k, net.pair) {
                (0, Some(pair)) => self.unfold_pair(net, pair.state, base, y),
                (0, None) => {
                    let i = positive + negative;
                    (i, (i - self.node_source[0]) * self.node_ohm[0])
                }
                _ => {
                    let i = self.series_siemens[k] * (self.v[k - 1] - self.series_v[k]);
                    (i, (i - self.node_source[k]) * self.node_ohm[k])
                }
            };
            self.i[k] = i;
            self.v[k] = v;
            self.drawn[k] = self.load_source[k] + self.load_siemens[k] * v;
            if let Some(choke) = node.choke {
                y[choke.state] = i;
            }
            if let Some(shunt) = node.shunt {
                let i = self.shunt_siemens[k] * (v - base[shunt.state]);
                self.shunt_i[k] = i;
                y[shunt.state] = base[shunt.state] + self.shunt_ohm[k] * i;
            }
        }
    }

    /// The pair's voltages into `y`; returns the current into the first node and its voltage.
    fn unfold_pair(&self, net: &Network, state: usize, base: &[f64], y: &mut [f64]) -> (f64, f64) {
        let Some(open) = self.open_pair(net, base) else { return (0.0, 0.0) };
        let [positive, negative] = self.paths.i;
        let v = open.node_v + open.share * (open.ohm[0] * positive + open.ohm[1] * negative);
        let i = self.node_siemens[0] * v + self.node_source[0];
        y[state] = base[state] + open.ohm[0] * (positive - i);
        y[state + 1] = base[state + 1] + open.ohm[1] * (negative - i);
        (i, v)
    }
}

/// A doubler's pair as its paths see it.
pub(super) struct OpenPair {
    pub(super) ohm: [f64; 2],
    /// What of a current's effect on the node's voltage is left beside all that it feeds.
    pub(super) share: f64,
    pub(super) node_v: f64,
    pub(super) volts: [f64; 2],
}
