//! A typed reader over the raw TOML tree: each value that is asked for is either what was expected, or a complaint
//! with its place and an example, and reading goes on.

use std::time::Duration;

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::complaint::{At, Notes, Span};
use super::nearest::nearest;

/// The keys that a table knows, each with a value that would be right, as written in TOML.
pub(super) type Keys = &'static [(&'static str, &'static str)];

/// Highest rail that is believed, V.
pub(super) const HIGHEST_RAIL_V: f64 = 5000.0;

/// One table of the file, whose unknown keys have been complained about.
#[derive(Clone, Copy)]
pub(super) struct Table<'a> {
    notes: &'a Notes<'a>,
    entries: &'a DeTable<'a>,
    header: Span,
    name: &'static str,
    keys: Keys,
}

impl<'a> Table<'a> {
    /// Opens the table that stands at `header`; `name` is how its header is written, for example `[[channel]]`.
    pub(super) fn open(
        notes: &'a Notes<'a>,
        entries: &'a DeTable<'a>,
        header: Span,
        name: &'static str,
        keys: Keys,
    ) -> Self {
        let table = Table { notes, entries, header, name, keys };
        for (key, value) in entries {
            table.complain_if_unknown(key, value);
        }
        table
    }

    pub(super) fn notes(&self) -> &'a Notes<'a> {
        self.notes
    }

    /// Where its header stands.
    pub(super) fn header(&self) -> Span {
        self.header
    }

