//! The open recording in `tests/data`: "Individual Household Electric Power Consumption", G. Hebrail and A. Berard,
//! 2006, UCI Machine Learning Repository, DOI 10.24432/C58K54, licence CC BY 4.0. Its times are taken as UTC.
#![allow(dead_code, unreachable_pub, reason = "each test program uses its own part")]

use std::fs::File;
use std::io::{BufRead, BufReader};
use std::path::Path;
use std::time::Duration;

use chrono::{DateTime, NaiveDateTime};
use flate2::read::GzDecoder;
use railtide::mains::{Interval, intervals};
use railtide::quantity::{Millivolts, Utc};
use railtide::reading::{ChannelId, Quality, Reading};

/// The year in five-minute means.
pub fn year() -> Vec<Reading> {
    read("household_5min_to_2007.csv.gz")
}

/// A month in one-minute means.
pub fn month() -> Vec<Reading> {
    read("household_1min.csv.gz")
}

/// The ten-minute values of the year.
pub fn year_of_intervals() -> Vec<Interval> {
    intervals(year(), Duration::from_secs(300))
}

/// A time as RFC 3339.
pub fn utc(text: &str) -> Utc {
    Utc(DateTime::parse_from_rfc3339(text).expect("a time").timestamp_millis())
}

fn read(name: &str) -> Vec<Reading> {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name);
    let file = File::open(&path).unwrap_or_else(|e| panic!("{}: {e}", path.display()));
    let lines = BufReader::new(GzDecoder::new(file)).lines().skip(1);
    lines
        .map(|line| {
            let line = line.expect("a line");
            let (time, volts) = line.split_once(',').expect("two columns");
            let time = NaiveDateTime::parse_from_str(time, "%Y-%m-%dT%H:%M:%S").expect("a time");
            let volts: f64 = volts.parse().expect("volts");
            Reading {
                channel: ChannelId(1),
                at: Utc(time.and_utc().timestamp_millis()),
                value: Millivolts::from_volts(volts).expect("volts"),
                quality: Quality::Good,
            }
        })
        .collect()
}
