//! What is heard of a logger at the bench: rate, jitter, errors by reason, last values and their noise.

use std::collections::{BTreeMap, VecDeque};
use std::time::Duration;

use super::{FromLogger, LineFault, LoggerEvent};
use crate::quantity::Mono;

/// Rate, jitter and noise are over this last while.
const WINDOW: Duration = Duration::from_secs(10);

/// At most so many lines count towards them, so that a flood is no burden: the latest ones.
const MOST_LINES: usize = 4_096;

/// Tallies what one logger says. It stores nothing else.
#[derive(Clone, Debug)]
pub struct Listening {
    names: Vec<String>,
    port: Option<String>,
    lines: u64,
    lost: u64,
    restarts: u64,
    hangs: u64,
    faults: BTreeMap<LineFault, u64>,
    arrivals: VecDeque<Mono>,
    channels: Vec<Heard>,
}

#[derive(Clone, Debug, Default)]
struct Heard {
    values: u64,
    last: Option<(Mono, f64)>,
    recent: VecDeque<(Mono, f64)>,
}

/// The tally so far.
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct Tally {
    /// The port that is open, by its device.
    pub port: Option<String>,
    /// Good lines.
    pub lines: u64,
    /// Lines that are missing by their numbers.
    pub lost_lines: u64,
    /// How often the logger started again.
    pub restarts: u64,
    /// How often a read hung.
    pub hangs: u64,
    /// Unusable lines, bytes and values by reason.
    pub faults: BTreeMap<LineFault, u64>,
    /// Lines a second over the last 10 s; `None` before the second line.
    pub rate_per_s: Option<f64>,
    /// Standard deviation of the time from line to line over the last 10 s, ms; `None` before the third line.
    pub jitter_ms: Option<f64>,
    /// The channels, in the config's order.
    pub channels: Vec<ChannelTally>,
}

/// One channel's part in a [`Tally`].
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct ChannelTally {
    /// Its name.
    pub name: String,
    /// How many values.
    pub values: u64,
    /// The last one, uncalibrated, V.
    pub last_v: Option<f64>,
    /// How long ago that arrived, s.
    pub last_age_s: Option<f64>,
    /// Mean over the last 10 s, V.
    pub mean_v: Option<f64>,
    /// Noise: the standard deviation over the last 10 s, V; `None` before the second value.
    pub noise_v: Option<f64>,
}

impl Listening {
    /// Begins to listen to a logger whose channels have these names.
    pub fn new(names: impl IntoIterator<Item = impl Into<String>>) -> Self {
        let names: Vec<String> = names.into_iter().map(Into::into).collect();
        let channels = vec![Heard::default(); names.len()];
        Listening {
            names,
            port: None,
            lines: 0,
            lost: 0,
            restarts: 0,
            hangs: 0,
            faults: BTreeMap::new(),
            arrivals: VecDeque::new(),
            channels,
        }
    }

    /// Takes one event of that logger.
    pub fn take(&mut self, event: &FromLogger) {
        let at = event.received;
        match &event.what {
            LoggerEvent::Sample(sample) => {
                self.lines += 1;
                keep(&mut self.arrivals, at.mono);
                for &(channel, volts) in &sample.values {
                    if let Some(heard) = self.channels.get_mut(channel) {
                        heard.values += 1;
                        heard.last = Some((at.mono, volts));
                        keep(&mut heard.recent, (at.mono, volts));
                    }
                }
            }
            LoggerEvent::Fault(fault) => *self.faults.entry(*fault).or_default() += 1,
            LoggerEvent::Lost { lines } => self.lost += u64::from(*lines),
            LoggerEvent::Restarted => self.restarts += 1,
            LoggerEvent::Connected { port } => {
                self.port = Some(port.clone());
                // The pause before is no jitter.
                self.arrivals.clear();
            }
            LoggerEvent::Disconnected { .. } => self.port = None,
            LoggerEvent::ReadHangs => self.hangs += 1,
        }
    }

    /// The tally at `now`.
    pub fn tally(&self, now: Mono) -> Tally {
        let fresh = |&at: &Mono| now.since(at) <= WINDOW;
        let arrivals: Vec<Mono> = self.arrivals.iter().copied().filter(fresh).collect();
        let gaps_ms: Vec<f64> =
            arrivals.windows(2).map(|pair| pair[1].since(pair[0]).as_secs_f64() * 1000.0).collect();
        let mean_gap_ms = mean(&gaps_ms).filter(|&gap| gap > 0.0);
        Tally {
            port: self.port.clone(),
            lines: self.lines,
            lost_lines: self.lost,
            restarts: self.restarts,
            hangs: self.hangs,
            faults: self.faults.clone(),
            rate_per_s: mean_gap_ms.map(|gap| 1000.0 / gap),
            jitter_ms: deviation(&gaps_ms),
            channels: self
                .names
                .iter()
                .zip(&self.channels)
                .map(|(name, heard)| {
                    let recent: Vec<f64> =
                        heard.recent.iter().filter(|(at, _)| fresh(at)).map(|&(_, volts)| volts).collect();
                    ChannelTally {
                        name: name.clone(),
                        values: heard.values,
                        last_v: heard.last.map(|(_, volts)| volts),
                        last_age_s: heard.last.map(|(at, _)| now.since(at).as_secs_f64()),
                        mean_v: mean(&recent),
                        noise_v: deviation(&recent),
                    }
                })
                .collect(),
        }
    }
}

