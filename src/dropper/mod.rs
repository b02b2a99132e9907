//! What brings a rail down: preferred values, zeners, the MOSFET and its gate, bucking windings, heat, and the supply
//! solved again with each way of doing it.
//!
//! Pure: no clock, no file, no socket.

mod bucking;
mod change;
mod e_series;
mod heat;
mod mosfet;
mod outcome;
mod propose;
#[cfg(test)]
mod tests;
mod zener;

pub use bucking::{Bucking, STANDARD_SECONDARIES_V};
pub use change::{Change, Unfit, Way};
pub use e_series::{ESeries, Fit};
pub use heat::{HeatPath, PULSED_TYPICAL, pulsed_resistor_w, rated_power_w};
pub use mosfet::{GateBias, Square, VGS_UNKNOWN_V};
pub use outcome::{Bound, Outcome};
pub use propose::{Proposal, Task};
pub use zener::{Zener, ZenerString};
