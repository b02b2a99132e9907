//! Judges forecasts of the mains honestly: walks forward, never shows a method anything from the moment of issue on,
//! and compares it with plain guesses on the same days.
#![allow(dead_code, unreachable_pub, reason = "each test program uses its own part")]

use std::time::Duration;

use chrono_tz::Tz;
use railtide::mains::{Distribution, INTERVAL, Interval, forecast};
use railtide::quantity::Utc;

/// Intervals in a day.
pub const DAY: usize = 144;

const QUANTILES: [f64; 3] = [0.05, 0.50, 0.95];

/// The 5, 50 and 95 % quantiles of each interval to come.
pub type Quantiles = Vec<[f64; 3]>;

/// Ten-minute values without a hole in time, NaN where missing; whole days from a UTC midnight on.
pub struct Recording {
    pub start: Utc,
    pub volts: Vec<f64>,
    intervals: Vec<Interval>,
}

impl Recording {
    /// Of intervals in order; only whole ones count.
    pub fn new(intervals: Vec<Interval>) -> Self {
        let step = INTERVAL.as_millis() as i64;
        let day = step * DAY as i64;
        let start = intervals[0].start.0.div_euclid(day) * day;
        let days = (intervals[intervals.len() - 1].start.0 - start) / day + 1;
        let mut volts = vec![f64::NAN; days as usize * DAY];
        for i in intervals.iter().filter(|i| !i.flagged) {
            volts[((i.start.0 - start) / step) as usize] = i.rms_v;
        }
        Recording { start: Utc(start), volts, intervals }
    }

    pub fn days(&self) -> usize {
        self.volts.len() / DAY
    }

    /// The first day that starts at `at` or later.
    pub fn day_of(&self, at: Utc) -> usize {
        ((at.0 - self.start.0) / (INTERVAL.as_millis() as i64 * DAY as i64)) as usize
    }

    pub fn time(&self, index: usize) -> Utc {
        Utc(self.start.0 + index as i64 * INTERVAL.as_millis() as i64)
    }

    /// The intervals that were complete at `at`.
    fn known(&self, at: Utc) -> &[Interval] {
        &self.intervals[..self.intervals.partition_point(|i| i.start < at)]
    }
}

/// A way to forecast: `count` intervals from index `issue` on.
pub struct Method {
    pub name: &'static str,
    pub forecast: fn(&Recording, usize, usize) -> Option<Quantiles>,
}

/// Ours.
pub const OURS: Method = Method { name: "tide table", forecast: ours };

/// The plain guesses.
pub const GUESSES: &[Method] = &[
    Method { name: "yesterday", forecast: |r, issue, count| points(r, issue, count, DAY) },
    Method { name: "same time last week", forecast: |r, issue, count| points(r, issue, count, 7 * DAY) },
    Method { name: "mean of the day, spread of 28 days", forecast: mean_of_the_day },
    Method { name: "yesterday, spread of differences", forecast: yesterday_with_spread },
    Method { name: "same time over 14 days", forecast: |r, issue, count| same_time(r, issue, count, 14) },
    Method { name: "same time over 28 days", forecast: |r, issue, count| same_time(r, issue, count, 28) },
];

fn ours(recording: &Recording, issue: usize, count: usize) -> Option<Quantiles> {
    let at = recording.time(issue);
    let table = forecast(recording.known(at), at, INTERVAL * count as u32, Tz::UTC).ok()?;
    Some(table.steps.iter().map(|s| [s.low_v, s.median_v, s.high_v]).collect())
}

fn points(recording: &Recording, issue: usize, count: usize, back: usize) -> Option<Quantiles> {
    (0..count).map(|k| Some([earlier(recording, issue, k, back)?; 3])).collect()
}

fn same_time(recording: &Recording, issue: usize, count: usize, days: usize) -> Option<Quantiles> {
    (0..count).map(|k| quantiles((1..=days).filter_map(|d| earlier(recording, issue, k, d * DAY)))).collect()
}

