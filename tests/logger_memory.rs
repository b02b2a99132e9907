//! Whatever arrives on the line, the decoder's memory stays flat. A file of its own, since it looks at the memory of
//! the whole process.

#![cfg(target_os = "linux")]

use railtide::logger::{Decoder, LineFault, LoggerEvent, write_line};
use railtide::quantity::{Moment, Mono, Utc};

const AT: Moment = Moment { mono: Mono(0), utc: Utc(0) };

/// What the process holds in memory, KiB (`VmRSS` of proc(5)).
fn resident_kib() -> u64 {
    let status = std::fs::read_to_string("/proc/self/status").unwrap();
    let line = status.lines().find_map(|line| line.strip_prefix("VmRSS:")).unwrap();
    line.trim().trim_end_matches(" kB").parse().unwrap()
}

#[test]
fn memory_stays_flat_through_64_megabytes_of_anything() {
    let mut state = 0x9E37_79B9_7F4A_7C15u64;
    let mut random = || {
        // xorshift64, by Marsaglia
        state ^= state << 13;
        state ^= state >> 7;
        state ^= state << 17;
        (state >> 32) as u8
    };
    let random: Vec<u8> = (0..1 << 20).map(|_| random()).collect();
    let endless = vec![b'7'; 1 << 20];
    let marks = vec![b'@'; 1 << 20];
    let mut good = Vec::new();
    for n in 0..20_000 {
        write_line(&mut good, n, u64::from(n), [("mains", Some(230_000)), ("unknown", Some(1))]).unwrap();
    }

    let mut decoder = Decoder::new(0, ["mains"]);
    let mut out = Vec::with_capacity(16_384);
    let mut faults = [0u64; 3];
    let mut samples = 0u64;
    let mut feed_all = |bytes: &[u8]| {
        for chunk in bytes.chunks(4_096) {
            decoder.feed(chunk, AT, &mut out);
            for event in out.drain(..) {
                match event.what {
                    LoggerEvent::Fault(LineFault::TooLong) => faults[0] += 1,
                    LoggerEvent::Fault(LineFault::UnknownChannel) => faults[1] += 1,
                    LoggerEvent::Fault(_) => faults[2] += 1,
                    LoggerEvent::Sample(_) => samples += 1,
                    LoggerEvent::Restarted => {}
                    other => panic!("{other:?}"),
                }
            }
        }
    };
    feed_all(&good);
    let before = resident_kib();
    for _ in 0..16 {
        for bytes in [&random, &endless, &marks, &good] {
            feed_all(bytes);
            feed_all(b"\n@");
            feed_all(bytes);
            feed_all(b"\n");
        }
    }
    let grown = resident_kib().saturating_sub(before);
    assert!(grown < 1_024, "grown by {grown} KiB");
    assert_eq!((samples, faults[1]), (33 * 20_000, 33 * 20_000));
    assert!(faults[0] > 0 && faults[2] > 0, "{faults:?}");
}
