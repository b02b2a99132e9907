//! The house keeps its order: an import goes up the table of rooms, never down, and pure rooms touch no clock, file
//! or socket. The table is written here by hand; `src/lib.rs` shows it to readers.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

/// Rooms from the ground up; a room may import those before it. Rooms on one row don't import one another.
const ROWS: &[&[&str]] = &[
    &["quantity"],
    &["reading"],
    &["supply"],
    &["mains"],
    &["alarm"],
    &["dropper"],
    &["config"],
    &["watch"],
    &["report"],
    &["clock"],
    &["store"],
    &["logger"],
    &["notice"],
    &["web"],
    &["daemon"],
    &["cli"],
];

const PURE: &[&str] =
    &["quantity", "reading", "supply", "mains", "alarm", "dropper", "config", "watch", "report"];

/// Among impure rooms only these import one another, besides `daemon` and `cli`, which may use all.
const IMPURE_MAY: &[(&str, &[&str])] = &[
    ("clock", &[]),
    ("store", &["clock"]),
    ("logger", &["clock"]),
    ("notice", &["clock", "store"]),
    ("web", &["clock", "store"]),
];

/// What a pure room never names.
const IMPURE_WORDS: &[&str] = &[
    "std::fs",
    "std::net",
    "std::process",
    "std::thread",
    "Instant::now",
    "SystemTime::now",
    "Utc::now",
    "Local::now",
    "tokio::",
    "rusqlite",
    "reqwest",
    "serialport",
];

#[test]
fn imports_go_up_the_table_and_never_down() {
    let mut wrong = Vec::new();
    for (room, file, text) in sources() {
        let Some(row) = row_of(&room) else { continue };
        for (number, line) in code_lines(&text) {
            for target in imported_rooms(line) {
                let Some(target_row) = row_of(target) else { continue };
                let allowed = target == room || (target_row < row && impure_allows(&room, target));
                if !allowed {
                    wrong.push(format!("{}:{number}: {room} imports {target}", file.display()));
                }
            }
        }
    }
    assert!(wrong.is_empty(), "imports down the table:\n{}", wrong.join("\n"));
}

#[test]
fn pure_rooms_touch_no_clock_file_or_socket() {
    let mut wrong = Vec::new();
    for (room, file, text) in sources() {
        if !PURE.contains(&room.as_str()) {
            continue;
        }
        for (number, line) in code_lines(&text) {
            for word in IMPURE_WORDS.iter().filter(|word| line.contains(**word)) {
                wrong.push(format!("{}:{number}: {room} names {word}", file.display()));
            }
        }
    }
    assert!(wrong.is_empty(), "impure words in pure rooms:\n{}", wrong.join("\n"));
}

#[test]
fn every_room_is_in_the_table_and_opens_by_saying_what_it_is_for() {
    let rooms: BTreeMap<String, PathBuf> = sources().map(|(room, file, _)| (room, file)).collect();
    for (room, file) in rooms {
        assert!(["lib", "main"].contains(&room.as_str()) || row_of(&room).is_some(), "{room}: in no row");
        assert!(file.exists());
    }
    for (_, file, text) in sources() {
        assert!(text.starts_with("//!"), "{} doesn't open by saying what it holds", file.display());
    }
}

fn row_of(room: &str) -> Option<usize> {
    ROWS.iter().position(|row| row.contains(&room))
}

fn impure_allows(room: &str, target: &str) -> bool {
    match IMPURE_MAY.iter().find(|(name, _)| *name == room) {
        Some((_, may)) => PURE.contains(&target) || may.contains(&target),
        None => true,
    }
}

/// (room, file, text) of every source file.
fn sources() -> impl Iterator<Item = (String, PathBuf, String)> {
    let root = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let mut files = Vec::new();
    collect(&root, &mut files);
    assert!(files.len() > 20, "the sources were found");
    files.into_iter().map(move |file| {
        let inside = file.strip_prefix(&root).unwrap();
        let first = inside.components().next().unwrap().as_os_str().to_string_lossy().into_owned();
        let room = first.trim_end_matches(".rs").to_owned();
        let text = fs::read_to_string(&file).unwrap();
        (room, file, text)
    })
}

fn collect(folder: &Path, files: &mut Vec<PathBuf>) {
    for entry in fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        if path.is_dir() {
            collect(&path, files);
        } else if path.extension().is_some_and(|e| e == "rs") {
            files.push(path);
        }
    }
}

/// Numbered lines that are neither comments nor part of a file's own tests.
fn code_lines(text: &str) -> impl Iterator<Item = (usize, &str)> {
    text.lines()
        .enumerate()
        .take_while(|(_, line)| !line.starts_with("#[cfg(test)]"))
        .filter(|(_, line)| !line.trim_start().starts_with("//"))
        .map(|(i, line)| (i + 1, line))
}

/// Rooms that a line names as `crate::room`, also inside `use crate::{a::…, b::…}`.
fn imported_rooms(line: &str) -> impl Iterator<Item = &str> {
    line.match_indices("crate::").filter_map(move |(at, word)| {
        let rest = &line[at + word.len()..];
        let end = rest.find(|c: char| !c.is_ascii_alphanumeric() && c != '_').unwrap_or(rest.len());
        (end > 0).then(|| &rest[..end])
    })
}
