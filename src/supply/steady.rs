//! The supply's periodic steady state at one mains voltage and loading, and the solver that finds it.

use super::circuit::{Circuit, Dropper, Loading, RectifierCircuit};
use super::measures::{Measures, PathMeasure};
use super::mesh::{Mesh, Window};
use super::network::Network;
use super::period::{Drive, Walker};
use super::shooting::{Goal, NoPeriod, Periodic, shoot};

/// How finely and how closely to solve.
#[derive(Clone, Debug, PartialEq)]
pub struct SolveOptions {
    /// Steps in half a mains period.
    pub steps: usize,
    /// Greatest residual at the fixed point, (I − M)⁻¹·r over each state's size: by how much the state at the period's
    /// start may still be wrong.
    pub residual: f64,
    /// Walks through the period before giving up.
    pub tries: usize,
    /// Where to start: a neighbouring solution of the same circuit.
    pub warm: Option<Warm>,
}

impl Default for SolveOptions {
    fn default() -> Self {
        SolveOptions { steps: 128, residual: 1e-7, tries: 80, warm: None }
    }
}

/// A solution's state, to start its neighbour from.
#[derive(Clone, Debug, PartialEq)]
pub struct Warm {
    mains_v: f64,
    state: Vec<f64>,
    conducts: Vec<Window>,
    overlaps: Vec<Window>,
}

impl Warm {
    fn new(mains_v: f64, periodic: &Periodic) -> Warm {
        let Periodic { state, walk, .. } = periodic;
        Warm {
            mains_v,
            state: state.clone(),
            conducts: walk.conducts.clone(),
            overlaps: walk.overlaps.clone(),
        }
    }
}

/// Why a supply has no answer.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum SolveError {
    /// The circuit or what is asked of it can't be solved as it is stated.
    #[error("the supply of {amplifier} can't be solved: {what}")]
    Circuit {
        /// Amplifier.
        amplifier: String,
        /// What is wrong.
        what: String,
    },
    /// No currents were found that balance at one instant.
    #[error(
        "the supply of {amplifier} has no balance of currents at {at_deg:.0}° of the mains period ({loading}, \
         {mains_v:.1} V mains); check its part values"
    )]
    Balance {
        /// Amplifier.
        amplifier: String,
        /// Mains, V r.m.s.
        mains_v: f64,
        /// Word of the loading.
        loading: &'static str,
        /// Where in the period, degrees from the fundamental's rise.
        at_deg: f64,
    },
    /// The state did not come to repeat itself.
    #[error(
        "the supply of {amplifier} finds no steady state ({loading}, {mains_v:.1} V mains): after {tries} tries its \
         period's start is still {residual:.1e} of its value off, and {wanted:.1e} is wanted; check its part values"
    )]
    Period {
        /// Amplifier.
        amplifier: String,
        /// Mains, V r.m.s.
        mains_v: f64,
        /// Word of the loading.
        loading: &'static str,
        /// The residual reached.
        residual: f64,
        /// The residual wanted.
        wanted: f64,
        /// Walks through the period.
        tries: usize,
    },
}

/// One node in the steady state.
#[derive(Clone, Debug, PartialEq)]
pub struct NodeState {
    /// Its name.
    pub node: String,
    /// Mean, V.
    pub mean_v: f64,
    /// Peak to peak ripple, V.
    pub ripple_vpp: f64,
    /// Lowest, V.
    pub min_v: f64,
    /// Highest, V.
    pub max_v: f64,
    /// Mean current through the series part that leads to it, A.
    pub series_a: f64,
    /// Mean current that its loads and bleeders draw, A.
    pub load_a: f64,
    /// What they take, W.
    pub load_w: f64,
}

/// A fitted dropper in the steady state.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DropperState {
    /// Its mean loss over its mean current, V: the drop weighted by charge. With no current at all the volts at which
    /// it would begin to conduct.
    pub mean_v: f64,
    /// Mean loss, W.
    pub loss_w: f64,
}

/// What the source gives and where it goes, means over a period, W.
#[derive(Clone, Copy, Debug, PartialEq, Default)]
pub struct PowerBalance {
    /// From the secondary's e.m.f.
    pub source_w: f64,
    /// Lost in the winding.
    pub winding_w: f64,
    /// Lost in all rectifying devices.
    pub diodes_w: f64,
    /// Lost in a dropper.
    pub dropper_w: f64,
    /// Lost in the filter's resistors, chokes and capacitors.
    pub filter_w: f64,
    /// Taken by loads and bleeders.
    pub loads_w: f64,
}

