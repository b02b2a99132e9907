//! The full way of stating a supply: its tables put together into a [`Circuit`].

use super::filter::{read_dropper, read_filter};
use super::full_way::{FullWay, is_full_way};
use super::loads::{OUTPUT, node_index, read_heater, read_load, read_output};
use super::names::expect_known;
use super::rectifier::{is_doubler, read_cold_start, read_rectifier, usual_winding};
use super::site::{ColdStart, MeasuredSupply, OutputStage, Standby};
use super::table::Table;
use super::transformer::read_transformer;
use super::unlikely;
use super::valves::output_valve;
use crate::supply::{Circuit, MainsWave, Winding};

/// What a circuit takes from the site.
pub(super) struct SiteMains {
    pub(super) frequency_hz: f64,
    pub(super) wave: MainsWave,
}

/// What an amplifier says of its supply and output valves. In each `Option<Option<_>>` the outer `None` is a
/// complaint, the inner one that nothing is said.
pub(super) struct ReadSupply<'a> {
    /// The filter's nodes in order; `None` where a mistake leaves them unknown or there is no filter.
    pub(super) nodes: Option<Vec<String>>,
    pub(super) circuit: Option<Option<Circuit>>,
    pub(super) output: Option<Option<OutputStage>>,
    pub(super) output_table: Option<Table<'a>>,
    pub(super) cold: Option<Option<ColdStart>>,
}

/// Reads output valves and, where the supply is stated the full way, its circuit.
pub(super) fn read_supply<'a>(
    amplifier: Table<'a>,
    mains: &SiteMains,
    measured: Option<&MeasuredSupply>,
) -> ReadSupply<'a> {
    let output_table = amplifier.table("output", "[amplifier.output]", OUTPUT);
    let output = match output_table {
        Some(table) => read_output(table, measured).map(Some),
        None => Some(None),
    };
    if !is_full_way(amplifier) {
        let why = "expected the supply the full way with it: [amplifier.transformer], [amplifier.rectifier], \
                   [[amplifier.filter]]";
        amplifier.refuse(&["load", "heater", "dropper"], why);
        let stage = output.map(|output| output.map(|output| output.stage));
        return ReadSupply {
            nodes: None,
            circuit: Some(None),
            output: stage,
            output_table,
            cold: Some(None),
        };
    }

    let tables = FullWay::open(amplifier);
    let usual = tables.rectifier.map_or(Winding::Single, usual_winding);
    let transformer = tables.transformer.and_then(|table| read_transformer(table, mains.frequency_hz, usual));
    let winding = transformer.as_ref().map(|transformer| transformer.winding);
    let rectifier = tables.rectifier.and_then(|table| read_rectifier(table, winding));
    let filter = read_filter(&tables.filter, tables.rectifier.is_some_and(is_doubler));
    let nodes: Option<Vec<_>> =
        tables.filter.iter().map(|table| table.key("node").peek().map(str::to_owned)).collect();
    let feeds = nodes.as_deref();

    let loads: Vec<_> = tables.loads.iter().map(|table| read_load(*table, feeds)).collect();
    let mut loads: Option<Vec<_>> = loads.into_iter().collect();
    if let (Some(table), Some(Some(output))) = (output_table, &output) {
        let node = feeds.and_then(|feeds| node_index(table, &output.stage.node, feeds));
        loads = loads.zip(node).map(|(mut loads, node)| {
            loads.insert(0, output.load(node));
            loads
        });
    }
    let wound_for_v = transformer.as_ref().map(|transformer| transformer.wound_for_v);
    let heater = optional(tables.heater, |table| read_heater(table, wound_for_v));
    let dropper = optional(tables.dropper, |table| read_dropper(table, tables.filter.len()));
    let stage = output.map(|output| output.map(|output| output.stage));
    let cold = tables.rectifier.and_then(|table| {
        let valve =
            stage.as_ref().and_then(Option::as_ref).and_then(|s| output_valve(s.type_name.as_deref()?));
        let device = rectifier.as_ref().map(|rectifier| &rectifier.device);
        let cold = read_cold_start(table, device, valve.map(|valve| valve.warm_up_s))?;
        if let (Standby::After(node), Some(feeds)) = (&cold.standby, feeds) {
            let known = feeds.iter().map(String::as_str);
            expect_known(table.key("standby"), node, "the supply has no such node", known);
        }
        Some(cold)
    });

    let circuit = (|| {
        let rectifier = rectifier?;
        Some(Circuit {
            amplifier: amplifier.key("name").peek()?.to_owned(),
            frequency_hz: mains.frequency_hz,
            wave: mains.wave.clone(),
            transformer: transformer?,
            rectifier: rectifier.circuit,
            device: rectifier.device,
            doubler_f: rectifier.doubler_f,
            filter: filter.filter(|sections| !sections.is_empty())?,
            loads: loads?,
            dropper: dropper?,
            heater: heater?,
        })
    })();
    if let Some(circuit) = &circuit {
        unlikely::warn(circuit, &tables);
    }
    ReadSupply { nodes, circuit: circuit.map(Some), output: stage, output_table, cold: cold.map(Some) }
}

/// Nothing where there is no table, else what it reads to; the outer `None` is a complaint.
fn optional<'a, T>(table: Option<Table<'a>>, read: impl FnOnce(Table<'a>) -> Option<T>) -> Option<Option<T>> {
    table.map_or(Some(None), |table| read(table).map(Some))
}
