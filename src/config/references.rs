//! What holds between the tables of a config: names that occur once, and names that refer to something.

use std::collections::HashMap;

use super::amplifier::ReadAmplifier;
use super::logger::Read;
use super::names::{complain_of_doubles, expect_known};
use super::site::{Channel, LoggerSettings};
use super::table::Table;

/// Complains about every name that is given twice and every one that names nothing.
pub(super) fn check(
    loggers: &[Read<'_, LoggerSettings>],
    channels: &[Read<'_, Channel>],
    amplifiers: &[ReadAmplifier<'_>],
) {
    let logger_tables: Vec<_> = loggers.iter().map(|read| read.table).collect();
    let channel_tables: Vec<_> = channels.iter().map(|read| read.table).collect();
    let amplifier_tables: Vec<_> = amplifiers.iter().map(|read| read.table).collect();

    complain_of_doubles(&logger_tables, "name", "[[logger]]");
    complain_of_doubles(&logger_tables, "port", "[[logger]]");
    complain_of_doubles(&channel_tables, "name", "[[channel]]");
    complain_of_doubles(&channel_tables, "was", "[[channel]]");
    complain_of_doubles(&amplifier_tables, "name", "[[amplifier]]");
    check_old_names(&channel_tables);
    check_rails(&channel_tables, amplifiers);
    for table in &channel_tables {
        check_logger(*table, &logger_tables);
    }
    for amplifier in amplifiers {
        check_nodes(amplifier, &channel_tables);
        warn_if_unknowable(amplifier, &channel_tables);
    }
}

/// A channel's old name must not be in use.
fn check_old_names(channels: &[Table<'_>]) {
    for table in channels {
        let was = table.key("was");
        let Some(old) = was.peek() else { continue };
        if let Some(other) = channels.iter().find(|other| other.key("name").peek() == Some(old)) {
            let line = table.notes().line(other.key("name").span());
            was.refuse::<()>(&format!(
                "line {line} still uses that name; expected one that no channel has now"
            ));
        }
    }
}

fn check_logger(channel: Table<'_>, loggers: &[Table<'_>]) {
    let entry = channel.key("logger");
    if loggers.is_empty() {
        channel.missing("its logger", "expected a [[logger]] with a port in the file");
        return;
    }
    match entry.peek() {
        Some(name) => {
            let single = if loggers.len() == 1 { Some("logger") } else { None };
            let names = loggers.iter().filter_map(|logger| logger.key("name").peek().or(single));
            expect_known(entry, name, "no such logger", names);
        }
        None if entry.is_present() => {
            entry.text();
        }
        None if loggers.len() > 1 => {
            channel.need("logger");
        }
        None => {}
    }
}

/// A rail channel names an amplifier and a node that its circuit, if it has one, feeds; and each rail is measured
/// once.
fn check_rails(channels: &[Table<'_>], amplifiers: &[ReadAmplifier<'_>]) {
    let mut seen = HashMap::new();
    for table in channels.iter().filter(|table| table.key("quantity").peek() == Some("rail")) {
        let (amplifier_entry, node_entry) = (table.key("amplifier"), table.key("node"));
        let Some(amplifier) = amplifier_entry.peek() else { continue };
        let names = amplifiers.iter().filter_map(|a| a.table.key("name").peek());
        if !expect_known(amplifier_entry, amplifier, "no such amplifier", names) {
            continue;
        }
        let Some(node) = node_entry.peek() else { continue };
        if let Some(first) = seen.insert((amplifier, node), node_entry.span()) {
            let line = table.notes().line(first);
            node_entry
                .refuse::<()>(&format!("line {line} measures this rail already; expected another node"));
        }
        let owner = amplifiers.iter().find(|a| a.table.key("name").peek() == Some(amplifier));
        if let Some(fed) = owner.filter(|owner| owner.full_way).and_then(|owner| owner.fed.as_ref()) {
            expect_known(node_entry, node, "the supply has no such node", fed.iter().map(String::as_str));
        }
    }
}

/// A limit stands on a node that the supply feeds or, where that isn't stated the full way, a channel measures.
fn check_nodes(amplifier: &ReadAmplifier<'_>, channels: &[Table<'_>]) {
    let Some(fed) = &amplifier.fed else { return };
    let name = amplifier.table.key("name").peek();
    let measured = channels
        .iter()
        .filter(|channel| !amplifier.full_way && name.is_some() && channel.key("amplifier").peek() == name)
        .filter_map(|channel| channel.key("node").peek());
    let known: Vec<_> = fed.iter().map(String::as_str).chain(measured).collect();
    let why = if amplifier.full_way {
        "the supply has no such node"
    } else {
        "nothing feeds or measures such a node"
    };
    for table in &amplifier.on_nodes {
        let entry = table.key("node");
        if let Some(node) = entry.peek() {
            expect_known(entry, node, why, known.iter().copied());
        }
    }
}

/// Warns of an amplifier of whose rails nothing can be told.
fn warn_if_unknowable(amplifier: &ReadAmplifier<'_>, channels: &[Table<'_>]) {
    let table = amplifier.table;
    let measured = channels.iter().any(|channel| channel.key("amplifier").peek() == table.key("name").peek());
    if !measured && !amplifier.full_way && !table.key("measured").is_present() {
        table.notes().warn(
            table.header(),
            "nothing says where its rails stand: it has no rail channel, no [amplifier.measured] and no circuit",
        );
    }
}
