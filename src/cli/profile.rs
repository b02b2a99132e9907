//! `railtide profile`: the household's day and the tide table.

use std::io;
use std::path::PathBuf;
use std::time::Duration;

use anyhow::Context;
use clap::{Args, ValueEnum};

use super::stretch::{Stretch, StretchArguments, instant};
use crate::clock::Clock;
use crate::config::Site;
use crate::mains::{HISTORY, INTERVAL, Interval, forecast, intervals_of};
use crate::quantity::Utc;
use crate::report::{Known, Profile as Report, profile_csv, profile_html, profile_text};
use crate::store::{Store, StoreError, StoredChannel};
use crate::watch::mains_channel;

/// Looked back over where no stretch is asked for.
const FOUR_WEEKS: Duration = Duration::from_secs(28 * 86_400);
const DAY: Duration = Duration::from_secs(86_400);
const WEEK: Duration = Duration::from_secs(7 * 86_400);
const QUARTER: Duration = Duration::from_secs(900);

/// Arguments of `profile`.
#[derive(Debug, Args)]
pub(super) struct Profile {
    #[command(flatten)]
    stretch: StretchArguments,
    /// Makes everything from what was known at this time; without it, now.
    #[arg(long, value_name = "TIME")]
    as_of: Option<String>,
    /// How many hours the tide table looks ahead.
    #[arg(long, value_name = "HOURS", default_value_t = 48, value_parser = clap::value_parser!(u64).range(1..=48))]
    hours: u64,
    /// Which drawing `--format svg` gives.
    #[arg(long, value_enum, default_value_t)]
    chart: Chart,
    /// How to print.
    #[arg(long, value_enum, default_value_t)]
    format: ProfileFormat,
}

#[derive(Clone, Copy, Debug, Default, ValueEnum)]
enum Chart {
    /// The last 24 hours, and what is expected.
    #[default]
    Tide,
    /// Mains by time of day.
    Day,
}

#[derive(Clone, Copy, Debug, Default, ValueEnum)]
enum ProfileFormat {
    /// For people.
    #[default]
    Text,
    /// For programs: SI units in the keys, RFC 3339 times.
    Json,
    /// The days by time of day, a row each.
    Csv,
    /// One file for a browser or a printer, which needs nothing else.
    Html,
    /// One drawing: the last 24 hours and the tide table, or the day (`--chart`).
    Svg,
}

impl Profile {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let store = super::site::open_record(&site)?;
        let now = Clock::system().now().utc;
        let as_of =
            self.as_of.as_deref().map(|text| instant(text, site.time_zone)).transpose()?.unwrap_or(now);
        let asked = self.stretch.resolve(site.time_zone, as_of)?;
        let stretch = asked.unwrap_or(Stretch { from: as_of - FOUR_WEEKS, to: as_of });
        let to = stretch.to.min(as_of);
        let mains = mains(&site, &store)?;
        let known = |from: Utc, to: Utc| -> Result<Vec<Interval>, StoreError> {
            mains.as_ref().map_or(Ok(Vec::new()), |channel| store.intervals(channel.id, from, to))
        };
        let intervals = known(stretch.from, to)?;
        let quarters = match &mains {
            Some(channel) => quarters(&store, channel, stretch.from.max(to - WEEK), to)?,
            None => Vec::new(),
        };
        let issued_at = Interval::start_of(as_of, INTERVAL);
        let before = known(issued_at - HISTORY, issued_at)?;
        let day_before = before.partition_point(|i| i.start < issued_at - DAY);
        let tide = forecast(&before, as_of, Duration::from_secs(3600 * self.hours), site.time_zone);
        let projectors: Vec<_> = super::site::projections(&site)?.into_iter().map(|p| p.projector).collect();
        let known = Known {
            from: stretch.from,
            to,
            before: &before[day_before..],
            intervals: &intervals,
            quarters: &quarters,
            as_of,
            tide: &tide,
        };
        let profile = Report::new(&site, &projectors, &known);
        match self.format {
            ProfileFormat::Json => super::print_json(&profile),
            ProfileFormat::Csv => Ok(profile_csv(&profile, io::stdout().lock())?),
            ProfileFormat::Html => {
                let mut page = String::new();
                profile_html(&profile, &mut page)?;
                super::print(&page)
            }
            ProfileFormat::Svg => super::print(&match self.chart {
                Chart::Tide => profile.tide_svg(),
                Chart::Day => profile.day_svg(),
            }),
            ProfileFormat::Text => {
                let mut text = String::new();
                profile_text(&profile, &mut text)?;
                super::print(&text)
            }
        }
    }
}

/// What the record calls the mains channel; `None` while it has never been recorded.
fn mains(site: &Site, store: &Store) -> anyhow::Result<Option<StoredChannel>> {
    let (_, channel) = mains_channel(site)
        .and_then(|i| site.channels().nth(i))
        .context("the config has no channel for mains, so there is no day to show; add one with quantity = \"mains_rms\"")?;
    Ok(store.channels()?.into_iter().find(|c| c.name == channel.name))
}

fn quarters(store: &Store, channel: &StoredChannel, from: Utc, to: Utc) -> Result<Vec<Interval>, StoreError> {
    let readings = store.readings(channel.id, from, to).collect::<Result<Vec<_>, _>>()?;
    let period = Duration::from_millis(u64::from(channel.sample_period_ms));
    let mut quarters = intervals_of(QUARTER, readings, period);
    // One or two readings are a moment, no quarter hour; five-minute means of an import are three.
    quarters.retain(|q| q.count >= 3);
    Ok(quarters)
}
