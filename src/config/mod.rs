//! The config file: TOML into checked types, and every complaint with its line and what would be right.
//!
//! The raw file is a tree of values that know their place in the text (`table`); reading it either gives a [`Site`],
//! which cannot hold a bad value, or [`Complaints`], all mistakes of the file at once. What is possible but unlikely
//! comes as [`Site::warnings`]. Values of one kind of part (rectifiers, output valves) are data in the top-level
//! `config/` folder.
//!
//! Pure: the command line reads the file.

mod amplifier;
mod circuit;
mod complaint;
mod filter;
mod full_way;
mod loads;
mod logger;
mod names;
mod nearest;
mod notices;
mod parse;
mod rectifier;
mod references;
mod secret;
mod site;
mod table;
mod transformer;
mod unlikely;
mod valves;

pub use complaint::{Complaint, Complaints, Place};
pub use parse::Surroundings;
pub use secret::SecretSource;
pub use site::{
    AlarmOverride, Amplifier, Bias, BiasFrom, Channel, ColdStart, DayWindow, Limit, LoggerSettings,
    MeasuredSupply, OutputStage, RailOf, Rating, Receiver, Route, ServiceEvent, Site, Standby, StoreSettings,
};
pub use valves::{OutputValve, Rectifier, output_valve, output_valves, rectifier, rectifiers};
