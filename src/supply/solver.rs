//! The solver of one circuit under one loading: where it starts, how it divides the period, and what it keeps from one
//! solution for the next.

use super::circuit::{Circuit, Loading};
use super::mesh::Mesh;
use super::network::Network;
use super::options::{SolveError, SolveOptions, Warm};
use super::period::{Drive, Walker};
use super::shooting::{Goal, NoPeriod, Periodic, shoot};
use super::state::{SteadyState, Work};

/// How closely the first, rough solution is taken before the mesh is fitted to it.
const ROUGH: f64 = 1e-4;

/// Meshes that are fitted, each to what the last one showed, before a first solution is taken.
const MOST_REFINEMENTS: usize = 4;

/// Load that damps everything, as the source's resistance over the load's.
const DAMPING_LOAD: f64 = 0.05;

/// Solutions that are kept for the next one's start: a parabola's.
const MOST_EARLIER: usize = 3;

/// How far apart in mains, as a part of it, they may lie.
const NEAR: f64 = 0.06;

/// One circuit under one loading, ready to be solved at any mains; each solution is the next one's start.
#[derive(Clone, Debug)]
pub struct Solver<'a> {
    pub(super) circuit: &'a Circuit,
    pub(super) loading: Loading,
    pub(super) options: SolveOptions,
    pub(super) net: Network,
    pub(super) half: bool,
    /// Peak of the mains over its r.m.s.
    pub(super) crest_factor: f64,
    /// The last solutions, newest last, for the next one's start.
    earlier: Vec<Warm>,
    mesh: Option<Mesh>,
}

impl<'a> Solver<'a> {
    /// Compiles the circuit.
    ///
    /// # Errors
    /// When it can't be stated as equations or the loading's current is unknown.
    pub fn new(
        circuit: &'a Circuit,
        loading: Loading,
        mut options: SolveOptions,
    ) -> Result<Self, SolveError> {
        let refuse = |what: String| SolveError::Circuit { amplifier: circuit.amplifier.clone(), what };
        let net = Network::new(circuit, loading).map_err(refuse)?;
        if options.steps < 8 {
            return Err(refuse(format!("{} steps in half a period are too few, 8 at least", options.steps)));
        }
        let earlier = options.warm.take().into_iter().collect();
        let half = net.symmetric && circuit.wave.is_half_wave_symmetric();
        Ok(Solver {
            circuit,
            loading,
            options,
            net,
            half,
            crest_factor: circuit.wave.crest_factor(),
            earlier,
            mesh: None,
        })
    }

    /// The steady state at `mains_v` r.m.s.
    ///
    /// # Errors
    /// When no steady state is found; the error says which criterion failed.
    pub fn at(&mut self, mains_v: f64) -> Result<SteadyState, SolveError> {
        if !(mains_v.is_finite() && mains_v > 0.0) {
            let what = format!("a mains of {mains_v} V is no mains");
            return Err(SolveError::Circuit { amplifier: self.circuit.amplifier.clone(), what });
        }
        let emf_v =
            self.circuit.transformer.secondary_v.value * mains_v / self.circuit.transformer.wound_for_v;
        if self.net.draws_nothing || self.rest_v(emf_v) <= 0.0 {
            return Ok(self.at_rest(mains_v, emf_v));
        }
        self.earlier.retain(|warm| warm.state.len() == self.net.states);
        let found = match self.earlier.last() {
            // A neighbour too far away is no reason to fail.
            Some(_) => self.solve_on(mains_v, emf_v).or_else(|_| self.solve_cold(mains_v, emf_v)),
            None => self.solve_cold(mains_v, emf_v),
        };
        let (periodic, work) = found?;
        let warm = Warm::new(mains_v, &periodic);
        let steady = self.describe(mains_v, &periodic, work, warm.clone());
        self.remember(warm);
        Ok(steady)
    }

