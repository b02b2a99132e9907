//! `railtide import`: another recorder's readings into the record.

use std::collections::BTreeMap;
use std::fs::File;
use std::io::{self, BufRead, BufReader, IsTerminal};
use std::path::{Path, PathBuf};
use std::time::Duration;

use anyhow::{Context, anyhow, bail};
use chrono_tz::Tz;
use clap::{Args, ValueEnum};
use indicatif::{ProgressBar, ProgressStyle};

use crate::config::Site;
use crate::logger::recording::{
    Column, Layout, Recording, RowFault, TimeColumns, TimeFormat, guess_separator,
};
use crate::quantity::{Millivolts, Utc};
use crate::reading::{ChannelId, ChannelQuantity, Quality, Reading};
use crate::report::{LocalTime, span};
use crate::store::{ChannelSpec, Lock, OpenOptions, Store, StoreError};
use crate::watch::is_plausible;

/// Rows that are held before they're merged: about 24 MB.
const ROWS_AT_A_TIME: usize = 1_000_000;
/// Rows that the sample period is found from.
const ROWS_FOR_PERIOD: usize = 10_000;
/// Rows that `--dry-run` shows.
const ROWS_SHOWN: usize = 5;
/// Lines that are named for each fault.
const LINES_NAMED: usize = 5;

/// Arguments of `import`.
#[derive(Debug, Args)]
pub(super) struct Import {
    /// The recording: text with one reading a line. `-` is standard input.
    file: PathBuf,
    /// The channel that the readings are of.
    #[arg(long, value_name = "NAME")]
    channel: String,
    /// What a channel that the record doesn't know yet measures.
    #[arg(long, value_enum, default_value_t)]
    quantity: Quantity,
    /// The column of the time, by its name or number (the first is 1).
    #[arg(long, value_name = "COLUMN", default_value = "1")]
    time: String,
    /// The column of the day, where day and time have each their own.
    #[arg(long, value_name = "COLUMN")]
    date: Option<String>,
    /// The column of the value.
    #[arg(long, value_name = "COLUMN", default_value = "2")]
    value: String,
    /// How times are written: `year-first`, `epoch-s`, `epoch-ms`, or letters such as "%d/%m/%Y %H:%M:%S". Without it, it is
    /// found from the first row where that tells.
    #[arg(long, value_name = "FORMAT")]
    time_format: Option<String>,
    /// The zone of times that bear no offset; without it, the site's.
    #[arg(long, value_name = "ZONE")]
    zone: Option<Tz>,
    /// What one unit of the recording is in volts, for example 0.001 for millivolts.
    #[arg(long, value_name = "FACTOR", default_value_t = 1.0)]
    scale: f64,
    /// What stands between columns; without it, it is found from the first line.
    #[arg(long, value_name = "CHARACTER")]
    separator: Option<char>,
    /// What stands before the decimals; without it, a comma where columns are parted by semicolons or tabs and the first
    /// values have one.
    #[arg(long, value_name = "CHARACTER", value_parser = ["." , ","])]
    decimal: Option<String>,
    /// The first line is a row, and names no columns.
    #[arg(long)]
    no_header: bool,
    /// Lines to pass over before the header.
    #[arg(long, value_name = "N", default_value_t = 0)]
    skip_lines: u64,
    /// How long each reading stands for; without it, it is found from the times.
    #[arg(long, value_name = "SPAN", value_parser = humantime::parse_duration)]
    sample_period: Option<Duration>,
    /// Whether a time marks the start or the end of what its reading stands for.
    #[arg(long, value_enum, default_value_t)]
    marks: Marks,
    /// Shows the first rows as they are understood, and changes nothing.
    #[arg(long)]
    dry_run: bool,
}

#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum Quantity {
    /// The mains, V r.m.s.
    #[default]
    Mains,
    /// A rail, V.
    Rail,
}

#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum Marks {
    #[default]
    Start,
    End,
}

/// What became of the rows.
#[derive(Debug, Default)]
struct Tally {
    good: u64,
    implausible: u64,
    refused: u64,
    faults: BTreeMap<RowFault, (u64, Vec<u64>)>,
}