impl PowerBalance {
    /// What the source gives less all that is accounted for, W: an error of the solution, not of nature.
    pub fn missing_w(&self) -> f64 {
        self.source_w - self.winding_w - self.diodes_w - self.dropper_w - self.filter_w - self.loads_w
    }
}

/// The work that a solution took.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Default)]
pub struct Work {
    /// Walks through the period (or half of it).
    pub walks: usize,
    /// Steps in the last walk.
    pub steps: usize,
}

/// A supply in its periodic steady state.
#[derive(Clone, Debug, PartialEq)]
pub struct SteadyState {
    /// Mains, V r.m.s.
    pub mains_v: f64,
    /// Loading.
    pub loading: Loading,
    /// Every node in the config's order.
    pub nodes: Vec<NodeState>,
    /// R.m.s. current of the winding (of one half if centre-tapped), A.
    pub winding_rms_a: f64,
    /// Its peak, A.
    pub winding_peak_a: f64,
    /// Mean current of one device, the one that works harder where they differ, A.
    pub diode_mean_a: f64,
    /// Its r.m.s. current, A.
    pub diode_rms_a: f64,
    /// Its peak current, A.
    pub diode_peak_a: f64,
    /// Peak inverse voltage of one device, V.
    pub inverse_peak_v: f64,
    /// Loss in the whole winding, W.
    pub winding_loss_w: f64,
    /// A fitted dropper.
    pub dropper: Option<DropperState>,
    /// Heater winding, V.
    pub heater_v: Option<f64>,
    /// Powers.
    pub power: PowerBalance,
    /// Crest factor of the mains it was solved for.
    pub crest_factor: f64,
    /// Residual at the fixed point, relative: see [`SolveOptions::residual`].
    pub residual: f64,
    /// Work it took.
    pub work: Work,
    warm: Option<Warm>,
}

impl SteadyState {
    /// The state, to start a neighbouring solution from; `None` where nothing moves.
    pub fn warm(&self) -> Option<&Warm> {
        self.warm.as_ref()
    }
}

/// Solves `circuit` under `loading` at `mains_v` r.m.s.
///
/// # Errors
/// When the circuit can't be stated as equations, the loading's current is unknown, or no steady state is found.
pub fn steady_state(
    circuit: &Circuit,
    mains_v: f64,
    loading: Loading,
    options: &SolveOptions,
) -> Result<SteadyState, SolveError> {
    Solver::new(circuit, loading, options.clone())?.at(mains_v)
}

/// Solves `circuit` under `loading` at each of `mains_v`, each solution starting the next.
///
/// # Errors
/// As [`steady_state`], for the first mains that fails.
pub fn sweep(
    circuit: &Circuit,
    loading: Loading,
    mains_v: &[f64],
    options: &SolveOptions,
) -> Result<Vec<SteadyState>, SolveError> {
    let mut solver = Solver::new(circuit, loading, options.clone())?;
    mains_v.iter().map(|&mains_v| solver.at(mains_v)).collect()
}

/// One circuit under one loading, ready to be solved at any mains; each solution is the next one's start.
#[derive(Clone, Debug)]
pub struct Solver<'a> {
    circuit: &'a Circuit,
    loading: Loading,
    options: SolveOptions,
    net: Network,
    half: bool,
    /// Peak of the mains over its r.m.s.
    crest_factor: f64,
    earlier: Option<Warm>,
}

