//! `railtide simulate`: the simulated logger alone, on a pseudo-terminal.

use std::path::PathBuf;
use std::time::Duration;

use chrono::{DateTime, Utc as ChronoUtc};
use clap::Args;

use super::stop::Stop;
use crate::clock::Clock;
use crate::logger::simulated::{Fault, Hall, LiveHall, SimulatedLogger};
use crate::quantity::Utc;

/// Arguments of `simulate`.
#[derive(Debug, Args)]
pub(super) struct Simulate {
    /// Another seed, another hall with the same habits.
    #[arg(long, default_value_t = 1)]
    seed: u64,
    /// How much faster the hall's time runs than the clock.
    #[arg(long, default_value_t = 1.0, value_name = "TIMES", value_parser = positive)]
    speed: f64,
    /// The hall's time at the start (RFC 3339); without it, now.
    #[arg(long, value_name = "TIME")]
    from: Option<DateTime<ChronoUtc>>,
    /// From line to line.
    #[arg(long, default_value = "1s", value_name = "SPAN", value_parser = humantime::parse_duration)]
    period: Duration,
    /// Makes a symbolic link to the port, and removes it at the end.
    #[arg(long, value_name = "PATH")]
    link: Option<PathBuf>,
    /// A fault that comes every minute, in turn with the others: torn, bits, garbage, silence, restart, stuck.
    #[arg(long, value_name = "FAULT")]
    fault: Vec<Fault>,
    /// Leaves the rail out: mains alone.
    #[arg(long)]
    mains_only: bool,
}

impl Simulate {
    pub(super) fn run(self) -> anyhow::Result<()> {
        super::runtime()?.block_on(async {
            let stop = Stop::listen()?;
            let clock = Clock::system();
            let from = self.from.map_or(clock.now().utc, |t| Utc(t.timestamp_millis()));
            let mut live = LiveHall::new(Hall::new(self.seed), from);
            live.speed = self.speed;
            live.fault_every = (60.0 / self.period.as_secs_f64().max(0.001)).ceil() as u32;
            live.period = self.period;
            live.faults = self.fault;
            if self.mains_only {
                live.rail_channel = None;
            }
            let channels = if self.mains_only { "mains" } else { "mains, hall.reservoir" };
            let logger = SimulatedLogger::start(live, self.link, clock)?;
            let port = logger.port().map_or(String::new(), |p| p.display().to_string());
            super::print(&format!("{port}\n"))?;
            super::remark(&format!(
                "The simulated logger sends {channels} as tide lines to the port above until Ctrl-C; its figures are made up."
            ))?;
            stop.asked().await;
            Ok(())
        })
    }
}

fn positive(text: &str) -> Result<f64, String> {
    match text.parse() {
        Ok(number) if number > 0.0 && f64::is_finite(number) => Ok(number),
        _ => Err("expected a number above 0, such as 60".to_owned()),
    }
}
