//! `railtide listen`: watches a logger decode, storing nothing.

use std::path::PathBuf;
use std::time::Duration;

use anyhow::{Context, bail};
use clap::Args;
use tokio::sync::mpsc;

use super::Format;
use super::stop::Stop;
use crate::clock::Clock;
use crate::config::{LoggerSettings, Site};
use crate::logger::{self, FromLogger, Listening, LoggerEvent, Tally};

/// A tally is printed this often.
const SAY_EVERY: Duration = Duration::from_secs(1);

/// Arguments of `listen`.
#[derive(Debug, Args)]
pub(super) struct Listen {
    /// The logger's name, where the config has several.
    logger: Option<String>,
    /// Ends after this long; without it, at Ctrl-C.
    #[arg(long, value_name = "SPAN", value_parser = humantime::parse_duration)]
    r#for: Option<Duration>,
    /// How to print: `json` gives one tally a line.
    #[arg(long, value_enum, default_value_t)]
    format: Format,
}

impl Listen {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let settings = self.choose(&site)?;
        super::runtime()?.block_on(self.listen(settings))
    }

    fn choose<'s>(&self, site: &'s Site) -> anyhow::Result<&'s LoggerSettings> {
        match (&self.logger, site.loggers.as_slice()) {
            (_, []) => bail!("the config names no [[logger]]"),
            (None, [only]) => Ok(only),
            (None, several) => {
                let names: Vec<&str> = several.iter().map(|l| l.name.as_str()).collect();
                bail!("which logger? The config names {}", names.join(", "))
            }
            (Some(name), loggers) => loggers
                .iter()
                .find(|l| l.name == *name)
                .with_context(|| format!("the config names no logger \"{name}\"")),
        }
    }

    async fn listen(&self, settings: &LoggerSettings) -> anyhow::Result<()> {
        let stop = Stop::listen()?;
        let clock = Clock::system();
        let (events_tx, mut events) = mpsc::channel(1024);
        let port = logger::spawn(0, settings, clock.clone(), events_tx)?;
        let mut listening = Listening::new(settings.channels.iter().map(|c| c.name.as_str()));
        let ends = async {
            match self.r#for {
                Some(span) => clock.sleep(span).await,
                None => std::future::pending().await,
            }
        };
        tokio::pin!(ends);
        let stopped = stop.asked();
        tokio::pin!(stopped);
        let mut say_at = clock.now().mono + SAY_EVERY;
        loop {
            tokio::select! {
                () = &mut stopped => break,
                () = &mut ends => break,
                () = clock.sleep_until(say_at) => {
                    self.say(&listening.tally(clock.now().mono))?;
                    say_at = say_at + SAY_EVERY;
                }
                Some(event) = events.recv() => {
                    if let Some(line) = remark(&event) {
                        super::remark(&line)?;
                    }
                    listening.take(&event);
                }
            }
        }
        self.say(&listening.tally(clock.now().mono))?;
        drop(events);
        tokio::task::spawn_blocking(move || port.stop()).await??;
        Ok(())
    }

    fn say(&self, tally: &Tally) -> anyhow::Result<()> {
        match self.format {
            Format::Json => super::print(&(serde_json::to_string(tally)? + "\n")),
            Format::Text => super::print(&(sentence(tally) + "\n")),
        }
    }
}

/// What is worth saying when it happens.
fn remark(event: &FromLogger) -> Option<String> {
    match &event.what {
        LoggerEvent::Connected { port } => Some(format!("listening on {port}")),
        LoggerEvent::Disconnected { why } => Some(why.clone()),
        LoggerEvent::Restarted => Some("the logger has started again".to_owned()),
        LoggerEvent::ReadHangs => Some("a read has not returned; look at the adapter".to_owned()),
        LoggerEvent::Fault(fault) => Some(fault.sentence().to_owned()),
        LoggerEvent::Sample(_) | LoggerEvent::Lost { .. } => None,
    }
}

fn sentence(tally: &Tally) -> String {
    let mut text = format!("{} lines", tally.lines);
    if let Some(rate) = tally.rate_per_s {
        text += &format!(", {rate:.2} a second");
    }
    if let Some(jitter) = tally.jitter_ms {
        text += &format!(", jitter {jitter:.1} ms");
    }
    for channel in &tally.channels {
        match (channel.last_v, channel.noise_v) {
            (Some(v), Some(noise)) => text += &format!("; {} {v:.3} V, noise {noise:.3} V", channel.name),
            (Some(v), None) => text += &format!("; {} {v:.3} V", channel.name),
            (None, _) => text += &format!("; {} not heard", channel.name),
        }
    }
    if tally.lost_lines > 0 {
        text += &format!("; {} lines lost", tally.lost_lines);
    }
    for (fault, count) in &tally.faults {
        text += &format!("; {count} × {}", fault.word());
    }
    text
}
