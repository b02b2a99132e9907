//! How long a tide line takes to write, to read, and to find in a stream: `cargo bench --bench tide_line`.

#![expect(clippy::print_stdout, reason = "a benchmark reports")]

use std::hint::black_box;
use std::time::Instant;

use railtide::logger::{Decoder, TideLine, write_line};
use railtide::quantity::{Moment, Mono, Utc};

const LINES: u32 = 200_000;

/// Runs `work`, which handles `LINES` lines, five times and prints the quickest time a line.
fn time(what: &str, mut work: impl FnMut()) {
    let best = (0..5).map(|_| {
        let start = Instant::now();
        work();
        start.elapsed()
    });
    let ns = best.min().unwrap_or_default().as_nanos() as f64 / f64::from(LINES);
    println!("{what:<30} {ns:>8.0} ns a line");
}

fn main() {
    let values = |n: u32| {
        [
            ("mains", Some(229_000 + (n % 2_000) as i32)),
            ("hall.reservoir", Some(471_000 + (n % 3_000) as i32)),
        ]
    };
    let mut stream = Vec::new();
    time("write, two channels", || {
        stream.clear();
        for n in 0..LINES {
            write_line(&mut stream, n, u64::from(n) * 100, values(n)).expect("the line is short");
        }
    });

    let lines: Vec<&[u8]> = stream.split(|&b| b == b'\n').filter(|line| !line.is_empty()).collect();
    time("read one line", || {
        for line in &lines {
            let parsed = TideLine::parse(line).expect("a good line");
            for pair in parsed.pairs() {
                black_box(pair);
            }
        }
    });

    let at = Moment { mono: Mono(0), utc: Utc(0) };
    let mut out = Vec::new();
    time("decode a stream, 4 KiB chunks", || {
        let mut decoder = Decoder::new(0, ["mains", "hall.reservoir"]);
        for chunk in stream.chunks(4_096) {
            decoder.feed(chunk, at, &mut out);
            black_box(&out);
            out.clear();
        }
    });
}
