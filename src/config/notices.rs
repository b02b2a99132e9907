//! Overrides of conditions, and receivers of notices, of the config.

use std::path::Path;
use std::time::Duration;

use super::names::complain_of_doubles;
use super::nearest::nearest;
use super::secret::SecretSource;
use super::site::{AlarmOverride, Receiver, Route};
use super::table::{Bounds, Keys, Table};
use crate::alarm::Priority;

const ALARM: Keys = &[
    ("condition", "\"rail-high\""),
    ("on_delay", "\"10 s\""),
    ("off_delay", "\"60 s\""),
    ("deadband_v", "4"),
    ("priority", "\"medium\""),
    ("enabled", "false"),
];

const RECEIVER: Keys = &[
    ("name", "\"phone\""),
    ("webhook", "\"https://notices.example/hall\""),
    ("token_file", "\"webhook.token\""),
    ("token_env", "\"RAILTIDE_TOKEN\""),
    ("min_priority", "\"medium\""),
];

/// Longest delay of an alarm: a condition that takes longer is a matter for the week's report.
const LONGEST_DELAY: Duration = Duration::from_secs(24 * 3600);

fn priorities() -> [(&'static str, Priority); 3] {
    [Priority::High, Priority::Medium, Priority::Low].map(|p| (p.word(), p))
}

/// Every `[[alarm]]`, whose condition must be one of `conditions`.
pub(super) fn read_alarms(root: Table<'_>, conditions: &[&str]) -> Option<Vec<AlarmOverride>> {
    let tables = root.tables("alarm", "[[alarm]]", ALARM);
    complain_of_doubles(&tables, "condition", "[[alarm]]");
    tables.into_iter().map(|table| read_alarm(table, conditions)).collect::<Vec<_>>().into_iter().collect()
}

fn read_alarm(table: Table<'_>, conditions: &[&str]) -> Option<AlarmOverride> {
    let entry = table.need("condition");
    let condition = entry.text().and_then(|name| {
        if conditions.contains(&name.value.as_str()) {
            return Some(name.value);
        }
        match nearest(&name.value, conditions.iter().copied()) {
            Some(near) => entry.refuse(&format!("no such condition; did you mean \"{near}\"?")),
            None => entry.refuse(&format!("no such condition; there are {}", conditions.join(", "))),
        }
    });
    Some(AlarmOverride {
        on_delay: table.key("on_delay").duration(Duration::ZERO, LONGEST_DELAY),
        off_delay: table.key("off_delay").duration(Duration::ZERO, LONGEST_DELAY),
        deadband: table.key("deadband_v").number(Bounds::Within(0.0, 1000.0)),
        priority: table.key("priority").word(&priorities()),
        enabled: table.key("enabled").flag().unwrap_or(true),
        condition: condition?,
    })
}

/// Every `[[receiver]]`; token files are meant from `folder`.
pub(super) fn read_receivers(root: Table<'_>, folder: &Path) -> Option<Vec<Receiver>> {
    let tables = root.tables("receiver", "[[receiver]]", RECEIVER);
    complain_of_doubles(&tables, "name", "[[receiver]]");
    tables.into_iter().map(|table| read_receiver(table, folder)).collect::<Vec<_>>().into_iter().collect()
}

fn read_receiver(table: Table<'_>, folder: &Path) -> Option<Receiver> {
    let name = table.need("name").name(true);
    let url = read_url(table);
    let token = read_token(table, folder);
    let min_priority = table.key("min_priority").word(&priorities()).unwrap_or(Priority::Low);
    if let (Some(url), Some(_)) = (&url, &token)
        && url.starts_with("http://")
        && !is_loopback(url)
    {
        let why = "the token goes over the network in the clear; https:// would hide it";
        table.notes().warn_of(table.key("webhook").span(), "webhook", why);
    }
    Some(Receiver { name: name?.value, route: Route::Webhook { url: url?, token }, min_priority })
}

/// A web address with a host and without a password in it. It is never quoted: many a webhook's address is a secret
/// itself.
fn read_url(table: Table<'_>) -> Option<String> {
    let entry = table.need("webhook");
    let url = entry.text()?.value;
    let host = host(&url).filter(|host| !host.is_empty() && !url.contains(char::is_whitespace));
    let says = match host {
        None => "expected an address such as \"https://notices.example/hall\"",
        Some(host) if host.contains('@') => {
            "a user and password never stand in this file; use token_file or token_env"
        }
        Some(_) => return Some(url),
    };
    table.notes().complain_of(entry.span(), "webhook", says);
    None
}

/// What stands between `http://` or `https://` and the path.
fn host(url: &str) -> Option<&str> {
    let rest = url.strip_prefix("https://").or_else(|| url.strip_prefix("http://"))?;
    rest.split(['/', '?', '#']).next()
}

fn is_loopback(url: &str) -> bool {
    host(url).is_some_and(|host| {
        ["127.0.0.1", "localhost", "[::1]"]
            .iter()
            .any(|own| host.strip_prefix(own).is_some_and(|port| port.is_empty() || port.starts_with(':')))
    })
}

fn read_token(table: Table<'_>, folder: &Path) -> Option<SecretSource> {
    if table.key("token_file").is_present() {
        table.refuse(&["token_env"], "there is a token_file already; give one of the two");
        return Some(SecretSource::File(folder.join(table.key("token_file").text()?.value)));
    }
    let entry = table.key("token_env");
    let name = entry.text()?.value;
    let fits = |c: char| c.is_ascii_alphanumeric() || c == '_';
    if name.chars().all(fits) && !name.starts_with(|c: char| c.is_ascii_digit()) {
        Some(SecretSource::Env(name))
    } else {
        // Not quoted: who misunderstands the key writes the token itself here.
        let says = "expected the name of an environment variable, such as token_env = \"RAILTIDE_TOKEN\"";
        table.notes().complain_of(entry.span(), "token_env", says);
        None
    }
}