impl<'a> Solver<'a> {
    /// Compiles the circuit.
    ///
    /// # Errors
    /// When it can't be stated as equations or the loading's current is unknown.
    pub fn new(circuit: &'a Circuit, loading: Loading, options: SolveOptions) -> Result<Self, SolveError> {
        let refuse = |what: String| SolveError::Circuit { amplifier: circuit.amplifier.clone(), what };
        let net = Network::new(circuit, loading).map_err(refuse)?;
        if options.steps < 8 {
            return Err(refuse(format!("{} steps in half a period are too few, 8 at least", options.steps)));
        }
        let half = net.symmetric && circuit.wave.is_half_wave_symmetric();
        Ok(Solver {
            circuit,
            loading,
            options,
            net,
            half,
            crest_factor: circuit.wave.crest_factor(),
            earlier: None,
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
        let start = self.options.warm.take().filter(|warm| warm.state.len() == self.net.states);
        let (periodic, walks, steps) = match start {
            Some(warm) => match self.solve_from(mains_v, emf_v, &warm) {
                Ok(found) => found,
                // A neighbour too far away is no reason to fail.
                Err(_) => self.solve_cold(mains_v, emf_v)?,
            },
            None => self.solve_cold(mains_v, emf_v)?,
        };
        let warm = Warm::new(mains_v, &periodic);
        self.earlier = self.options.warm.replace(warm.clone());
        Ok(self.describe(mains_v, &periodic, Work { walks, steps }, warm))
    }

    fn solve_cold(&self, mains_v: f64, emf_v: f64) -> Result<(Periodic, usize, usize), SolveError> {
        let mesh = self.even_mesh();
        let start = self.cold_start(emf_v);
        let rough = self.shoot(mains_v, emf_v, &mesh, start, self.options.residual.max(1e-4))?;
        let warm = Warm::new(mains_v, &rough);
        let (fine, walks, steps) = self.solve_from(mains_v, emf_v, &warm)?;
        Ok((fine, rough.tries + walks, steps))
    }

    fn solve_from(
        &self,
        mains_v: f64,
        emf_v: f64,
        warm: &Warm,
    ) -> Result<(Periodic, usize, usize), SolveError> {
        let wave = &self.circuit.wave;
        let mesh = Mesh::refined(wave, self.span(), self.steps(), &warm.conducts, &warm.overlaps);
        let start = warm.state.iter().map(|x| x * mains_v / warm.mains_v).collect();
        let found = self.shoot(mains_v, emf_v, &mesh, start, self.options.residual)?;
        let tries = found.tries;
        Ok((found, tries, mesh.steps.len()))
    }

    fn shoot(
        &self,
        mains_v: f64,
        emf_v: f64,
        mesh: &Mesh,
        start: Vec<f64>,
        residual: f64,
    ) -> Result<Periodic, SolveError> {
        let drive =
            Drive { net: &self.net, mesh, emf_v, period_s: 1.0 / self.circuit.frequency_hz, half: self.half };
        let scale = self.scale(emf_v);
        let goal = Goal {
            residual,
            tries: self.options.tries,
            scale: &scale,
            conducting: (self.first_voltage_state(), 0.9 * self.first_rest_v(emf_v)),
        };
        let mut walker = Walker::new(&self.net, self.rest_v(emf_v));
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

    fn even_mesh(&self) -> Mesh {
        Mesh::even(&self.circuit.wave, self.span(), self.steps())
    }

    /// Volts at the first node with no current at all: the peak less the knees of devices and dropper; a doubler's two
    /// halves add up.
    fn rest_v(&self, emf_v: f64) -> f64 {
        let [upper, lower] = self.rest_pair(emf_v);
        if self.net.pair.is_some() { upper.max(0.0) + lower.max(0.0) } else { upper }
    }

    /// What each half-wave alone would charge to, V.
    fn rest_pair(&self, emf_v: f64) -> [f64; 2] {
        let parts = &self.net.parts;
        let lower = emf_v * self.crest_factor - parts.devices * parts.diode.knee_v() - parts.drop.knee_v;
        // In a doubler the dropper stands in the lower half alone.
        [if self.net.pair.is_some() { lower + parts.drop.knee_v } else { lower }, lower]
    }

    fn first_rest_v(&self, emf_v: f64) -> f64 {
        if self.net.pair.is_some() { self.rest_pair(emf_v)[0] } else { self.rest_v(emf_v) }
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

    /// Nothing draws: every capacitor has charged to the peak and stays there; or the mains is too low for the
    /// rectifier and dropper to conduct at all.
    fn at_rest(&self, mains_v: f64, emf_v: f64) -> SteadyState {
        let rest_v = self.rest_v(emf_v).max(0.0);
        let nodes = self.circuit.filter.iter().map(|section| NodeState {
            node: section.node.clone(),
            mean_v: rest_v,
            ripple_vpp: 0.0,
            min_v: rest_v,
            max_v: rest_v,
            series_a: 0.0,
            load_a: 0.0,
            load_w: 0.0,
        });
        let knee_v = self.net.parts.drop.knee_v;
        SteadyState {
            mains_v,
            loading: self.loading,
            nodes: nodes.collect(),
            winding_rms_a: 0.0,
            winding_peak_a: 0.0,
            diode_mean_a: 0.0,
            diode_rms_a: 0.0,
            diode_peak_a: 0.0,
            inverse_peak_v: self.inverse_at_rest(emf_v),
            winding_loss_w: 0.0,
            dropper: self.circuit.dropper.as_ref().map(|_| DropperState { mean_v: knee_v, loss_w: 0.0 }),
            heater_v: self.heater_v(mains_v),
            power: PowerBalance::default(),
            crest_factor: self.crest_factor,
            residual: 0.0,
            work: Work::default(),
            warm: None,
        }
    }

    fn inverse_at_rest(&self, emf_v: f64) -> f64 {
        let peak_v = emf_v * self.crest_factor;
        let rest_v = self.rest_v(emf_v).max(0.0);
        // What a dropper below its knee takes while the winding's peak drives forwards.
        let dropped = (peak_v - rest_v).clamp(0.0, self.net.parts.drop.knee_v);
        match self.net.wiring {
            RectifierCircuit::Bridge => 0.5 * (rest_v + dropped + peak_v),
            RectifierCircuit::FullWave => rest_v + dropped + peak_v,
            RectifierCircuit::HalfWave => rest_v + peak_v,
            RectifierCircuit::Doubler => self.rest_pair(emf_v)[0].max(0.0) + peak_v,
        }
    }

    fn heater_v(&self, mains_v: f64) -> Option<f64> {
        self.circuit.heater.map(|heater| heater.per_mains_v * mains_v)
    }

    fn describe(&self, mains_v: f64, periodic: &Periodic, work: Work, warm: Warm) -> SteadyState {
        let seen = &periodic.walk.measures;
        let nodes = self.circuit.filter.iter().zip(&seen.nodes).map(|(section, node)| NodeState {
            node: section.node.clone(),
            mean_v: node.mean_v,
            ripple_vpp: node.highest_v - node.lowest_v,
            min_v: node.lowest_v,
            max_v: node.highest_v,
            series_a: node.series_a,
            load_a: node.load_a,
            load_w: node.load_w,
        });
        let path = self.harder_path(seen);
        let centre_tapped = self.net.wiring == RectifierCircuit::FullWave;
        let halves = seen.paths[0].square_a2 + seen.paths[1].square_a2;
        let (winding_a2, whole_a2, winding_peak_a) = if centre_tapped {
            let both = if self.half { [halves / 2.0; 2] } else { seen.paths.map(|path| path.square_a2) };
            (both[0].max(both[1]), halves, path.peak_a)
        } else {
            (seen.winding_square_a2, seen.winding_square_a2, seen.winding_peak_a)
        };
        let winding_w = self.net.source_ohm * whole_a2;
        let dropper = self.dropper(seen);
        SteadyState {
            mains_v,
            loading: self.loading,
            nodes: nodes.collect(),
            winding_rms_a: winding_a2.sqrt(),
            winding_peak_a,
            diode_mean_a: path.mean_a,
            diode_rms_a: path.square_a2.sqrt(),
            diode_peak_a: path.peak_a,
            inverse_peak_v: seen.inverse_peak_v,
            winding_loss_w: winding_w,
            dropper,
            heater_v: self.heater_v(mains_v),
            power: PowerBalance {
                source_w: seen.source_w,
                winding_w,
                diodes_w: seen.diode_w,
                dropper_w: dropper.map_or(0.0, |dropper| dropper.loss_w),
                filter_w: seen.nodes.iter().map(|node| node.series_w + node.esr_w).sum(),
                loads_w: seen.nodes.iter().map(|node| node.load_w).sum(),
            },
            crest_factor: self.crest_factor,
            residual: periodic.residual,
            work,
            warm: Some(warm),
        }
    }

    /// The path whose devices work harder. Over half a period that repeats with the halves exchanged, each path's
    /// whole period is the two together.
    fn harder_path(&self, seen: &Measures) -> PathMeasure {
        let [positive, negative] = seen.paths;
        if self.half {
            return PathMeasure {
                mean_a: (positive.mean_a + negative.mean_a) / 2.0,
                square_a2: (positive.square_a2 + negative.square_a2) / 2.0,
                peak_a: positive.peak_a.max(negative.peak_a),
            };
        }
        PathMeasure {
            mean_a: positive.mean_a.max(negative.mean_a),
            square_a2: positive.square_a2.max(negative.square_a2),
            peak_a: positive.peak_a.max(negative.peak_a),
        }
    }

    fn dropper(&self, seen: &Measures) -> Option<DropperState> {
        let (loss_w, through_a, knee_v) = match self.circuit.dropper.as_ref()? {
            Dropper::LineResistor(_) => (seen.nodes[1].line_dropper_w, seen.nodes[1].series_a, 0.0),
            _ => (seen.return_drop_w, seen.return_a, self.net.parts.drop.knee_v),
        };
        let mean_v = if through_a > 0.0 { loss_w / through_a } else { knee_v };
        Some(DropperState { mean_v, loss_w })
    }
}