    /// The entry under `key`, which must be one of the table's own keys.
    pub(super) fn key(&self, key: &'static str) -> Entry<'a> {
        let example = self.keys.iter().find(|(known, _)| *known == key).map(|(_, example)| *example);
        debug_assert!(example.is_some(), "{key} is no key of {}", self.name);
        let found = self.entries.get_key_value(key);
        Entry {
            table: *self,
            key,
            example: example.unwrap_or_default(),
            value: found.map(|(_, value)| value),
            span: found.map(|(k, v)| match v.get_ref() {
                // A table's value is its header already; the key inside it would cut it short.
                DeValue::Table(_) | DeValue::Array(_) if v.span().start <= k.span().start => v.span().into(),
                _ => Span { start: k.span().start, end: v.span().end },
            }),
        }
    }

    /// The same, and a complaint if it isn't there.
    pub(super) fn need(&self, key: &'static str) -> Entry<'a> {
        let entry = self.key(key);
        if entry.span.is_none() {
            self.missing(key, &format!("expected for example {}", sample(key, entry.example)));
        }
        entry
    }

    /// Complains at the header that `what` is missing.
    pub(super) fn missing(&self, what: &str, says: &str) {
        self.notes.complain_of(self.header, self.name, format!("{what} is missing; {says}"));
    }

    /// Complains about each of `keys` that is present: they mean nothing here, because `why`.
    pub(super) fn refuse(&self, keys: &[&'static str], why: &str) {
        for key in keys {
            if let Some(span) = self.key(key).span {
                self.notes.complain(span, why);
            }
        }
    }

    /// Whether any of `keys` is present.
    pub(super) fn has_any(&self, keys: &[&'static str]) -> bool {
        keys.iter().any(|key| self.key(key).is_present())
    }

    /// Which of `ways` to state `what` is taken: the one that is present. Complains if none is, and about every
    /// further one.
    pub(super) fn one_of(&self, ways: &[&'static str], what: &str, expected: &str) -> Option<&'static str> {
        let mut present = ways.iter().filter(|way| self.key(way).is_present());
        let Some(way) = present.next() else {
            self.missing(what, expected);
            return None;
        };
        for other in present {
            self.refuse(&[other], &format!("{way} states {what} already; expected one of the two"));
        }
        Some(way)
    }

    /// The table `[name.key]`, if it is there.
    pub(super) fn table(&self, key: &'static str, name: &'static str, keys: Keys) -> Option<Table<'a>> {
        let entry = self.key(key);
        match entry.value?.get_ref() {
            DeValue::Table(entries) => Some(Table::open(self.notes, entries, entry.span?, name, keys)),
            _ => entry.refuse(&format!("expected the table {name}")),
        }
    }

    /// Every table of the list `[[key]]`; none when there is no such list.
    pub(super) fn tables(&self, key: &'static str, name: &'static str, keys: Keys) -> Vec<Table<'a>> {
        let entry = self.key(key);
        let expected = || format!("expected a list of tables: write {name} above each");
        match entry.value.map(Spanned::get_ref) {
            None => Vec::new(),
            Some(DeValue::Array(items)) if !items.is_empty() => {
                let open = |item: &'a Spanned<DeValue<'a>>| match item.get_ref() {
                    DeValue::Table(entries) => {
                        Some(Table::open(self.notes, entries, item.span().into(), name, keys))
                    }
                    _ => {
                        self.notes.complain(item.span().into(), expected());
                        None
                    }
                };
                items.iter().filter_map(open).collect()
            }
            Some(_) => {
                entry.refuse::<()>(&expected());
                Vec::new()
            }
        }
    }

    fn complain_if_unknown(&self, key: &Spanned<std::borrow::Cow<'_, str>>, value: &Spanned<DeValue<'_>>) {
        let name = key.get_ref().as_ref();
        if self.keys.iter().any(|(known, _)| *known == name) {
            return;
        }
        let is_table = matches!(value.get_ref(), DeValue::Table(_)) && value.span().start < key.span().start;
        let at = if is_table { value.span().into() } else { key.span().into() };
        // The value isn't quoted: it may be a secret under a misspelt key.
        let says = if SECRET_KEYS.contains(&name) {
            "a secret never stands in this file, which people copy and show; put it into a file of its own and \
             write token_file = \"webhook.token\", or token_env = \"RAILTIDE_TOKEN\""
                .to_owned()
        } else {
            let known = || self.keys.iter().map(|(known, _)| *known);
            match nearest(name, known()) {
                Some(near) => {
                    let example = sample(near, self.key(near).example);
                    format!("no key of {}; did you mean {near}, for example {example}?", self.name)
                }
                None => {
                    format!("no key of {}, which knows {}", self.name, known().collect::<Vec<_>>().join(", "))
                }
            }
        };
        self.notes.complain(at, says);
    }
}

/// How `key` is written with its example; a table's example is its header.
fn sample(key: &str, example: &str) -> String {
    let is_header =
        example.starts_with('[') && example[1..].starts_with(|c: char| c == '[' || c.is_alphabetic());
    if is_header { example.to_owned() } else { format!("{key} = {example}") }
}

/// Keys under which people would write a secret.
const SECRET_KEYS: [&str; 4] = ["token", "password", "secret", "api_key"];

/// One key of a table with its value, or the lack of it. Each reading method gives `None` both when the key is
/// absent and when its value was wrong; in the latter case it has complained.
#[derive(Clone, Copy)]
pub(super) struct Entry<'a> {
    table: Table<'a>,
    key: &'static str,
    example: &'static str,
    value: Option<&'a Spanned<DeValue<'a>>>,
    span: Option<Span>,
}

/// What a number may be.
#[derive(Clone, Copy)]
pub(super) enum Bounds {
    /// Above zero, and up to this.
    Above0To(f64),
    /// Both ends included.
    Within(f64, f64),
}

impl Bounds {
    fn hold(self, x: f64) -> bool {
        match self {
            Bounds::Above0To(most) => x > 0.0 && x <= most,
            Bounds::Within(least, most) => x >= least && x <= most,
        }
    }

    fn words(self) -> String {
        match self {
            Bounds::Above0To(most) => format!("above 0 and at most {most}"),
            Bounds::Within(least, most) => format!("from {least} to {most}"),
        }
    }
}

impl<'a> Entry<'a> {
    pub(super) fn is_present(&self) -> bool {
        self.span.is_some()
    }

    /// Where it is written, the table's header if it isn't.
    pub(super) fn span(&self) -> Span {
        self.span.unwrap_or(self.table.header)
    }

    /// Complains about the value, and gives nothing.
    pub(super) fn refuse<T>(&self, says: &str) -> Option<T> {
        self.table.notes.complain(self.span(), says);
        None
    }

    /// A finite number within `bounds`.
    pub(super) fn number(&self, bounds: Bounds) -> Option<f64> {
        self.number_in(self.value?, bounds)
    }

    /// A number, or a list of at least one, each within `bounds`.
    pub(super) fn numbers(&self, bounds: Bounds) -> Option<Vec<f64>> {
        match self.value?.get_ref() {
            DeValue::Array(items) if !items.is_empty() => {
                let read: Vec<_> = items.iter().map(|item| self.number_in(item, bounds)).collect();
                read.into_iter().collect()
            }
            DeValue::Array(_) => {
                self.refuse(&format!("expected at least one number such as {}", self.example))
            }
            _ => self.number(bounds).map(|x| vec![x]),
        }
    }

    /// A whole number from `least` to `most`.
    pub(super) fn whole(&self, least: u32, most: u32) -> Option<u32> {
        let DeValue::Integer(digits) = self.value?.get_ref() else {
            return self.refuse(&format!("expected a whole number such as {}", self.example));
        };
        match i64::from_str_radix(digits.as_str(), digits.radix()).ok().and_then(|n| u32::try_from(n).ok()) {
            Some(n) if (least..=most).contains(&n) => Some(n),
            _ => self
                .refuse(&format!("expected a whole number from {least} to {most}, such as {}", self.example)),
        }
    }

    /// Any text that isn't blank.
    pub(super) fn text(&self) -> Option<At<String>> {
        let text = self.string(self.value?)?;
        if text.trim().is_empty() {
            return self.refuse(&format!("expected some text such as {}", self.example));
        }
        Some(At { value: text.to_owned(), span: self.span() })
    }

    /// The text as it stands, if it is one; never complains.
    pub(super) fn peek(&self) -> Option<&'a str> {
        match self.value?.get_ref() {
            DeValue::String(text) => Some(text),
            _ => None,
        }
    }

    /// A list of texts, at least one, each with its own place.
    pub(super) fn texts(&self) -> Option<Vec<At<String>>> {
        match self.value?.get_ref() {
            DeValue::Array(items) if !items.is_empty() => {
                let read: Vec<_> = items
                    .iter()
                    .map(|item| Some(At { value: self.string(item)?.to_owned(), span: item.span().into() }))
                    .collect();
                read.into_iter().collect()
            }
            _ => self.refuse(&format!("expected a list of texts such as {}", self.example)),
        }
    }

    /// A name of at most 32 bytes: ASCII letters, digits, `_`, `-` and, where `dots`, `.`.
    pub(super) fn name(&self, dots: bool) -> Option<At<String>> {
        let name = self.text()?;
        let fits = |c: char| c.is_ascii_alphanumeric() || c == '_' || c == '-' || (dots && c == '.');
        if name.value.len() > 32 || !name.value.chars().all(fits) {
            let marks = if dots { "`.`, `_`, `-`" } else { "`_`, `-`" };
            return self.refuse(&format!(
                "expected a name of letters without accents, digits, {marks}, at most 32 of them, such as {}",
                self.example
            ));
        }
        Some(name)
    }

    /// true or false.
    pub(super) fn flag(&self) -> Option<bool> {
        match self.value?.get_ref() {
            DeValue::Boolean(flag) => Some(*flag),
            _ => self.refuse(&format!("expected true or false, without quotes, such as {}", self.example)),
        }
    }

    /// One of a few words.
    pub(super) fn word<T: Copy>(&self, words: &[(&str, T)]) -> Option<T> {
        let word = self.string(self.value?)?;
        if let Some((_, meaning)) = words.iter().find(|(known, _)| *known == word) {
            return Some(*meaning);
        }
        let list = words.iter().map(|(known, _)| format!("\"{known}\"")).collect::<Vec<_>>().join(", ");
        match (words.len(), nearest(word, words.iter().map(|(known, _)| *known))) {
            (1, _) => self.refuse(&format!("expected {list}, the only one there is")),
            (_, Some(near)) => self.refuse(&format!("expected one of {list}; did you mean \"{near}\"?")),
            _ => self.refuse(&format!("expected one of {list}, for example {}", self.example)),
        }
    }

    /// A length of time such as "10 s", from `least` to `most`.
    pub(super) fn duration(&self, least: Duration, most: Duration) -> Option<Duration> {
        let text = self.string(self.value?)?;
        match humantime::parse_duration(text.trim()) {
            Ok(span) if span >= least && span <= most => Some(span),
            Ok(_) => self.refuse(&format!(
                "expected a time from {} to {}, such as {}",
                humantime::format_duration(least),
                humantime::format_duration(most),
                self.example
            )),
            Err(_) => self.refuse(&format!("expected a time with its unit such as {}", self.example)),
        }
    }

    /// A day, as TOML's own date or as text.
    pub(super) fn day(&self) -> Option<chrono::NaiveDate> {
        let expected = || format!("expected a day such as {}", self.example);
        let written = match self.value?.get_ref() {
            DeValue::String(text) => text.to_string(),
            DeValue::Datetime(date) => date.to_string(),
            _ => return self.refuse(&expected()),
        };
        match chrono::NaiveDate::parse_from_str(&written, "%Y-%m-%d") {
            Ok(day) => Some(day),
            Err(_) => self.refuse(&expected()),
        }
    }

    /// The inline table under this key.
    pub(super) fn inline(&self, keys: Keys) -> Option<Table<'a>> {
        match self.value?.get_ref() {
            DeValue::Table(entries) => {
                Some(Table::open(self.table.notes, entries, self.span(), self.key, keys))
            }
            _ => self.refuse(&format!("expected a table such as {{ {} }}", self.example)),
        }
    }

    fn string(&self, value: &'a Spanned<DeValue<'a>>) -> Option<&'a str> {
        match value.get_ref() {
            DeValue::String(text) => Some(text),
            _ => self.refuse(&format!("expected text in quotes such as {}", self.example)),
        }
    }

    fn number_in(&self, value: &Spanned<DeValue<'_>>, bounds: Bounds) -> Option<f64> {
        let number = match value.get_ref() {
            DeValue::Float(digits) => digits.as_str().parse::<f64>().ok(),
            DeValue::Integer(digits) => {
                i64::from_str_radix(digits.as_str(), digits.radix()).ok().map(|n| n as f64)
            }
            _ => return self.refuse(&format!("expected a number such as {}", self.example)),
        };
        match number {
            Some(x) if x.is_finite() && bounds.hold(x) => Some(x),
            _ => self.refuse(&format!("expected a number {}, such as {}", bounds.words(), self.example)),
        }
    }
}
