//! Programs that tests compare with or look through: Python with its reference libraries, a browser, a broker.
//! `tests/peers/setup` installs them.

#![allow(
    dead_code,
    unreachable_pub,
    clippy::print_stderr,
    reason = "each test program uses its own part of the bench"
)]

use std::path::{Path, PathBuf};

/// Python with the libraries of `tests/peers/requirements.txt`; `None` (said on standard error) where it isn't
/// installed and `tests/run` didn't ask for it.
pub fn python() -> Option<PathBuf> {
    let python = Path::new(env!("CARGO_MANIFEST_DIR")).join("target/peers/bin/python");
    present("Python with its reference libraries", python.is_file().then_some(python))
}

/// A program by its name, such as `chromium` or `mosquitto`.
pub fn program(name: &str) -> Option<PathBuf> {
    let path = std::env::var("PATH").unwrap_or_default() + ":/usr/sbin:/sbin";
    let found = std::env::split_paths(&path).map(|folder| folder.join(name)).find(|file| file.is_file());
    present(name, found)
}

fn present(what: &str, found: Option<PathBuf>) -> Option<PathBuf> {
    if found.is_none() {
        let required = std::env::var_os("RAILTIDE_PEERS").is_some_and(|value| value == "required");
        assert!(!required, "{what} is missing: run tests/peers/setup");
        eprintln!("passed over: {what} is missing; tests/peers/setup installs it");
    }
    found
}
