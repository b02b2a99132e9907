//! The hardware notes keep their word: the vectors they print are right, and the C they print compiles and is understood.

use std::path::Path;
use std::process::Command;

use railtide::logger::{Decoder, LineFault, LoggerEvent, MAX_LINE, Sample, crc16};
use railtide::quantity::{Moment, Mono, Utc};

const NOTES: &str = include_str!("../hardware-notes/tide-line.md");

/// The notes' only block in this language.
fn block(language: &str) -> &'static str {
    let fence = format!("```{language}\n");
    let mut parts = NOTES.split(fence.as_str());
    let (before, after) =
        (parts.next(), parts.next().unwrap_or_else(|| panic!("no {language} in the notes")));
    assert!(before.is_some() && parts.next().is_none(), "one {language} in the notes");
    after.split_once("```").unwrap().0
}

/// What a decoder with these channels makes of the bytes after a line end.
fn decode(channels: &[&str], bytes: &[u8]) -> Vec<LoggerEvent> {
    let mut decoder = Decoder::new(0, channels.iter().copied());
    let mut out = Vec::new();
    let at = Moment { mono: Mono(0), utc: Utc(0) };
    decoder.feed(b"\n", at, &mut out);
    decoder.feed(bytes, at, &mut out);
    out.into_iter().map(|event| event.what).collect()
}

fn sample(logger_ms: u64, values: &[(usize, f64)]) -> LoggerEvent {
    LoggerEvent::Sample(Sample { logger_ms: Some(logger_ms), values: values.to_vec() })
}

#[test]
fn the_good_lines_of_the_notes_are_read_as_the_notes_say() {
    let channels = ["mains", "hall.reservoir", "a", "x.y_z-9"];
    let heard: Vec<_> =
        block("vectors").lines().map(|line| decode(&channels, format!("{line}\r\n").as_bytes())).collect();
    let empty = LoggerEvent::Fault(LineFault::BadValue);
    let expected = [
        vec![sample(0, &[])],
        vec![sample(123_456, &[(0, 229.512), (1, 471.2)])],
        vec![empty, sample(124_456, &[(0, 229.498)])],
        vec![sample(51, &[(2, -0.001)])],
        vec![sample(2, &[(0, -2_147_483.648), (3, 2_147_483.647)])],
        vec![sample(u64::MAX, &[(0, 0.0)])],
    ];
    assert_eq!(heard, expected);
}

#[test]
fn the_refused_lines_of_the_notes_are_refused_for_the_reason_given() {
    let mut reasons = 0;
    for row in block("refused").lines() {
        let (reason, line) = row.split_once(' ').unwrap();
        let fault: LineFault = serde_json::from_value(reason.into()).unwrap();
        let heard = decode(&["mains", "hall.reservoir"], format!("{}\n", line.trim_start()).as_bytes());
        assert_eq!(heard, [LoggerEvent::Fault(fault)], "{row}");
        reasons += 1;
    }
    assert_eq!(reasons, 5);
}

/// Feeds the functions of the notes with the cases where number formatting goes wrong, and prints the check value last.
const HARNESS: &str = r#"
#include <stdio.h>

int main(void)
{
    static struct tide_line line;
    tide_start(&line, 17, 123456);
    tide_value(&line, "mains", 229512);
    tide_value(&line, "hall.reservoir", 471200);
    fwrite(line.bytes, 1, tide_finish(&line), stdout);
    tide_start(&line, 18, 4294967295u);
    tide_value(&line, "mains", INT32_MIN);
    tide_no_value(&line, "hall.reservoir");
    fwrite(line.bytes, 1, tide_finish(&line), stdout);
    tide_start(&line, 19, 0);
    tide_value(&line, "mains", -1);
    tide_value(&line, "hall.reservoir", INT32_MAX);
    fwrite(line.bytes, 1, tide_finish(&line), stdout);
    tide_start(&line, 20, 1000);
    for (int i = 0; i < 60; i++)
        tide_value(&line, "mains", i);
    if (tide_finish(&line) != 0)
        return 1;
    tide_start(&line, 21, 2000);
    while (line.length < TIDE_MAX - TIDE_TAIL - 11)
        tide_no_value(&line, "none");
    fwrite(line.bytes, 1, tide_finish(&line), stdout);
    printf("%04X\n", (unsigned)tide_crc16("123456789", 9));
    return 0;
}
"#;

#[test]
fn the_c_of_the_notes_compiles_without_a_warning_and_its_lines_are_understood() {
    if Command::new("cc").arg("--version").output().is_err() {
        return report("SKIPPED: there is no C compiler called cc here, so the notes' C was not compiled");
    }
    let folder = tempfile::tempdir().unwrap();
    let program = build_c(folder.path());
    let ran = Command::new(program).output().unwrap();
    assert!(ran.status.success(), "a line that is too long is refused: {ran:?}");

    let end = ran.stdout.len() - 5;
    let (lines, check) = ran.stdout.split_at(end);
    // Handbook section 9: CRC check "123456789", CCITT-FALSE (IBM-3740) 0x29B1.
    assert_eq!(check, b"29B1\n");
    assert_eq!(crc16(b"123456789"), 0x29B1);
    let longest = lines.split_inclusive(|&b| b == b'\n').map(<[u8]>::len).max().unwrap();
    assert!((MAX_LINE - 16..=MAX_LINE).contains(&longest), "the last line is nearly full: {longest}");

    let heard = decode(&["mains", "hall.reservoir"], lines);
    let bad = LoggerEvent::Fault(LineFault::BadValue);
    let expected = [
        sample(123_456, &[(0, 229.512), (1, 471.2)]),
        bad,
        sample(4_294_967_295, &[(0, -2_147_483.648)]),
        // A 32-bit counter of milliseconds has wrapped.
        sample(1 << 32, &[(0, -0.001), (1, 2_147_483.647)]),
        LoggerEvent::Lost { lines: 1 },
    ];
    assert_eq!(heard[..5], expected);
    let unknown = LoggerEvent::Fault(LineFault::UnknownChannel);
    assert!(heard[5..heard.len() - 1].iter().all(|event| *event == unknown), "{heard:?}");
    assert_eq!(heard.last(), Some(&sample((1 << 32) + 2_000, &[])));
}

fn build_c(folder: &Path) -> std::path::PathBuf {
    let source = folder.join("tide.c");
    let program = folder.join("tide");
    std::fs::write(&source, [block("c"), HARNESS].concat()).unwrap();
    let built = Command::new("cc")
        .args(["-std=c99", "-Wall", "-Wextra", "-Wconversion", "-pedantic", "-Werror", "-o"])
        .args([&program, &source])
        .output()
        .unwrap();
    assert!(built.status.success(), "{}", String::from_utf8_lossy(&built.stderr));
    program
}

/// Shown by `cargo test -- --nocapture`.
#[expect(clippy::print_stderr, reason = "a skipped check must be seen")]
fn report(text: &str) {
    eprintln!("{text}");
}