fn keep<T>(recent: &mut VecDeque<T>, item: T) {
    if recent.len() == MOST_LINES {
        recent.pop_front();
    }
    recent.push_back(item);
}

fn mean(values: &[f64]) -> Option<f64> {
    (!values.is_empty()).then(|| values.iter().sum::<f64>() / values.len() as f64)
}

/// The experimental standard deviation (JCGM 100 4.2.2); `None` for fewer than two values.
fn deviation(values: &[f64]) -> Option<f64> {
    let mean = mean(values).filter(|_| values.len() > 1)?;
    let squares: f64 = values.iter().map(|v| (v - mean).powi(2)).sum();
    Some((squares / (values.len() - 1) as f64).sqrt())
}

#[cfg(test)]
mod tests {
    use super::super::Sample;
    use super::*;
    use crate::quantity::{Moment, Utc};

    fn event(ms: u64, what: LoggerEvent) -> FromLogger {
        FromLogger { logger: 0, received: Moment { mono: Mono(ms), utc: Utc(ms as i64) }, what }
    }

    fn line(ms: u64, volts: f64) -> FromLogger {
        event(ms, LoggerEvent::Sample(Sample { logger_ms: None, values: vec![(0, volts)] }))
    }

    fn close(found: Option<f64>, expected: f64) -> bool {
        found.is_some_and(|found| (found - expected).abs() < 1e-9)
    }

    #[test]
    fn noise_is_the_experimental_standard_deviation_of_the_last_ten_seconds() {
        let mut listening = Listening::new(["mains", "rail"]);
        listening.take(&line(0, 1_000.0));
        // JCGM 100 4.2.2, by hand: 229, 230, 231, 230 have the mean 230 and s² = 2/3.
        for (i, volts) in [229.0, 230.0, 231.0, 230.0].into_iter().enumerate() {
            listening.take(&line(20_000 + 1_000 * i as u64, volts));
        }
        let tally = listening.tally(Mono(23_500));
        let mains = &tally.channels[0];
        assert_eq!((mains.values, mains.last_v, mains.last_age_s), (5, Some(230.0), Some(0.5)));
        assert!(close(mains.mean_v, 230.0) && close(mains.noise_v, (2f64 / 3.0).sqrt()), "{mains:?}");
        let rail = &tally.channels[1];
        assert_eq!((rail.values, rail.last_v, rail.mean_v, rail.noise_v), (0, None, None, None));
        // Twelve seconds of silence later nothing is left to judge.
        let silent = listening.tally(Mono(36_000));
        assert_eq!((silent.rate_per_s, silent.jitter_ms, silent.channels[0].noise_v), (None, None, None));
    }

    #[test]
    fn rate_and_jitter_are_those_of_the_arrivals() {
        let mut listening = Listening::new(["mains"]);
        for ms in [0, 90, 200, 290, 400] {
            listening.take(&line(ms, 230.0));
        }
        // Gaps of 90, 110, 90 and 110 ms: mean 100 ms, s² = 4·100/3.
        let tally = listening.tally(Mono(400));
        assert!(close(tally.rate_per_s, 10.0) && close(tally.jitter_ms, (400f64 / 3.0).sqrt()), "{tally:?}");
        listening.take(&event(5_000, LoggerEvent::Connected { port: "/dev/ttyACM0".to_owned() }));
        listening.take(&line(5_100, 230.0));
        assert_eq!(listening.tally(Mono(5_100)).rate_per_s, None, "the pause before is no gap");
    }

    #[test]
    fn what_goes_wrong_is_counted_by_reason() {
        let mut listening = Listening::new(["mains"]);
        let events = [
            LoggerEvent::Connected { port: "/dev/ttyACM0".to_owned() },
            LoggerEvent::Fault(LineFault::Checksum),
            LoggerEvent::Fault(LineFault::Garbage),
            LoggerEvent::Fault(LineFault::Checksum),
            LoggerEvent::Lost { lines: 3 },
            LoggerEvent::Restarted,
            LoggerEvent::ReadHangs,
        ];
        events.into_iter().for_each(|what| listening.take(&event(1, what)));
        let tally = listening.tally(Mono(1));
        assert_eq!(tally.faults, BTreeMap::from([(LineFault::Garbage, 1), (LineFault::Checksum, 2)]));
        assert_eq!((tally.lines, tally.lost_lines, tally.restarts, tally.hangs), (0, 3, 1, 1));
        assert_eq!(tally.port.as_deref(), Some("/dev/ttyACM0"));
        listening.take(&event(2, LoggerEvent::Disconnected { why: "unplugged".to_owned() }));
        assert_eq!(listening.tally(Mono(2)).port, None);
    }

    #[test]
    fn a_flood_is_kept_within_bounds() {
        let mut listening = Listening::new(["mains"]);
        (0..20_000).for_each(|i| listening.take(&line(i / 20, 230.0)));
        assert_eq!(listening.arrivals.len(), MOST_LINES);
        assert_eq!(listening.channels[0].recent.len(), MOST_LINES);
        let tally = listening.tally(Mono(1_000));
        assert!((tally.rate_per_s.unwrap() - 20_000.0).abs() < 200.0, "{tally:?}");
    }
}
