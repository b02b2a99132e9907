//! The amplifier's supply: from mains at the socket to every rail.
//!
//! Others ask a [`Projector`] for the rail at a node and loading; what stands behind it (one measured pair, the
//! solved circuit, a fit to recorded pairs) is this room's affair. Pure: no clock, no file, no socket.

mod circuit;
mod curve;
mod describe;
mod device;
mod discharge;
mod doubt;
#[cfg(test)]
mod exact;
mod findings;
pub mod fit;
mod measures;
mod mesh;
mod monotone;
mod network;
mod options;
mod paths;
mod period;
mod projection;
#[cfg(test)]
mod published;
mod rest;
mod shooting;
mod solver;
mod stage;
mod state;
mod steady;
mod tangent;
#[cfg(test)]
mod test_circuits;
mod wave;

pub use circuit::{
    Capacitor, Circuit, Device, Doubtful, Dropper, Heater, Load, Loading, MainsWave, RectifierCircuit,
    Section, SeriesPart, Transformer, Winding,
};
pub use curve::{Measured, RailCurve, SolvedCurve};
pub use discharge::{Discharge, SAFE_V, discharge};
pub use findings::{CORE_LIMIT, Finding, RectifierSheet, circuit_findings, core_ratio, rectifier_findings};
pub use options::{SolveError, SolveOptions, Warm};
pub use projection::Grid;
pub use solver::Solver;
pub use state::{DropperState, NodeState, PowerBalance, SteadyState, Work};
pub use steady::{steady_state, sweep};

use crate::quantity::Uncertain;

/// Where a projection comes from, best last.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, serde::Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Basis {
    /// One measured pair of rail and mains, in proportion.
    MeasuredPair,
    /// The supply's circuit, solved.
    Model,
    /// The circuit with its weak parameters fitted to recorded pairs.
    Fit,
}

/// One amplifier's rails: a curve for each node and loading that is known. What isn't known is absent, never copied
/// from another loading.
#[derive(Clone, Debug)]
pub struct Projector {
    basis: Basis,
    curves: Vec<NodeCurve>,
}

/// A rail curve and what it is of.
#[derive(Clone, Debug)]
pub struct NodeCurve {
    /// The node's name.
    pub node: String,
    /// The loading that it holds for.
    pub loading: Loading,
    /// Mains → rail.
    pub curve: RailCurve,
}

impl Projector {
    /// A projector from curves that were made elsewhere in this room.
    pub fn new(basis: Basis, curves: Vec<NodeCurve>) -> Self {
        Projector { basis, curves }
    }

    /// The short way: one pair, one node, one loading.
    pub fn from_measured(node: &str, loading: Loading, pair: Measured) -> Self {
        let curve = RailCurve::Proportional(pair);
        Projector::new(Basis::MeasuredPair, vec![NodeCurve { node: node.to_owned(), loading, curve }])
    }

    /// Where its figures come from.
    pub fn basis(&self) -> Basis {
        self.basis
    }

    /// Every curve it holds.
    pub fn curves(&self) -> &[NodeCurve] {
        &self.curves
    }

    /// The curve of `node` at `loading`, if that is known.
    pub fn curve(&self, node: &str, loading: Loading) -> Option<&RailCurve> {
        self.curves.iter().find(|c| c.node == node && c.loading == loading).map(|c| &c.curve)
    }

    /// The rail at `node` under `loading` for this mains, or `None` where that loading is unknown.
    pub fn project(&self, node: &str, loading: Loading, mains: Uncertain) -> Option<Uncertain> {
        Some(self.curve(node, loading)?.project(mains))
    }
}
