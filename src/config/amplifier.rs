//! Amplifiers of the config: name, use, the short way of stating a supply, limits, service log. The full way is in
//! `circuit`.

use std::collections::HashMap;

use super::circuit::{SiteMains, read_supply};
use super::complaint::At;
use super::full_way::is_full_way;
use super::site::{Amplifier, DayWindow, Limit, MeasuredSupply, OutputStage, Rating, ServiceEvent};
use super::table::{Bounds, HIGHEST_RAIL_V, Keys, Table};
use super::transformer::MAINS_V;
use super::valves::{OutputValve, output_valve};
use crate::supply::{Loading, Measured};

const AMPLIFIER: Keys = &[
    ("name", "\"hall\""),
    ("in_use", "[\"17:00-24:00\"]"),
    ("measured", "[amplifier.measured]"),
    ("transformer", "[amplifier.transformer]"),
    ("rectifier", "[amplifier.rectifier]"),
    ("filter", "[[amplifier.filter]]"),
    ("output", "[amplifier.output]"),
    ("load", "[[amplifier.load]]"),
    ("heater", "[amplifier.heater]"),
    ("dropper", "[amplifier.dropper]"),
    ("limit", "[[amplifier.limit]]"),
    ("event", "[[amplifier.event]]"),
];

const MEASURED: Keys = &[
    ("mains_v", "220"),
    ("rail_v", "452"),
    ("node", "\"reservoir\""),
    ("loading", "\"idle\""),
    ("meter_pct", "1.0"),
];

const LIMIT: Keys = &[
    ("node", "\"reservoir\""),
    ("max_v", "480"),
    ("min_v", "430"),
    ("rating", "\"absolute\""),
    ("loading", "\"idle\""),
    ("why", "\"anode supply limit\""),
];

const EVENT: Keys = &[("on", "\"2026-10-02\""), ("what", "\"output valves changed, bias reset\"")];

/// What could be read of one `[[amplifier]]`.
pub(super) struct ReadAmplifier<'a> {
    pub(super) table: Table<'a>,
    /// Tables whose `node` must be one that is fed or measured.
    pub(super) on_nodes: Vec<Table<'a>>,
    /// Nodes that its supply feeds; `None` where a mistake leaves them unknown.
    pub(super) fed: Option<Vec<String>>,
    /// Whether its supply is stated the full way, so that it has no other nodes.
    pub(super) full_way: bool,
    /// `None` once a complaint has been made about it.
    pub(super) amplifier: Option<Amplifier>,
}

/// Every `[[amplifier]]`.
pub(super) fn read_amplifiers<'a>(root: Table<'a>, mains: &SiteMains) -> Vec<ReadAmplifier<'a>> {
    let tables = root.tables("amplifier", "[[amplifier]]", AMPLIFIER);
    tables.into_iter().map(|table| read_amplifier(table, mains)).collect()
}

fn read_amplifier<'a>(table: Table<'a>, mains: &SiteMains) -> ReadAmplifier<'a> {
    let name = table.need("name").name(false);
    let in_use = table.key("in_use").is_present().then(|| read_in_use(table));
    let measured_table = table.table("measured", "[amplifier.measured]", MEASURED);
    let measured = measured_table.map(read_measured);
    let supply = read_supply(table, mains, measured.as_ref().and_then(Option::as_ref));
    let stage = supply.output.as_ref().and_then(Option::as_ref);
    let limit_tables = table.tables("limit", "[[amplifier.limit]]", LIMIT);
    let limits: Vec<_> = limit_tables.iter().map(|limit| read_limit(*limit, stage)).collect();
    complain_of_double_limits(&limit_tables);
    let events: Vec<_> =
        table.tables("event", "[[amplifier.event]]", EVENT).into_iter().map(read_event).collect();

    let full_way = is_full_way(table);
    let mut on_nodes = limit_tables;
    let fed = if full_way {
        on_nodes.extend(measured_table);
        supply.nodes
    } else {
        on_nodes.extend(supply.output_table);
        match measured_table {
            Some(measured) => {
                measured.key("node").peek().filter(|node| !node.is_empty()).map(|node| vec![node.to_owned()])
            }
            None => Some(Vec::new()),
        }
    };
    let amplifier = (|| {
        Some(Amplifier {
            name: name?.value,
            in_use: in_use.unwrap_or(Some(Vec::new()))?,
            measured: measured.map_or(Some(None), |read| read.map(Some))?,
            circuit: supply.circuit?,
            output: supply.output?,
            cold: supply.cold?,
            limits: limits.into_iter().collect::<Option<_>>()?,
            events: events.into_iter().collect::<Option<_>>()?,
        })
    })();
    ReadAmplifier { table, on_nodes, fed, full_way, amplifier }
}

fn read_in_use(table: Table<'_>) -> Option<Vec<DayWindow>> {
    let read = |text: &At<String>| {
        let window = parse_window(&text.value);
        if window.is_none() {
            table.notes().complain(text.span, "expected a stretch of the day such as \"17:00-24:00\"");
        }
        window
    };
    table.key("in_use").texts()?.iter().map(read).collect::<Vec<_>>().into_iter().collect()
}

