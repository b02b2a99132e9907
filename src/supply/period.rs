//! One walk through the period from a given state: the two-stage, stiffly accurate and L-stable diagonally implicit
//! Runge–Kutta method of order 2 (R. Alexander, "Diagonally implicit Runge–Kutta methods for stiff O.D.E.'s", SIAM
//! J. Numer. Anal. 14, 1977), whose stability function is that of TR-BDF2. Unlike that method it needs no derivative at
//! a step's start, which a circuit doesn't have where inductors meet without a capacitor; and unlike the trapezoidal
//! rule it does not ring when an inductor's current reaches zero.

use super::circuit::RectifierCircuit;
use super::measures::Measures;
use super::mesh::{ALPHA, Mesh, Window};
use super::network::Network;
use super::stage::Stage;

/// What must be the same for every period that is walked.
#[derive(Clone, Copy, Debug)]
pub(super) struct Drive<'a> {
    pub(super) net: &'a Network,
    pub(super) mesh: &'a Mesh,
    /// E.m.f. of the secondary (of one half if centre-tapped), V r.m.s.
    pub(super) emf_v: f64,
    /// Mains period, s.
    pub(super) period_s: f64,
    /// Whether the mesh is half a period, and the other half repeats it with the halves exchanged.
    pub(super) half: bool,
}

/// Where in the period no answer was found, in degrees.
#[derive(Clone, Copy, Debug)]
pub(super) struct Stuck {
    pub(super) at_deg: f64,
}

/// The state at the end of the walk, how it answers to the start, and what was seen on the way.
#[derive(Clone, Debug)]
pub(super) struct Walk {
    pub(super) end: Vec<f64>,
    /// ∂end/∂start by rows.
    pub(super) tangent: Vec<f64>,
    pub(super) measures: Measures,
    /// Where a diode conducts.
    pub(super) conducts: Vec<Window>,
    /// Where both paths do, as while the current changes over from one to the other.
    pub(super) overlaps: Vec<Window>,
}

/// Room for the walk's stages and tangents.
#[derive(Clone, Debug)]
pub(super) struct Walker {
    stage: Stage,
    first: Vec<f64>,
    base: Vec<f64>,
    before: Vec<f64>,
    /// Node voltages at the ends of the last steps.
    behind: Vec<f64>,
    ahead: Vec<f64>,
    d_first: Vec<f64>,
    d_base: Vec<f64>,
}

impl Walker {
    pub(super) fn new(net: &Network, volts: f64) -> Walker {
        let (m, mm) = (net.states, net.states * net.states);
        Walker {
            stage: Stage::new(net, volts),
            first: vec![0.0; m],
            base: vec![0.0; m],
            before: vec![0.0; m],
            behind: vec![0.0; net.nodes.len()],
            ahead: vec![0.0; net.nodes.len()],
            d_first: vec![0.0; mm],
            d_base: vec![0.0; mm],
        }
    }

    /// Walks through the period from `start`.
    pub(super) fn walk(&mut self, drive: &Drive<'_>, start: &[f64]) -> Result<Walk, Stuck> {
        // y₁ = y + αh·f₁ and y₂ = y + (1 − α)h·f₁ + αh·f₂, so that y₂'s base is y + ((1 − α)/α)·(y₁ − y).
        const FORWARD: f64 = (1.0 - ALPHA) / ALPHA;
        let net = drive.net;
        let m = net.states;
        let mut y = start.to_vec();
        let mut tangent = vec![0.0; m * m];
        for i in 0..m {
            tangent[i * m + i] = 1.0;
        }
        let mut measures = Measures::new(net);
        let (mut conducts, mut overlaps) = (Windows::default(), Windows::default());
        let span = if drive.half { 0.5 } else { 1.0 };
        let mut last_a = 0.0;
        for step in &drive.mesh.steps {
            let a = ALPHA * step.length * drive.period_s;
            let stuck = Stuck { at_deg: 360.0 * step.start };
            let emf = step.wave.map(|wave| wave * drive.emf_v);
            let weight = step.length / span;

            // The node voltages go on as they went in the last step, then as they went in the first stage.
            self.ahead.copy_from_slice(&self.stage.v);
            if last_a > 0.0 {
                self.stage.guess_along(&self.behind, 1.0 + ALPHA * a / last_a);
            }
            self.behind.copy_from_slice(&self.ahead);
            last_a = a;
            self.stage.solve(net, emf[0], a, &y, &mut self.first).ok_or(stuck)?;
            self.stage.carry(net, &tangent, &mut self.d_first);
            measures.add(net, &self.stage, emf[0], weight * (1.0 - ALPHA));
            let first = self.stage.conducting();

            for ((base, &first), &y) in self.base.iter_mut().zip(&self.first).zip(&y) {
                *base = y + FORWARD * (first - y);
            }
            for ((base, &first), &d) in self.d_base.iter_mut().zip(&self.d_first).zip(&tangent) {
                *base = d + FORWARD * (first - d);
            }
            self.before.copy_from_slice(&y);
            self.stage.guess_along(&self.behind, 1.0 / ALPHA);
            self.stage.solve(net, emf[1], a, &self.base, &mut y).ok_or(stuck)?;
            self.stage.carry(net, &self.d_base, &mut tangent);
            measures.add(net, &self.stage, emf[1], weight * ALPHA);
            measures.look(net, &self.stage, &y, emf[1], &self.before, step.length * drive.period_s);
            let paths = first.max(self.stage.conducting());
            conducts.note(paths > 0, step.start, step.length);
            overlaps.note(paths > 1, step.start, step.length);
        }
        if drive.half {
            exchange_halves(net, &mut y, 1);
            exchange_halves(net, &mut tangent, m);
        }
        Ok(Walk { end: y, tangent, measures, conducts: conducts.all, overlaps: overlaps.all })
    }
}

/// The second half-period seen as the first: the winding's current turned round, or the halves' exchanged.
fn exchange_halves(net: &Network, rows: &mut [f64], columns: usize) {
    let mut swap = |state: usize| {
        for c in 0..columns {
            rows.swap(state * columns + c, (state + 1) * columns + c);
        }
    };
    if let Some(pair) = net.pair {
        swap(pair.state);
    }
    match (net.leak_state, net.wiring) {
        (Some(at), RectifierCircuit::FullWave) => swap(at),
        (Some(at), _) => rows[at * columns..(at + 1) * columns].iter_mut().for_each(|x| *x = -*x),
        (None, _) => {}
    }
}

/// Collects the parts of the period in which something holds.
#[derive(Default)]
struct Windows {
    all: Vec<Window>,
    open: bool,
}

impl Windows {
    fn note(&mut self, holds: bool, start: f64, length: f64) {
        match (holds, self.open, self.all.last_mut()) {
            (true, true, Some(last)) => last.1 = start + length,
            (true, ..) => self.all.push((start, start + length)),
            (false, ..) => {}
        }
        self.open = holds;
    }
}
