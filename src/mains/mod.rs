//! What readings say about the mains: 10-minute intervals, percentiles, events and excursions, supply rules and their
//! verdicts, the household's day, and the tide table.
//!
//! Pure: slices and iterators in, figures out; no clock, no file, no socket. Readings become [`Interval`]s once
//! ([`Aggregator`]); everything about days and weeks works on these, only events and excursions look at the readings.
//! Nothing here claims a class of IEC 61000-4-30: a reading a second is no half-cycle value.

mod civil;
mod events;
mod histogram;
mod interval;
mod percentile;
mod profile;
mod rules;
mod tide;
mod verdict;

pub use civil::{CivilDay, DayKind, civil_days, start_of};
pub use events::{Event, EventKind, EventLimits, Sample, Spell, events, excursions};
pub use histogram::Histogram;
pub use interval::{Aggregator, INTERVAL, Interval, WHOLE_FROM, intervals, intervals_of};
pub use percentile::Distribution;
pub use profile::{DayAbove, DayProfile, Slot, above_by_day, by_time_of_day, day_profile, highest};
pub use rules::{Bound, Clause, Flagged, Period, RuleError, Statistic, Status, SupplyRule, parse_rules};
pub use tide::{FEWEST_ROWS, HISTORY, NoForecast, TideStep, TideTable, Turn, TurnKind, forecast, turns};
pub use verdict::{ClauseVerdict, Verdict};