    /// From nothing: roughly on even steps, then on a mesh that fits what was seen.
    fn solve_cold(&mut self, mains_v: f64, emf_v: f64) -> Result<(Periodic, Work), SolveError> {
        let mesh = Mesh::even(&self.circuit.wave, self.span(), self.steps());
        let rough = self
            .shoot(&self.net, mains_v, emf_v, &mesh, self.cold_start(emf_v), self.rough_residual())
            .or_else(|_| self.solve_by_loads(mains_v, emf_v, &mesh))?;
        self.earlier = vec![Warm::new(mains_v, &rough)];
        self.mesh = None;
        let mut walks = rough.tries;
        let mut refinements = 0;
        loop {
            let (fine, work) = self.solve_on(mains_v, emf_v)?;
            walks += work.walks;
            let (conducts, overlaps) = (&fine.walk.conducts, &fine.walk.overlaps);
            let suits = self.mesh.as_ref().is_some_and(|mesh| mesh.suits(self.span(), conducts, overlaps));
            refinements += 1;
            // Even steps show a needle of current no narrower than a step or two.
            if suits || refinements == MOST_REFINEMENTS {
                return Ok((fine, Work { walks, ..work }));
            }
            self.earlier = vec![Warm::new(mains_v, &fine)];
        }
    }

    /// The long way round: under a load that damps everything the steady state is easily found, and from there the
    /// load is taken away little by little, each solution starting the next. Filters that ring for hundreds of
    /// periods, with next to nothing drawing, want this.
    fn solve_by_loads(&self, mains_v: f64, emf_v: f64, mesh: &Mesh) -> Result<Periodic, SolveError> {
        let own: f64 = self.net.nodes.iter().map(|node| node.drawn(self.rest_v(emf_v)).0).sum();
        let own = own / self.rest_v(emf_v);
        let mut extra = DAMPING_LOAD / self.net.source_ohm.max(1.0) / self.net.nodes.len() as f64;
        let mut start = self.cold_start(emf_v);
        let mut walks = 0;
        loop {
            let mut net = self.net.clone();
            net.nodes.iter_mut().for_each(|node| node.siemens += extra);
            let mut found = self.shoot(&net, mains_v, emf_v, mesh, start, self.rough_residual())?;
            walks += found.tries;
            if extra == 0.0 {
                found.tries = walks;
                return Ok(found);
            }
            start = found.state;
            extra = if extra < 1e-3 * own { 0.0 } else { extra / 2.0 };
        }
    }

    fn rough_residual(&self) -> f64 {
        self.options.residual.max(ROUGH)
    }

    /// From the last solutions, on a mesh that fits the last one.
    fn solve_on(&mut self, mains_v: f64, emf_v: f64) -> Result<(Periodic, Work), SolveError> {
        let mesh = match (self.mesh.take(), self.earlier.last()) {
            (Some(mesh), Some(last)) if mesh.suits(self.span(), &last.conducts, &last.overlaps) => mesh,
            (_, last) => {
                let (conducts, overlaps) =
                    last.map_or((&[][..], &[][..]), |last| (&last.conducts[..], &last.overlaps[..]));
                Mesh::refined(&self.circuit.wave, self.span(), self.steps(), conducts, overlaps)
            }
        };
        let found =
            self.shoot(&self.net, mains_v, emf_v, &mesh, self.start_on(mains_v), self.options.residual)?;
        let work = Work { walks: found.tries, steps: mesh.steps.len() };
        self.mesh = Some(mesh);
        Ok((found, work))
    }

    /// The state over mains, carried on from the last solutions by the polynomial through them (Lagrange).
    fn start_on(&self, mains_v: f64) -> Vec<f64> {
        let mut start = vec![0.0; self.net.states];
        for (k, warm) in self.earlier.iter().enumerate() {
            let others = self.earlier.iter().enumerate().filter(|(j, _)| *j != k);
            let weight: f64 =
                others.map(|(_, other)| (mains_v - other.mains_v) / (warm.mains_v - other.mains_v)).product();
            for (x, state) in start.iter_mut().zip(&warm.state) {
                *x += weight * state * mains_v / warm.mains_v;
            }
        }
        self.net.keep_possible(&mut start);
        start
    }

