//! Loggers and channels of the config.

use std::path::PathBuf;
use std::time::Duration;

use super::site::{Channel, LoggerSettings, RailOf};
use super::table::{Bounds, Keys, Table};
use crate::reading::ChannelQuantity;

/// Something read from a table, and the table, whose places later complaints need.
pub(super) struct Read<'a, T> {
    pub(super) table: Table<'a>,
    /// `None` once a complaint has been made about it.
    pub(super) value: Option<T>,
}

const LOGGER: Keys = &[
    ("name", "\"bench\""),
    ("port", "\"/dev/serial/by-id/usb-mains-logger\""),
    ("baud", "115200"),
    ("line", "\"tide\""),
];

const CHANNEL: Keys = &[
    ("name", "\"mains\""),
    ("logger", "\"bench\""),
    ("quantity", "\"mains_rms\""),
    ("sample_period_ms", "1000"),
    ("gain", "1.0"),
    ("offset_v", "0.0"),
    ("accuracy_pct", "0.5"),
    ("accuracy_v", "0.2"),
    ("amplifier", "\"hall\""),
    ("node", "\"reservoir\""),
    ("was", "\"the old name\""),
];

/// Every `[[logger]]`, its channels still to come.
pub(super) fn read_loggers<'a>(root: Table<'a>) -> Vec<Read<'a, LoggerSettings>> {
    let tables = root.tables("logger", "[[logger]]", LOGGER);
    let single = tables.len() == 1;
    tables.into_iter().map(|table| Read { table, value: read_logger(table, single) }).collect()
}

fn read_logger(table: Table<'_>, single: bool) -> Option<LoggerSettings> {
    let name = if single && !table.key("name").is_present() {
        Some("logger".to_owned())
    } else {
        table.need("name").name(false).map(|name| name.value)
    };
    let port = table.need("port");
    let port = port.text().and_then(|path| match path.value.as_str() {
        "auto" => port.refuse("expected the port itself; `railtide ports` lists those that are there"),
        path => Some(PathBuf::from(path)),
    });
    let baud = table.key("baud");
    let baud = if baud.is_present() { baud.whole(50, 4_000_000) } else { Some(115_200) };
    table.key("line").word(&[("tide", ())]);
    Some(LoggerSettings { name: name?, port: port?, baud: baud?, channels: Vec::new() })
}

/// Every `[[channel]]`.
pub(super) fn read_channels<'a>(root: Table<'a>) -> Vec<Read<'a, Channel>> {
    let tables = root.tables("channel", "[[channel]]", CHANNEL);
    if let Some(one_too_many) = tables.get(MOST_CHANNELS) {
        let says = format!("expected at most {MOST_CHANNELS} channels, the most that the record can number");
        one_too_many.notes().complain(one_too_many.header(), says);
    }
    tables.into_iter().map(|table| Read { table, value: read_channel(table) }).collect()
}

/// Channel numbers of the record run from 1 to 255.
const MOST_CHANNELS: usize = 255;

fn read_channel(table: Table<'_>) -> Option<Channel> {
    let name = table.need("name").name(true);
    let was = table.key("was").name(true);
    let quantities = [ChannelQuantity::MainsRms, ChannelQuantity::Rail].map(|q| (q.word(), q));
    let quantity = table.need("quantity").word(&quantities);
    let sample_period_ms = table.key("sample_period_ms").whole(1, 3_600_000).unwrap_or(1000);
    let gain = table.key("gain").number(Bounds::Above0To(1e6)).unwrap_or(1.0);
    let offset_v = table.key("offset_v").number(Bounds::Within(-1e4, 1e4)).unwrap_or(0.0);
    let accuracy_pct = table.key("accuracy_pct").number(Bounds::Within(0.0, 50.0)).unwrap_or(0.5);
    let accuracy_v = table.key("accuracy_v").number(Bounds::Within(0.0, 100.0)).unwrap_or(0.2);
    let rail = match quantity {
        Some(ChannelQuantity::Rail) => {
            let amplifier = table.need("amplifier").name(false);
            let node = table.need("node").name(false);
            amplifier
                .zip(node)
                .map(|(amplifier, node)| Some(RailOf { amplifier: amplifier.value, node: node.value }))
        }
        Some(ChannelQuantity::MainsRms) => {
            table.refuse(&["amplifier", "node"], "a mains channel has none; is this quantity = \"rail\"?");
            Some(None)
        }
        None => None,
    };
    Some(Channel {
        name: name?.value,
        was: was.map(|name| name.value),
        quantity: quantity?,
        sample_period: Duration::from_millis(sample_period_ms.into()),
        gain,
        offset_v,
        accuracy_pct,
        accuracy_v,
        rail: rail?,
    })
}

/// The loggers, each with the channels that name it; a single logger has them all.
pub(super) fn with_channels(
    loggers: Vec<Read<'_, LoggerSettings>>,
    channels: Vec<Read<'_, Channel>>,
) -> Option<Vec<LoggerSettings>> {
    let mut loggers: Vec<_> = loggers.into_iter().map(|read| read.value).collect::<Option<_>>()?;
    for Read { table, value } in channels {
        let owner = match table.key("logger").peek() {
            Some(name) => loggers.iter_mut().find(|logger| logger.name == name),
            None => loggers.first_mut(),
        };
        owner?.channels.push(value?);
    }
    Some(loggers)
}
