//! railtide watches the household mains through an isolated voltage logger, projects the rails of valve amplifiers
//! from it, keeps the record, and warns before a rail passes its safe limit.
//!
//! It warns; it is no protective device.
//!
//! # Layout
//!
//! ```text
//! serial port ─ logger ─▶ reading ─▶ watch (projects, judges) ─▶ store ─▶ notice
//!                                      │                          │
//!                                      └▶ latest, for the page    └▶ profile, week, dropper, export: they read the store
//! ```
//!
//! A reading walks this once, in this order, and never back; [`daemon`] is where that line can be read in one screen.
//! Rooms, from the ground up; an import goes up this list, never down. Pure rooms know no clock, no file, no socket.
//!
//! | room | holds | pure |
//! | --- | --- | --- |
//! | [`quantity`], [`reading`] | volts, instants, uncertain figures; channels, readings, quality | yes |
//! | [`supply`] | from mains to every rail | yes |
//! | [`mains`] | what readings say about the mains: intervals, events, rules, the day, the tide table | yes |
//! | [`alarm`] | the alarm's state machine and the table of conditions | yes |
//! | [`config`] | the TOML file into checked types | yes |
//! | [`clock`] | the only place that reads a clock | no |

pub mod alarm;
pub mod clock;
pub mod config;
pub mod logger;
pub mod mains;
pub mod quantity;
pub mod reading;
pub mod supply;
