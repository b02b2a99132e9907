//! What the simulated logger writes: its tide lines, and the faults that were asked for.

use std::collections::VecDeque;
use std::str::FromStr;

use super::dice::Dice;
use crate::logger::{Unwritable, write_line};

/// A fault of a logger or its line; it befalls the next line, or as many of the next ones as it says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Fault {
    /// The line breaks off somewhere, and the next one follows at once.
    TornLine,
    /// One bit of the line is wrong.
    BitError,
    /// Up to 64 bytes of noise before the line.
    Garbage,
    /// Nothing is sent, while the logger goes on counting.
    Silence {
        /// For how many lines.
        lines: u32,
    },
    /// The logger starts again: sequence and milliseconds begin at nought.
    Restart,
    /// The values stay as they are.
    Stuck {
        /// For how many lines.
        lines: u32,
    },
}

/// No fault has that name.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("no fault is called {found:?}: use torn, bits, garbage, silence, restart or stuck")]
pub struct UnknownFault {
    /// What was given.
    pub found: String,
}

impl FromStr for Fault {
    type Err = UnknownFault;

    /// `torn`, `bits`, `garbage`, `silence` (30 lines), `restart` or `stuck` (60 lines).
    fn from_str(word: &str) -> Result<Self, UnknownFault> {
        match word {
            "torn" => Ok(Fault::TornLine),
            "bits" => Ok(Fault::BitError),
            "garbage" => Ok(Fault::Garbage),
            "silence" => Ok(Fault::Silence { lines: 30 }),
            "restart" => Ok(Fault::Restart),
            "stuck" => Ok(Fault::Stuck { lines: 60 }),
            _ => Err(UnknownFault { found: word.to_owned() }),
        }
    }
}

/// The logger's firmware: numbers its lines, and commits the faults it was asked for.
#[derive(Clone, Debug)]
pub(super) struct LineMaker {
    dice: Dice,
    /// How often chance was asked.
    rolls: i64,
    sequence: u32,
    started_ms: u64,
    faults: VecDeque<Fault>,
    silent_lines: u32,
    stuck_lines: u32,
    stuck_at: Vec<Option<i32>>,
}

impl LineMaker {
    pub(super) fn new(seed: u64) -> Self {
        LineMaker {
            dice: Dice::new(seed),
            rolls: 0,
            sequence: 0,
            started_ms: 0,
            faults: VecDeque::new(),
            silent_lines: 0,
            stuck_lines: 0,
            stuck_at: Vec::new(),
        }
    }

    /// Asks for a fault; several befall one line each, in order.
    pub(super) fn ask_for(&mut self, fault: Fault) {
        self.faults.push_back(fault);
    }

    /// The bytes of the next line, `now_ms` after the port was first opened.
    pub(super) fn next_line(
        &mut self,
        now_ms: u64,
        values: &[(&str, Option<i32>)],
    ) -> Result<Vec<u8>, Unwritable> {
        let fault = self.faults.pop_front();
        match fault {
            Some(Fault::Restart) => {
                self.sequence = 0;
                self.started_ms = now_ms;
            }
            Some(Fault::Silence { lines }) => self.silent_lines = lines,
            Some(Fault::Stuck { lines }) => {
                self.stuck_lines = lines;
                self.stuck_at = values.iter().map(|&(_, mv)| mv).collect();
            }
            Some(Fault::TornLine | Fault::BitError | Fault::Garbage) | None => {}
        }
        let stuck = self.stuck_lines > 0;
        self.stuck_lines = self.stuck_lines.saturating_sub(1);
        let shown = values.iter().enumerate().map(|(i, &(name, mv))| {
            let stuck_at = self.stuck_at.get(i).copied().filter(|_| stuck);
            (name, stuck_at.unwrap_or(mv))
        });
        let mut line = Vec::with_capacity(64);
        write_line(&mut line, self.sequence, now_ms - self.started_ms, shown)?;
        self.sequence = self.sequence.wrapping_add(1);
        if self.silent_lines > 0 {
            self.silent_lines -= 1;
            return Ok(Vec::new());
        }
        match fault {
            // At least the start mark stays, and at least the line's end goes.
            Some(Fault::TornLine) => line.truncate(1 + self.roll(line.len() - 1)),
            Some(Fault::BitError) => {
                let at = self.roll(line.len() - 1);
                line[at] ^= 1 << self.roll(8);
            }
            Some(Fault::Garbage) => {
                let noise: Vec<u8> = (0..=self.roll(64)).map(|_| self.roll(256) as u8).collect();
                line.splice(0..0, noise);
            }
            Some(Fault::Restart | Fault::Silence { .. } | Fault::Stuck { .. }) | None => {}
        }
        Ok(line)
    }