fn mean_of_the_day(recording: &Recording, issue: usize, count: usize) -> Option<Quantiles> {
    let all = quantiles(recording.volts[issue.checked_sub(28 * DAY)?..issue].iter().copied())?;
    Some(vec![all; count])
}

fn yesterday_with_spread(recording: &Recording, issue: usize, count: usize) -> Option<Quantiles> {
    (0..count)
        .map(|k| {
            let differences = (1..28).filter_map(|d| {
                Some(earlier(recording, issue, k, d * DAY)? - earlier(recording, issue, k, (d + 1) * DAY)?)
            });
            let yesterday = earlier(recording, issue, k, DAY)?;
            Some(quantiles(differences)?.map(|d| yesterday + d))
        })
        .collect()
}

/// The value `back` before the `k`-th interval to come, or as many whole days more as it takes to lie in the past.
fn earlier(recording: &Recording, issue: usize, k: usize, back: usize) -> Option<f64> {
    let more = k.saturating_sub(back - 1).div_ceil(DAY) * DAY;
    let v = recording.volts[(issue + k).checked_sub(back + more)?];
    v.is_finite().then_some(v)
}

fn quantiles(values: impl Iterator<Item = f64>) -> Option<[f64; 3]> {
    let spread = Distribution::new(values);
    (spread.len() >= 7).then_some(())?;
    Some([spread.percentile(5.0)?, spread.percentile(50.0)?, spread.percentile(95.0)?])
}

/// How a method did.
#[derive(Clone, Copy, Debug)]
pub struct Score {
    /// Forecasts that were judged.
    pub days: usize,
    /// Mean pinball loss over all intervals and the three quantiles, V.
    pub loss: f64,
    /// Share of the intervals that lay within the 5-95 % band.
    pub coverage: f64,
}

/// Lets every method forecast `count` intervals, issued `offset` after the midnight of each day of `days`. Only
/// forecasts without a gap in what came, which every method gave, are judged.
pub fn judge(
    recording: &Recording,
    methods: &[&Method],
    days: std::ops::Range<usize>,
    offset: Duration,
    count: usize,
) -> Vec<Score> {
    judge_with(recording, methods, days, |_, midnight| {
        let issue = midnight + (offset.as_secs() / INTERVAL.as_secs()) as usize;
        (issue, issue..issue + count)
    })
}

/// The same, with `window` giving from a day's first index when a method issues and which intervals are judged.
pub fn judge_with(
    recording: &Recording,
    methods: &[&Method],
    days: std::ops::Range<usize>,
    window: impl Fn(&Method, usize) -> (usize, std::ops::Range<usize>),
) -> Vec<Score> {
    let mut sums = vec![(0.0, 0usize); methods.len()];
    let (mut judged, mut intervals) = (0, 0);
    for day in days {
        let forecasts: Option<Vec<_>> = methods
            .iter()
            .map(|method| {
                let (issue, window) = window(method, day * DAY);
                let came = recording.volts.get(window.clone())?;
                came.iter().all(|v| v.is_finite()).then_some(())?;
                let all = (method.forecast)(recording, issue, window.end - issue)?;
                Some((came, all[window.start - issue..].to_vec()))
            })
            .collect();
        let Some(forecasts) = forecasts else { continue };
        judged += 1;
        intervals += forecasts[0].0.len();
        for (sum, (came, said)) in sums.iter_mut().zip(forecasts) {
            for (v, said) in came.iter().zip(said) {
                sum.0 += pinball(*v, said);
                sum.1 += usize::from((said[0]..=said[2]).contains(v));
            }
        }
    }
    let n = intervals.max(1) as f64;
    sums.into_iter()
        .map(|(loss, within)| Score { days: judged, loss: loss / n, coverage: within as f64 / n })
        .collect()
}

/// Mean over the three quantiles of the pinball loss (Koenker and Bassett, Econometrica 46, 1978): q·(v − said) above,
/// (1 − q)·(said − v) below.
fn pinball(v: f64, said: [f64; 3]) -> f64 {
    let of = |(q, said): (f64, f64)| (q * (v - said)).max((q - 1.0) * (v - said));
    QUANTILES.into_iter().zip(said).map(of).sum::<f64>() / 3.0
}
