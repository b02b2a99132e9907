//! The simulated logger: a made-up [`Hall`] measured by a logger on a real pseudo-terminal, with faults on request.
//! For the demonstration, for trying a configuration without hardware, and for tests.

mod dice;
mod hall;
mod lines;
#[cfg(unix)]
mod logger;
#[cfg(unix)]
mod pty;

pub use hall::{Hall, HallState};
pub use lines::{Fault, UnknownFault};
#[cfg(unix)]
pub use logger::{LiveHall, SimulatedLogger};
