//! From a line's last byte to the receiver's socket: the daemon, commit included, against a bare loop that does no
//! more than read a line from a pseudo-terminal and post it.
//!
//! `cargo bench --bench delay`; the goal is a median under 50 ms and 99 % under 200 ms with the on-delay at zero.

#![allow(clippy::print_stdout, reason = "a benchmark's result is what it prints")]

#[path = "../support/mod.rs"]
mod support;

use std::io::{BufRead, BufReader, Read, Write};
use std::net::{TcpListener, TcpStream};
use std::sync::mpsc;
use std::time::{Duration, Instant};

use support::{Bench, Line, wait_for};

const ROUNDS: usize = 40;

/// A receiver that notes when the first byte of each request comes.
fn stop_watch() -> (String, mpsc::Receiver<Instant>) {
    let listener = TcpListener::bind("127.0.0.1:0").expect("a port");
    let url = format!("http://{}/", listener.local_addr().expect("an address"));
    let (arrived, arrivals) = mpsc::channel();
    std::thread::spawn(move || {
        for stream in listener.incoming() {
            let Ok(mut stream) = stream else { continue };
            let mut first = [0];
            if stream.read_exact(&mut first).is_ok() && arrived.send(Instant::now()).is_err() {
                return;
            }
            let mut reader = BufReader::new(&mut stream);
            let mut length = 0;
            let mut line = String::new();
            while reader.read_line(&mut line).is_ok_and(|n| n > 0) && line != "\r\n" {
                if let Some(n) = line.to_ascii_lowercase().strip_prefix("content-length:") {
                    length = n.trim().parse().unwrap_or(0);
                }
                line.clear();
            }
            let mut body = vec![0; length];
            let _ = reader.read_exact(&mut body);
            let _ = stream.write_all(b"HTTP/1.1 204 No Content\r\nConnection: close\r\n\r\n");
        }
    });
    (url, arrivals)
}

/// The daemon: each round takes the mains over the setpoint and back.
fn through_the_daemon() -> Vec<Duration> {
    let (url, arrivals) = stop_watch();
    let mut line = Line::new();
    let bench = Bench::hall(&line.device(), &url);
    bench.change_config("on_delay = \"1 s\"\noff_delay = \"1 s\"", "on_delay = \"0 s\"\noff_delay = \"0 s\"");
    let daemon = bench.start();
    wait_for("the daemon reads", || {
        line.send(&[("mains", 224_000)]);
        std::thread::sleep(Duration::from_millis(50));
        bench.log().contains("port is open").then_some(())
    });
    let mut delays = Vec::new();
    for round in 0..ROUNDS as i64 {
        // The all-clear of the round before must have arrived; then a few quiet lines.
        for _ in 0..3 {
            line.send(&[("mains", 224_000 + round)]);
            std::thread::sleep(Duration::from_millis(30));
        }
        let sent = Instant::now();
        line.send(&[("mains", 240_000 + round)]);
        let arrived = arrivals.recv_timeout(support::PATIENCE).expect("the notice arrives");
        delays.push(arrived - sent);
        line.send(&[("mains", 224_000 + round)]);
        arrivals.recv_timeout(support::PATIENCE).expect("the all-clear arrives");
    }
    daemon.stop();
    delays
}

/// The peer: a bare loop.
fn through_a_bare_loop() -> Vec<Duration> {
    let (url, arrivals) = stop_watch();
    let host = url.trim_start_matches("http://").trim_end_matches('/').to_owned();
    let mut line = Line::new();
    let port = serialport::new(line.device().to_string_lossy(), 115_200)
        .timeout(Duration::from_secs(3600))
        .open_native()
        .expect("the far end");
    std::thread::spawn(move || {
        for line in BufReader::new(port).lines() {
            let Ok(body) = line else { return };
            let Ok(mut stream) = TcpStream::connect(&host) else { return };
            let request =
                format!("POST / HTTP/1.1\r\nHost: {host}\r\nContent-Length: {}\r\n\r\n{body}", body.len());
            if stream.write_all(request.as_bytes()).is_err() {
                return;
            }
            let mut answer = Vec::new();
            let _ = stream.read_to_end(&mut answer);
        }
    });
    (0..ROUNDS as i64)
        .map(|round| {
            std::thread::sleep(Duration::from_millis(30));
            let sent = Instant::now();
            line.send(&[("mains", 240_000 + round)]);
            arrivals.recv_timeout(support::PATIENCE).expect("the post arrives") - sent
        })
        .collect()
}

fn main() {
    let show = |name: &str, mut delays: Vec<Duration>| {
        delays.sort();
        let median = delays[delays.len() / 2];
        let p99 = delays[delays.len() * 99 / 100];
        println!(
            "{name:24} median {:7.2} ms   99 % {:7.2} ms   ({} rounds)",
            ms(median),
            ms(p99),
            delays.len()
        );
        median
    };
    let bare = show("a bare loop", through_a_bare_loop());
    let daemon = show("railtide, commit included", through_the_daemon());
    println!("ratio of medians: {:.1} (goal: median under 50 ms, 99 % under 200 ms)", ms(daemon) / ms(bare));
}

fn ms(span: Duration) -> f64 {
    span.as_secs_f64() * 1000.0
}
