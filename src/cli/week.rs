//! `railtide week`: a week of evidence.

use std::io::Cursor;
use std::path::PathBuf;
use std::time::Duration;

use anyhow::{Context, bail};
use clap::{Args, ValueEnum};

use super::stretch::{Stretch, StretchArguments, week_before};
use crate::clock::Clock;
use crate::config::Site;
use crate::mains::Sample;
use crate::reading::ChannelQuantity;
use crate::report::week::{MainsRecord, Week, week_html, week_text, week_workbook};
use crate::store::{Store, StoredChannel};
use crate::watch::rail_watches;

/// Arguments of `week`.
#[derive(Debug, Args)]
pub(super) struct WeekCommand {
    #[command(flatten)]
    stretch: StretchArguments,
    /// How: text for people, `json` for programs, one self-contained `html` page, `xlsx` with the same tables.
    #[arg(long, value_enum, default_value_t)]
    format: WeekFormat,
    /// Into this file; a workbook needs one.
    #[arg(long, short, value_name = "FILE")]
    out: Option<PathBuf>,
}

#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum WeekFormat {
    #[default]
    Text,
    Json,
    Html,
    Xlsx,
}

impl WeekCommand {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let store = super::site::open_record(&site)?;
        let now = Clock::system().now().utc;
        let asked = self.stretch.resolve(site.time_zone, now)?;
        let stretch = asked.unwrap_or_else(|| week_before(now, site.time_zone));
        let mains = mains_of(&site, &store)?;
        let (period, samples, intervals) = match &mains {
            Some(mains) => recorded(&store, mains, stretch)?,
            None => (Duration::from_secs(1), Vec::new(), Vec::new()),
        };
        let record = MainsRecord {
            channel: mains.and_then(|m| site.channels().map(|(_, c)| c).find(|c| c.name == m.name)),
            sample_period: period,
            samples: &samples,
            intervals: &intervals,
        };
        let projections = super::site::projections(&site)?;
        let projectors: Vec<_> = projections.into_iter().map(|projecting| projecting.projector).collect();
        let rails = rail_watches(&site, &projectors);
        let findings = super::site::findings(&site, &projectors);
        let week = Week::new(&site, stretch.from, stretch.to, &record, &rails, &findings);
        self.give(&week)
    }

    fn give(&self, week: &Week<'_>) -> anyhow::Result<()> {
        let bytes = match self.format {
            WeekFormat::Json => (serde_json::to_string_pretty(week)? + "\n").into_bytes(),
            WeekFormat::Text => {
                let mut text = String::new();
                week_text(week, &mut text)?;
                text.into_bytes()
            }
            WeekFormat::Html => {
                let mut html = String::new();
                week_html(week, &mut html)?;
                html.into_bytes()
            }
            WeekFormat::Xlsx if self.out.is_none() => bail!("a workbook is no text; name a file with --out"),
            WeekFormat::Xlsx => {
                let mut book = Cursor::new(Vec::new());
                week_workbook(week, &mut book)?;
                book.into_inner()
            }
        };
        match &self.out {
            Some(file) => {
                std::fs::write(file, bytes)
                    .with_context(|| format!("{} can't be written", file.display()))?;
                super::remark(&format!("the week is in {}", file.display()))
            }
            None => super::print(&String::from_utf8(bytes)?),
        }
    }
}

/// The mains channel of the record: the config's, or the first that is there where the config names none.
pub(super) fn mains_of(site: &Site, store: &Store) -> anyhow::Result<Option<StoredChannel>> {
    let named = site.channels().map(|(_, c)| c).find(|c| c.quantity == ChannelQuantity::MainsRms);
    let stored = store.channels()?;
    Ok(match named {
        Some(named) => stored.into_iter().find(|c| c.name == named.name),
        None => stored.into_iter().find(|c| c.quantity == ChannelQuantity::MainsRms),
    })
}

type Recorded = (Duration, Vec<Sample>, Vec<crate::mains::Interval>);

/// What the record holds of `mains`: the usual step between readings, the sound readings, the intervals.
fn recorded(store: &Store, mains: &StoredChannel, stretch: Stretch) -> anyhow::Result<Recorded> {
    let Stretch { from, to } = stretch;
    let mut samples: Vec<Sample> = Vec::new();
    store.each_hour(mains.id, from, to, |readings| {
        samples
            .extend(readings.iter().filter(|r| r.quality.value_is_sound()).map(|r| (r.at, r.value.volts())));
    })?;
    let period = store.sample_period(mains.id, from, to)?;
    Ok((period, samples, store.intervals(mains.id, from, to)?))
}
