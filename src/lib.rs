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
//! | [`dropper`] | what brings a rail down: parts, heat, and the changed supply solved again | yes |
//! | [`config`] | the TOML file into checked types | yes |
//! | [`watch`] | one site's live state: readings in, decided alarms and notices out | yes |
//! | [`report`] | one way to say each result, as text and as JSON | yes |
//! | [`clock`] | the only place that reads a clock | no |
//! | [`store`] | the record: SQLite, blocks of readings, intervals, alarms, outbox, requests | no |
//! | [`logger`] | ports, the line format, the simulated logger | no |
//! | [`notice`] | delivers notices to receivers | no |
//! | [`daemon`] | starts the tasks and the walk, joins them, stops them | no |
//! | [`cli`] | one file a command | no |

pub mod alarm;
pub mod cli;
pub mod clock;
pub mod config;
pub mod daemon;
pub mod dropper;
pub mod logger;
pub mod mains;
pub mod notice;
pub mod quantity;
pub mod reading;
pub mod report;
pub mod store;
pub mod supply;
pub mod watch;
