//! The supply rules that the site is judged by: `[site] supply_rules` names some of the table, `[[rule]]` states an
//! owner's own in the form of `config/supply-rules.toml`.

use super::nearest::nearest;
use super::table::Table;
use crate::mains::{SupplyRule, parse_rules};

/// The owner's own rules.
pub(super) fn read_own(root: Table<'_>) -> Vec<SupplyRule> {
    let notes = root.notes();
    // Their form is the rules' own affair: they get the text of their part again. A file that is no TOML has been
    // complained about already.
    let Some(rules) = notes.text().parse::<toml::Table>().ok().and_then(|mut all| all.remove("rule")) else {
        return Vec::new();
    };
    let own = toml::Table::from_iter([("rule".to_owned(), rules)]);
    match parse_rules(&own.to_string()) {
        Ok(rules) => rules,
        Err(error) => {
            notes.complain(root.key("rule").span(), format!("a [[rule]] can't be read: {}", error.message()));
            Vec::new()
        }
    }
}

/// The rules that `supply_rules` names, one or a list; every one of the owner's own where it's silent, or else the one
/// that is usual.
pub(super) fn read_chosen(site: Option<Table<'_>>, own: Vec<SupplyRule>) -> Vec<SupplyRule> {
    let entry = site.map(|site| site.key("supply_rules")).filter(|entry| entry.is_present());
    let Some(entry) = entry else {
        return if own.is_empty() {
            SupplyRule::named("EN 50160").cloned().into_iter().collect()
        } else {
            own
        };
    };
    let names = match entry.peek() {
        Some(one) => vec![one.to_owned()],
        None => entry.texts().unwrap_or_default().into_iter().map(|text| text.value).collect(),
    };
    let known = || own.iter().chain(SupplyRule::table());
    let mut chosen = Vec::new();
    for name in names {
        match known().find(|rule| rule.name.eq_ignore_ascii_case(name.trim())) {
            Some(rule) => chosen.push(rule.clone()),
            None => {
                let near = nearest(&name, known().map(|rule| rule.name.as_str()));
                let all: Vec<_> = known().map(|rule| rule.name.as_str()).collect();
                entry.refuse::<()>(&match near {
                    Some(near) => format!("no rule is called \"{name}\"; did you mean \"{near}\"?"),
                    None => format!("no rule is called \"{name}\"; there are {}", all.join(", ")),
                });
            }
        }
    }
    chosen
}
