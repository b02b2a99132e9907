//! How a stage's answer moves with where it started: the same ladder folded and unfolded for a column of changes
//! each, with the conductances that the stage left behind. Nothing is solved anew.

use super::circuit::RectifierCircuit;
use super::network::Network;
use super::stage::{OpenPair, Stage};

impl Stage {
    /// Carries the tangents `d_base` (a row of `net.states` columns for each state) through the stage that was just
    /// solved, into `d_y`.
    pub(super) fn carry(&mut self, net: &Network, d_base: &[f64], d_y: &mut [f64]) {
        let m = net.states;
        self.fold_tangents(net, d_base);
        self.carry_paths(net, d_base, d_y);
        for (k, node) in net.nodes.iter().enumerate() {
            let (ohm, siemens) = (self.node_ohm[k], self.series_siemens[k]);
            if k > 0 {
                let series = &self.tangent_series[k * m..(k + 1) * m];
                let source = &self.tangent_node[k * m..(k + 1) * m];
                for c in 0..m {
                    let i = siemens * (self.tangent_v[c] - series[c]);
                    self.tangent_i[c] = i;
                    self.tangent_v[c] = (i - source[c]) * ohm;
                }
            }
            if let Some(choke) = node.choke {
                d_y[choke.state * m..(choke.state + 1) * m].copy_from_slice(&self.tangent_i);
            }
            if let Some(shunt) = node.shunt {
                let part = self.shunt_ohm[k] * self.shunt_siemens[k];
                let row = shunt.state * m..(shunt.state + 1) * m;
                for ((y, &base), &v) in d_y[row.clone()].iter_mut().zip(&d_base[row]).zip(&self.tangent_v) {
                    *y = base + part * (v - base);
                }
            }
        }
    }

    /// From the far end: how the sources answer.
    fn fold_tangents(&mut self, net: &Network, d_base: &[f64]) {
        let m = net.states;
        for (k, node) in net.nodes.iter().enumerate().rev() {
            let ohm = self.node_ohm[k];
            let (here, behind) = self.tangent_series.split_at_mut((k + 1) * m);
            let series = &mut here[k * m..];
            let source = &mut self.tangent_node[k * m..(k + 1) * m];
            source.fill(0.0);
            if let Some(shunt) = node.shunt {
                let siemens = self.shunt_siemens[k];
                for (source, base) in source.iter_mut().zip(&d_base[shunt.state * m..]) {
                    *source -= siemens * base;
                }
            }
            if let Some(siemens) = self.series_siemens.get(k + 1) {
                for (source, behind) in source.iter_mut().zip(&behind[..m]) {
                    *source -= siemens * behind;
                }
            }
            for (series, source) in series.iter_mut().zip(&*source) {
                *series = -source * ohm;
            }
            if let Some(choke) = node.choke {
                let reactance = self.reactance[k];
                for (series, base) in series.iter_mut().zip(&d_base[choke.state * m..]) {
                    *series -= reactance * base;
                }
            }
        }
    }

    /// How the paths answer, and with them the winding, a doubler's pair and the first node.
    fn carry_paths(&mut self, net: &Network, d_base: &[f64], d_y: &mut [f64]) {
        let m = net.states;
        let row = |matrix: &[f64], state: usize, c: usize| matrix[state * m + c];
        let [own_p, mutual, own_n] = self.paths.siemens;
        let reactance = net.leakage_h / self.a;
        for c in 0..m {
            let held = net.leak_state.map_or(0.0, |at| reactance * row(d_base, at, c));
            let pair = net.pair.and_then(|pair| Some((pair.state, self.open_pair_tangent(net, d_base, c)?)));
            let drive = match (net.wiring, &pair) {
                (RectifierCircuit::FullWave, _) => {
                    let other = net.leak_state.map_or(0.0, |at| reactance * row(d_base, at + 1, c));
                    [held - self.tangent_series[c], other - self.tangent_series[c]]
                }
                (_, Some((_, open))) => [held - open.volts[0], -held - open.volts[1]],
                _ => [held - self.tangent_series[c], -held - self.tangent_series[c]],
            };
            let positive = own_p * drive[0] + mutual * drive[1];
            let negative = mutual * drive[0] + own_n * drive[1];
            if let Some(at) = net.leak_state {
                if net.wiring == RectifierCircuit::FullWave {
                    d_y[at * m + c] = positive;
                    d_y[(at + 1) * m + c] = negative;
                } else {
                    d_y[at * m + c] = positive - negative;
                }
            }
            if let Some((state, open)) = pair {
                let v = open.node_v + open.share * (open.ohm[0] * positive + open.ohm[1] * negative);
                let i = self.node_siemens[0] * v + self.tangent_node[c];
                d_y[state * m + c] = row(d_base, state, c) + open.ohm[0] * (positive - i);
                d_y[(state + 1) * m + c] = row(d_base, state + 1, c) + open.ohm[1] * (negative - i);
                (self.tangent_i[c], self.tangent_v[c]) = (i, v);
            } else {
                let i = positive + negative;
                (self.tangent_i[c], self.tangent_v[c]) = (i, (i - self.tangent_node[c]) * self.node_ohm[0]);
            }
        }
    }

    fn open_pair_tangent(&self, net: &Network, d_base: &[f64], c: usize) -> Option<OpenPair> {
        let pair = net.pair?;
        let m = net.states;
        let ohm = pair.farad.map(|farad| self.a / farad);
        let share = 1.0 / (1.0 + (ohm[0] + ohm[1]) * self.node_siemens[0]);
        let held = [d_base[pair.state * m + c], d_base[(pair.state + 1) * m + c]];
        let node_v = share * (held[0] + held[1] - (ohm[0] + ohm[1]) * self.tangent_node[c]);
        let drawn = self.node_siemens[0] * node_v + self.tangent_node[c];
        Some(OpenPair { ohm, share, node_v, volts: [held[0] - ohm[0] * drawn, held[1] - ohm[1] * drawn] })
    }
}
