//! What the steady state of a supply is: the figures of one mains voltage and one loading.

use super::circuit::Loading;
use super::options::Warm;

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
    /// Residual at the fixed point, relative: see [`super::SolveOptions::residual`].
    pub residual: f64,
    /// Work it took.
    pub work: Work,
    pub(super) warm: Option<Warm>,
}

impl SteadyState {
    /// The state, to start a neighbouring solution from; `None` where nothing moves.
    pub fn warm(&self) -> Option<&Warm> {
        self.warm.as_ref()
    }
}