impl Import {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let input: Box<dyn io::Read> = if self.file == Path::new("-") {
            Box::new(io::stdin().lock())
        } else {
            let opened = File::open(&self.file);
            Box::new(opened.with_context(|| format!("{} can't be read", self.file.display()))?)
        };
        let mut input = BufReader::with_capacity(1 << 16, input);
        let layout = self.layout(&mut input, &site)?;
        let mut recording = Recording::open(input, layout).map_err(|e| anyhow!(e))?;
        let mut tally = Tally::default();
        let first = take_rows(&mut recording, ROWS_FOR_PERIOD, &mut tally)?;
        let period = match self.sample_period {
            Some(period) => period,
            None => usual_step(&first).context(
                "the recording's sample period can't be found from its times; give --sample-period, for example 1s",
            )?,
        };
        if self.dry_run {
            return self.show(&site, &first, period, &tally);
        }
        let (mut store, _lock) = open_for_import(&site)?;
        let channel = self.channel_id(&site, &mut store)?;
        let bar = counter()?;
        let mut rows = first;
        while !rows.is_empty() {
            let readings = self.readings(&site, channel, period, &rows, &mut tally);
            tally.refused += store.merge_recording(channel, period.as_millis() as u32, readings)?;
            bar.set_position(tally.good);
            rows = take_rows(&mut recording, ROWS_AT_A_TIME, &mut tally)?;
        }
        bar.finish_and_clear();
        super::print(&self.said(period, &tally, recording.ambiguous()))
    }

    fn layout(&self, input: &mut impl BufRead, site: &Site) -> anyhow::Result<Layout> {
        let mut passed = Vec::new();
        for _ in 0..self.skip_lines {
            input.read_until(b'\n', &mut passed)?;
        }
        // The buffer holds the first lines; looking takes nothing away.
        let head = String::from_utf8_lossy(input.fill_buf()?).into_owned();
        let mut lines = head.lines();
        let first = lines.next().unwrap_or_default();
        let separator = match self.separator {
            Some(separator) => {
                u8::try_from(separator).map_err(|_| anyhow!("--separator is one ASCII character"))?
            }
            None => guess_separator(first),
        };
        let sample = lines.next().unwrap_or(first);
        let has_comma = separator != b',' && sample.contains(',') && !sample.contains('.');
        let decimal = match self.decimal.as_deref() {
            Some(",") => b',',
            Some(_) => b'.',
            None => {
                if has_comma {
                    b','
                } else {
                    b'.'
                }
            }
        };
        let time_format = self.time_format.as_deref().map(|format| match format {
            "year-first" => TimeFormat::YearFirst,
            "epoch-s" => TimeFormat::EpochSeconds,
            "epoch-ms" => TimeFormat::EpochMilliseconds,
            letters => TimeFormat::Letters(letters.to_owned()),
        });
        Ok(Layout {
            separator,
            decimal,
            skip_lines: self.skip_lines,
            header: !self.no_header,
            time: TimeColumns {
                date: self.date.as_deref().map(Column::from_word),
                time: Column::from_word(&self.time),
            },
            time_format,
            zone: self.zone.unwrap_or(site.time_zone),
            value: Column::from_word(&self.value),
            scale: self.scale,
        })
    }

    fn quantity(&self, site: &Site) -> ChannelQuantity {
        let configured = site.channels().find(|(_, c)| c.name == self.channel).map(|(_, c)| c.quantity);
        configured.unwrap_or(match self.quantity {
            Quantity::Mains => ChannelQuantity::MainsRms,
            Quantity::Rail => ChannelQuantity::Rail,
        })
    }

    /// The channel's number; a channel that is new to the record gets one, which only the record's owner may give.
    fn channel_id(&self, site: &Site, store: &mut Store) -> anyhow::Result<ChannelId> {
        if let Some(known) = store.channels()?.iter().find(|c| c.name == self.channel) {
            return Ok(known.id);
        }
        let spec = crate::daemon::channel_specs(site).into_iter().find(|spec| spec.name == self.channel);
        let spec = spec.unwrap_or_else(|| ChannelSpec {
            name: self.channel.clone(),
            was: None,
            quantity: self.quantity(site),
            sample_period_ms: 1000,
            amplifier: None,
            node: None,
        });
        Ok(store.register_channels(&[spec])?[0])
    }

    fn start_of(&self, at: Utc, period: Duration) -> Utc {
        match self.marks {
            Marks::Start => at,
            Marks::End => Utc(at.0 - period.as_millis() as i64),
        }
    }

    fn readings(
        &self,
        site: &Site,
        channel: ChannelId,
        period: Duration,
        rows: &[(Utc, Millivolts)],
        tally: &mut Tally,
    ) -> Vec<Reading> {
        let quantity = self.quantity(site);
        rows.iter()
            .map(|(at, value)| {
                let sound = is_plausible(quantity, value.volts(), site.declared_v);
                tally.implausible += u64::from(!sound);
                let quality = if sound { Quality::Good } else { Quality::OutOfRange };
                Reading { channel, at: self.start_of(*at, period), value: *value, quality }
            })
            .collect()
    }

    fn show(
        &self,
        site: &Site,
        rows: &[(Utc, Millivolts)],
        period: Duration,
        tally: &Tally,
    ) -> anyhow::Result<()> {
        let mut text = format!(
            "Understood as readings of \"{}\", each standing for {}; nothing is stored.\n",
            self.channel,
            said_period(period)
        );
        for (at, value) in rows.iter().take(ROWS_SHOWN) {
            let local = LocalTime::of(self.start_of(*at, period), site.time_zone);
            text += &format!("  {}  {:.3} V\n", local.rfc3339(), value.volts());
        }
        text += &faults_text(tally);
        super::print(&text)
    }

    fn said(&self, period: Duration, tally: &Tally, ambiguous: u64) -> String {
        let kept = tally.good - tally.refused;
        let mut text = format!(
            "{kept} readings of \"{}\", each standing for {}, are in the record.\n",
            self.channel,
            said_period(period)
        );
        if tally.implausible > 0 {
            text += &format!(
                "{} of them are no plausible value and are marked \"out of range\".\n",
                tally.implausible
            );
        }
        if tally.refused > 0 {
            text += &format!(
                "{} are older than what the record keeps (keep_readings) and were not taken.\n",
                tally.refused
            );
        }
        if ambiguous > 0 {
            text += &format!(
                "{ambiguous} times fell into the hour that the clocks show twice: taken in the order of the rows, the \
                 first showing first.\n"
            );
        }
        text + &faults_text(tally)
    }
}