/// `17:00-24:00`; over midnight where it ends before it starts.
fn parse_window(text: &str) -> Option<DayWindow> {
    let minutes = |clock: &str| {
        let (hours, minutes) = clock.trim().split_once(':')?;
        let two_digits = |s: &str| (s.len() == 2).then(|| s.parse::<u16>().ok()).flatten();
        let total = two_digits(hours)? * 60 + two_digits(minutes).filter(|m| *m < 60)?;
        (total <= DAY_MIN).then_some(total)
    };
    let (from, to) = text.split_once('-')?;
    let window = DayWindow { from_min: minutes(from)?, to_min: minutes(to)? };
    (window.from_min < DAY_MIN && window.to_min > 0 && window.from_min != window.to_min).then_some(window)
}

const DAY_MIN: u16 = 24 * 60;

pub(super) fn loadings() -> [(&'static str, Loading); 3] {
    Loading::ALL.map(|loading| (loading.word(), loading))
}

fn read_measured(table: Table<'_>) -> Option<MeasuredSupply> {
    let mains_v = table.need("mains_v").number(MAINS_V);
    let rail_v = table.need("rail_v").number(Bounds::Within(1.0, HIGHEST_RAIL_V));
    let node = table.need("node").name(false);
    let loading = table.key("loading").word(&loadings()).unwrap_or(Loading::Idle);
    let meter_pct = table.key("meter_pct").number(Bounds::Within(0.0, 20.0)).unwrap_or(1.0);
    let pair = Measured { mains_v: mains_v?, rail_v: rail_v?, meter_pct };
    Some(MeasuredSupply { node: node?.value, loading, pair })
}

fn read_limit(table: Table<'_>, stage: Option<&OutputStage>) -> Option<Limit> {
    let node = table.need("node").name(false);
    let entry = table.need("max_v");
    let from_valve = entry.peek() == Some("valve");
    let valve = if from_valve { limiting_valve(table, stage) } else { None };
    let max_v = if from_valve {
        // The sheet's figure is from anode to cathode.
        valve.map(|(row, stage)| row.anode_v + stage.cathode_v)
    } else {
        entry.number(Bounds::Within(1.0, HIGHEST_RAIL_V))
    };
    let min_v = table.key("min_v").number(Bounds::Within(0.0, HIGHEST_RAIL_V));
    if let (Some(max), Some(min)) = (max_v, min_v)
        && min >= max
    {
        table.refuse(&["min_v"], &format!("expected less than max_v, {max} V"));
    }
    let ratings = [
        ("absolute", Rating::Absolute),
        ("design-centre", Rating::DesignCentre),
        ("design-maximum", Rating::DesignMaximum),
    ];
    let usual_rating = valve.map_or(Rating::Absolute, |(row, _)| row.rating);
    let rating = table.key("rating").word(&ratings).unwrap_or(usual_rating);
    let loading = table.key("loading").word(&loadings()).unwrap_or(Loading::Idle);
    let usual_why = valve.map(|(row, _)| format!("highest anode voltage by the sheet of {}", row.type_name));
    let why = table.key("why").text().map(|why| why.value).or(usual_why).unwrap_or_default();
    Some(Limit { node: node?.value, max_v: max_v?, min_v, rating, loading, why })
}

/// Complains about a second limit on one node at one loading: the two would be one alarm, and the stricter one is all
/// that counts. (One at another loading is an alarm of its own.)
fn complain_of_double_limits(tables: &[Table<'_>]) {
    let usual = Loading::Idle.word();
    let mut seen = HashMap::new();
    for table in tables {
        let (entry, loading) = (table.key("node"), table.key("loading").peek().unwrap_or(usual));
        let Some(node) = entry.peek() else { continue };
        match seen.get(&(node, loading)) {
            Some(first) => {
                let line = table.notes().line(*first);
                entry.refuse::<()>(&format!(
                    "the limit of line {line} is on the same node at loading {loading}; expected another node or \
                     loading, or only the stricter of the two"
                ));
            }
            None => {
                seen.insert((node, loading), entry.span());
            }
        }
    }
}

/// The output valve that `max_v = "valve"` means, and the stage that it works in.
fn limiting_valve<'s>(
    table: Table<'_>,
    stage: Option<&'s OutputStage>,
) -> Option<(&'static OutputValve, &'s OutputStage)> {
    let entry = table.key("max_v");
    let Some((row, stage)) =
        stage.and_then(|stage| Some((output_valve(stage.type_name.as_deref()?)?, stage)))
    else {
        return entry.refuse(
            "expected an [amplifier.output] with a type of the table, such as type = \"KT66\"; or the limit in volts",
        );
    };
    if table.key("node").peek().is_some_and(|node| node != stage.node) {
        return entry
            .refuse(&format!("expected volts: the output valves' anodes are fed from {}", stage.node));
    }
    Some((row, stage))
}

fn read_event(table: Table<'_>) -> Option<ServiceEvent> {
    let on = table.need("on").day();
    let what = table.need("what").text();
    Some(ServiceEvent { on: on?, what: what?.value })
}