    /// A number below `sides`.
    fn roll(&mut self, sides: usize) -> usize {
        self.rolls += 1;
        (self.dice.bits(0, self.rolls) % sides as u64) as usize
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::logger::{Decoder, LineFault, LoggerEvent, Sample};
    use crate::quantity::{Moment, Mono, Utc};

    /// Ten lines, 100 ms apart, counting up in mV; the fault befalls the fourth.
    fn heard(fault: Fault) -> Vec<LoggerEvent> {
        let mut maker = LineMaker::new(42);
        let mut decoder = Decoder::new(0, ["mains"]);
        let mut out = Vec::new();
        for i in 0..10 {
            if i == 3 {
                maker.ask_for(fault);
            }
            let bytes = maker.next_line(i * 100, &[("mains", Some(i as i32 * 1000))]).unwrap();
            decoder.feed(&bytes, Moment { mono: Mono(0), utc: Utc(0) }, &mut out);
        }
        out.into_iter().map(|event| event.what).collect()
    }

    fn sample(ms: u64, volts: f64) -> LoggerEvent {
        LoggerEvent::Sample(Sample { logger_ms: Some(ms), values: vec![(0, volts)] })
    }

    fn samples(from: u64, to: u64) -> Vec<LoggerEvent> {
        (from..to).map(|i| sample(i * 100, i as f64)).collect()
    }

    #[test]
    fn a_torn_line_or_a_wrong_bit_costs_one_line() {
        let torn = [LoggerEvent::Fault(LineFault::Garbage), LoggerEvent::Lost { lines: 1 }];
        assert_eq!(heard(Fault::TornLine), [samples(0, 3), torn.to_vec(), samples(4, 10)].concat());
        let wrong = heard(Fault::BitError);
        assert!(matches!(wrong[3], LoggerEvent::Fault(_)), "{wrong:?}");
        assert_eq!(wrong[wrong.len() - 6..], samples(4, 10));
    }

    #[test]
    fn garbage_costs_no_line() {
        let events = heard(Fault::Garbage);
        assert!(matches!(events[3], LoggerEvent::Fault(_)), "{events:?}");
        assert_eq!(events[events.len() - 7..], samples(3, 10));
    }

    #[test]
    fn silence_shows_as_lost_lines_and_a_restart_as_one() {
        let silent = heard(Fault::Silence { lines: 4 });
        assert_eq!(silent, [samples(0, 3), vec![LoggerEvent::Lost { lines: 4 }], samples(7, 10)].concat());
        let restarted = heard(Fault::Restart);
        assert_eq!(restarted[3], LoggerEvent::Restarted);
        assert_eq!(restarted[4..6], [sample(0, 3.0), sample(100, 4.0)]);
    }

    #[test]
    fn a_stuck_value_stays_for_as_long_as_asked() {
        let volts: Vec<f64> = heard(Fault::Stuck { lines: 4 })
            .iter()
            .map(|event| match event {
                LoggerEvent::Sample(sample) => sample.values[0].1,
                other => panic!("{other:?}"),
            })
            .collect();
        assert_eq!(volts, [0.0, 1.0, 2.0, 3.0, 3.0, 3.0, 3.0, 7.0, 8.0, 9.0]);
    }

    #[test]
    fn each_fault_has_a_word() {
        assert_eq!("stuck".parse(), Ok(Fault::Stuck { lines: 60 }));
        let wrong = "fire".parse::<Fault>().unwrap_err();
        assert!(wrong.to_string().contains("\"fire\"") && wrong.to_string().contains("torn"));
    }
}
