//! The config file: TOML into checked types, and every complaint with its line and what would be right.

mod site;

pub use site::{
    AlarmOverride, Amplifier, Channel, Limit, LoggerSettings, MeasuredSupply, RailOf, Rating, Receiver,
    Route, SecretSource, Site, StoreSettings,
};
