//! The full way of stating a supply, as tables: which there are, before anything is read from them.

use super::filter::{DROPPER, FILTER};
use super::loads::{HEATER, LOAD};
use super::rectifier::RECTIFIER;
use super::table::Table;
use super::transformer::TRANSFORMER;

/// Whether the amplifier states its supply the full way, or means to.
pub(super) fn is_full_way(amplifier: Table<'_>) -> bool {
    amplifier.has_any(&["transformer", "rectifier", "filter"])
}

/// The tables of the full way, opened.
pub(super) struct FullWay<'a> {
    pub(super) transformer: Option<Table<'a>>,
    pub(super) rectifier: Option<Table<'a>>,
    pub(super) filter: Vec<Table<'a>>,
    pub(super) loads: Vec<Table<'a>>,
    pub(super) heater: Option<Table<'a>>,
    pub(super) dropper: Option<Table<'a>>,
}

impl<'a> FullWay<'a> {
    pub(super) fn open(amplifier: Table<'a>) -> Self {
        for needed in ["transformer", "rectifier", "filter"] {
            amplifier.need(needed);
        }
        FullWay {
            transformer: amplifier.table("transformer", "[amplifier.transformer]", TRANSFORMER),
            rectifier: amplifier.table("rectifier", "[amplifier.rectifier]", RECTIFIER),
            filter: amplifier.tables("filter", "[[amplifier.filter]]", FILTER),
            loads: amplifier.tables("load", "[[amplifier.load]]", LOAD),
            heater: amplifier.table("heater", "[amplifier.heater]", HEATER),
            dropper: amplifier.table("dropper", "[amplifier.dropper]", DROPPER),
        }
    }
}
