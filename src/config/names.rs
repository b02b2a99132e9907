//! Names in a config: each given once, each referring to something.

use std::collections::HashMap;

use super::nearest::nearest;
use super::table::{Entry, Table};

/// Complains wherever a later table has the same text under `key` as an earlier one.
pub(super) fn complain_of_doubles(tables: &[Table<'_>], key: &'static str, name: &str) {
    let mut seen = HashMap::new();
    for table in tables {
        let entry = table.key(key);
        let Some(text) = entry.peek() else { continue };
        match seen.get(text) {
            Some(first) => {
                let line = table.notes().line(*first);
                entry
                    .refuse::<()>(&format!("the {name} of line {line} has the same; expected another {key}"));
            }
            None => {
                seen.insert(text, entry.span());
            }
        }
    }
}

/// Whether `name` is one of `known`; if it isn't, complains `why` at `entry`, with what there is.
pub(super) fn expect_known<'k>(
    entry: Entry<'_>,
    name: &str,
    why: &str,
    known: impl Iterator<Item = &'k str>,
) -> bool {
    let mut known: Vec<_> = known.collect();
    if known.contains(&name) {
        return true;
    }
    known.sort_unstable();
    known.dedup();
    let says = match nearest(name, known.iter().copied()) {
        Some(near) => format!("{why}; did you mean \"{near}\"?"),
        None if known.is_empty() => why.to_owned(),
        None => format!("{why}; there are {}", known.join(", ")),
    };
    entry.refuse::<()>(&says);
    false
}