    /// Keeps a solution, and of the earlier ones those that are near enough to say how the state goes on.
    fn remember(&mut self, warm: Warm) {
        let near = NEAR * warm.mains_v;
        self.earlier.retain(|other| {
            let apart = (other.mains_v - warm.mains_v).abs();
            apart < near && apart > 1e-6 * near
        });
        if self.earlier.len() == MOST_EARLIER {
            self.earlier.remove(0);
        }
        self.earlier.push(warm);
    }

    fn shoot(
        &self,
        net: &Network,
        mains_v: f64,
        emf_v: f64,
        mesh: &Mesh,
        start: Vec<f64>,
        residual: f64,
    ) -> Result<Periodic, SolveError> {
        let drive = Drive { net, mesh, emf_v, period_s: 1.0 / self.circuit.frequency_hz, half: self.half };
        let scale = self.scale(emf_v);
        let goal = Goal {
            residual,
            tries: self.options.tries,
            scale: &scale,
            conducting: (self.first_voltage_state(), 0.9 * self.first_rest_v(emf_v)),
        };
        let mut walker = Walker::new(net, self.rest_v(emf_v));
        let (amplifier, loading) = (self.circuit.amplifier.clone(), self.loading.word());
        shoot(&mut walker, &drive, &goal, start).map_err(|why| match why {
            NoPeriod::Stuck(stuck) => {
                SolveError::Balance { amplifier, mains_v, loading, at_deg: stuck.at_deg }
            }
            NoPeriod::Residual { residual: reached, tries } => {
                SolveError::Period { amplifier, mains_v, loading, residual: reached, wanted: residual, tries }
            }
        })
    }

    fn span(&self) -> f64 {
        if self.half { 0.5 } else { 1.0 }
    }

    fn steps(&self) -> usize {
        if self.half { self.options.steps } else { 2 * self.options.steps }
    }

    fn first_voltage_state(&self) -> usize {
        match (self.net.pair, self.net.nodes[0].shunt) {
            (Some(pair), _) => pair.state,
            (None, shunt) => shunt.map_or(0, |shunt| shunt.state),
        }
    }

    /// Size of each state: the rest voltage, and the current that all loads would draw there.
    fn scale(&self, emf_v: f64) -> Vec<f64> {
        let rest_v = self.rest_v(emf_v);
        let amperes = self.net.nodes.iter().map(|node| node.drawn(rest_v).0).sum::<f64>();
        let mut scale = vec![rest_v; self.net.states];
        for node in &self.net.nodes {
            if let Some(choke) = node.choke {
                scale[choke.state] = amperes;
            }
        }
        if let Some(at) = self.net.leak_state {
            scale[at..].fill(amperes);
        }
        scale
    }

    /// A start below the peak, so that the rectifier conducts: voltages by direct current alone.
    fn cold_start(&self, emf_v: f64) -> Vec<f64> {
        let rest_v = self.rest_v(emf_v);
        let choke_input = self.net.nodes[0].choke.is_some();
        // The mean of a full-wave rectified sine, 2√2/π of its r.m.s.
        let mean = 0.9 * emf_v;
        let first_v = if choke_input { (0.85 * mean).min(0.9 * rest_v) } else { 0.85 * rest_v };
        let mut state = vec![0.0; self.net.states];
        let mut behind_a: f64 = self.net.nodes.iter().map(|node| node.drawn(first_v).0).sum();
        let mut v = first_v;
        for (k, node) in self.net.nodes.iter().enumerate() {
            if k > 0 {
                v = (v - node.series_ohm * behind_a).max(0.3 * first_v);
            }
            if let Some(choke) = node.choke {
                state[choke.state] = behind_a;
            }
            if let Some(shunt) = node.shunt {
                state[shunt.state] = v;
            }
            behind_a = (behind_a - node.drawn(first_v).0).max(0.0);
        }
        if let Some(pair) = self.net.pair {
            let [upper, lower] = self.rest_pair(emf_v).map(|v| 0.85 * v.max(0.0));
            state[pair.state] = upper;
            state[pair.state + 1] = lower;
        }
        state
    }
}