fn said_period(period: Duration) -> String {
    match period.as_millis() {
        ms if ms % 1000 != 0 => format!("{ms} ms"),
        _ => span(period),
    }
}

fn faults_text(tally: &Tally) -> String {
    let mut text = String::new();
    for (fault, (count, lines)) in &tally.faults {
        let named: Vec<_> = lines.iter().map(u64::to_string).collect();
        let more = if *count > lines.len() as u64 { " …" } else { "" };
        let rows = if *count == 1 { "row was" } else { "rows were" };
        text += &format!("{count} {rows} left out: {fault} (line {}{more}).\n", named.join(", "));
    }
    text
}

/// How far it has come, on standard error where that is a terminal; the whole isn't known beforehand.
fn counter() -> anyhow::Result<ProgressBar> {
    if !io::stderr().is_terminal() {
        return Ok(ProgressBar::hidden());
    }
    let style = ProgressStyle::with_template("{spinner} {human_pos} readings, {per_sec}")?;
    Ok(ProgressBar::new_spinner().with_style(style))
}

/// Up to `most` good rows; the bad ones are counted.
fn take_rows(
    recording: &mut Recording<impl io::Read>,
    most: usize,
    tally: &mut Tally,
) -> anyhow::Result<Vec<(Utc, Millivolts)>> {
    let mut rows = Vec::new();
    while rows.len() < most {
        match recording.next_row().map_err(|e| anyhow!(e))? {
            None => break,
            Some((_, Ok(row))) => rows.push(row),
            Some((line, Err(fault))) => {
                let (count, lines) = tally.faults.entry(fault).or_default();
                *count += 1;
                if lines.len() < LINES_NAMED {
                    lines.push(line);
                }
            }
        }
    }
    tally.good += rows.len() as u64;
    Ok(rows)
}

/// The most usual step from one time to the next: the median of those that go forward.
fn usual_step(rows: &[(Utc, Millivolts)]) -> Option<Duration> {
    let mut steps: Vec<i64> =
        rows.windows(2).map(|pair| pair[1].0.0 - pair[0].0.0).filter(|step| *step > 0).collect();
    steps.sort_unstable();
    steps.get(steps.len().saturating_sub(1) / 2).map(|ms| Duration::from_millis(*ms as u64))
}

/// The record, as its owner where nobody runs on it, else beside the daemon.
fn open_for_import(site: &Site) -> anyhow::Result<(Store, Option<Lock>)> {
    super::site::make_default_folder(site)?;
    match Lock::take(&site.store.path) {
        Ok(lock) => Ok((Store::open(&site.store.path, &OpenOptions::default())?, Some(lock))),
        Err(StoreError::InUse { .. }) => Ok((Store::open_beside(&site.store.path)?, None)),
        Err(other) => bail!(other),
    }
}
