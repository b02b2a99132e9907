//! `railtide export`: rows for other programs, or a consistent copy of the record.

use std::fs::File;
use std::io::{self, BufWriter, IsTerminal, Read, Write};
use std::path::{Path, PathBuf};

use anyhow::{Context, bail};
use chrono_tz::Tz;
use clap::{Args, ValueEnum};
use indicatif::{ProgressBar, ProgressStyle};
use serde::Serialize;
use sha2::{Digest, Sha256};

use super::stretch::{Stretch, StretchArguments};
use crate::clock::Clock;
use crate::config::Site;
use crate::quantity::Utc;
use crate::reading::Reading;
use crate::report::LocalTime;
use crate::report::export::{CsvRows, JsonLines, Kind, Row, Rows, XLSX_ROWS, XlsxRows};
use crate::store::{JournalFilter, Readings, Store, StoreError, StoredChannel};

/// Arguments of `export`.
#[derive(Debug, Args)]
pub(super) struct Export {
    /// What to give out; several kinds only into a workbook, a sheet each.
    #[arg(value_enum, default_values_t = [What::Readings])]
    what: Vec<What>,
    #[command(flatten)]
    stretch: StretchArguments,
    /// Only this channel; may be given several times.
    #[arg(long, value_name = "NAME")]
    channel: Vec<String>,
    /// How: `csv` by RFC 4180, `json` one object a line, `xlsx` a workbook.
    #[arg(long, value_enum, default_value_t)]
    format: ExportFormat,
    /// Into this file, with a manifest of row counts and SHA-256 beside it; without it, to standard output.
    #[arg(long, short, value_name = "FILE")]
    out: Option<PathBuf>,
    /// Makes a consistent copy of the whole record instead, also while the daemon runs.
    #[arg(long, value_name = "FILE", conflicts_with_all = ["from", "to", "week", "last", "channel", "out"])]
    backup: Option<PathBuf>,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
enum What {
    /// Every reading.
    Readings,
    /// 10-minute intervals.
    Intervals,
    /// The alarms' journal.
    Alarms,
}

#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum ExportFormat {
    #[default]
    Csv,
    Json,
    Xlsx,
}

/// What was written, so that it can be checked later.
#[derive(Debug, Serialize)]
struct Manifest {
    file: String,
    bytes: u64,
    sha256: String,
    site: String,
    database_id: String,
    from: LocalTime,
    to: LocalTime,
    time_zone: Tz,
    rows: Vec<Counted>,
    made_at: LocalTime,
    made_by: &'static str,
}

#[derive(Debug, Serialize)]
struct Counted {
    kind: &'static str,
    channel: Option<String>,
    rows: u64,
}

impl Export {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let store = super::site::open_record(&site)?;
        if let Some(target) = &self.backup {
            return back_up(&store, target);
        }
        let now = Clock::system().now().utc;
        let stretch = self.stretch.resolve(site.time_zone, now)?.unwrap_or(Stretch { from: Utc(0), to: now });
        let job = Job {
            kinds: self.what.iter().map(|what| what.kind()).collect(),
            channels: chosen(&store, &self.channel)?,
            store: &store,
            stretch,
        };
        self.refuse_what_does_not_fit(&job)?;
        match &self.out {
            Some(file) => self.write_file(&site, &job, file, now),
            None if self.format == ExportFormat::Xlsx => {
                bail!("a workbook is no text; name a file with --out")
            }
            None => {
                let mut out = BufWriter::with_capacity(1 << 16, io::stdout().lock());
                job.write(self.text_rows(&mut out, site.time_zone).as_mut())?;
                Ok(out.flush()?)
            }
        }
    }

    fn refuse_what_does_not_fit(&self, job: &Job<'_>) -> anyhow::Result<()> {
        if self.format != ExportFormat::Xlsx {
            if job.kinds.len() > 1 {
                bail!("one kind of rows a file; several go into a workbook: --format xlsx --out FILE");
            }
            return Ok(());
        }
        for kind in &job.kinds {
            let rows = job.count(*kind)?;
            if rows > XLSX_ROWS {
                bail!(
                    "{rows} {} are too many for a sheet, which holds {XLSX_ROWS}; export them as text: \
                     railtide export {} --format csv --out FILE.csv",
                    kind.word(),
                    kind.word()
                );
            }
        }
        Ok(())
    }

    fn text_rows<'w, W: Write + 'w>(&self, out: W, zone: Tz) -> Box<dyn Rows + 'w> {
        match self.format {
            ExportFormat::Json => Box::new(JsonLines::new(out, zone)),
            _ => Box::new(CsvRows::new(out, zone)),
        }
    }

    /// Written beside its place and moved there when it's whole, so that a file of that name is never half of one.
    fn write_file(&self, site: &Site, job: &Job<'_>, file: &Path, now: Utc) -> anyhow::Result<()> {
        let part = with_suffix(file, ".part");
        let written = (|| {
            let created = File::create(&part).with_context(|| format!("{} can't be made", part.display()))?;
            let out = BufWriter::with_capacity(1 << 16, created);
            let counted = match self.format {
                ExportFormat::Xlsx => job.write(&mut XlsxRows::new(out, site.time_zone))?,
                _ => job.write(self.text_rows(out, site.time_zone).as_mut())?,
            };
            let (bytes, sha256) = digest(&part)?;
            std::fs::rename(&part, file).with_context(|| format!("{} can't be written", file.display()))?;
            anyhow::Ok((counted, bytes, sha256))
        })();
        if written.is_err() {
            let _ = std::fs::remove_file(&part);
        }
        let (rows, bytes, sha256) = written?;
        let local = |at| LocalTime::of(at, site.time_zone);
        let manifest = Manifest {
            file: file.file_name().unwrap_or_default().to_string_lossy().into_owned(),
            bytes,
            sha256,
            site: site.name.clone(),
            database_id: job.store.database_id()?,
            from: local(job.stretch.from),
            to: local(job.stretch.to),
            time_zone: site.time_zone,
            rows,
            made_at: local(now),
            made_by: concat!("railtide ", env!("CARGO_PKG_VERSION")),
        };
        let beside = with_suffix(file, ".manifest.json");
        std::fs::write(&beside, serde_json::to_string_pretty(&manifest)? + "\n")
            .with_context(|| format!("{} can't be written", beside.display()))?;
        let total: u64 = manifest.rows.iter().map(|counted| counted.rows).sum();
        super::remark(&format!(
            "{total} rows are in {}, their count and SHA-256 in {}",
            file.display(),
            beside.display()
        ))
    }
}

impl What {
    fn kind(self) -> Kind {
        match self {
            What::Readings => Kind::Readings,
            What::Intervals => Kind::Intervals,
            What::Alarms => Kind::Alarms,
        }
    }
}

/// What is to be written, from where.
struct Job<'s> {
    store: &'s Store,
    kinds: Vec<Kind>,
    channels: Vec<StoredChannel>,
    stretch: Stretch,
}

impl Job<'_> {
    fn count(&self, kind: Kind) -> anyhow::Result<u64> {
        let Stretch { from, to } = self.stretch;
        let mut total = 0;
        for channel in &self.channels {
            total += match kind {
                Kind::Readings => self.store.count_readings(channel.id, from, to)?,
                Kind::Intervals => self.store.intervals(channel.id, from, to)?.len() as u64,
                Kind::Alarms => return Ok(self.journal()?.len() as u64),
            };
        }
        Ok(total)
    }

    fn write(&self, rows: &mut dyn Rows) -> anyhow::Result<Vec<Counted>> {
        let mut counted = Vec::new();
        for kind in &self.kinds {
            rows.begin(*kind)?;
            match kind {
                Kind::Readings => self.write_readings(rows, &mut counted)?,
                Kind::Intervals => self.write_intervals(rows, &mut counted)?,
                Kind::Alarms => {
                    let journal = self.journal()?;
                    for entry in &journal {
                        rows.row(Row::Alarm(entry))?;
                    }
                    counted.push(Counted { kind: kind.word(), channel: None, rows: journal.len() as u64 });
                }
            }
        }
        rows.finish()?;
        Ok(counted)
    }

    /// Every channel's readings as one sequence in order of time.
    fn write_readings(&self, rows: &mut dyn Rows, counted: &mut Vec<Counted>) -> anyhow::Result<()> {
        let Stretch { from, to } = self.stretch;
        let bar = bar(|| self.count(Kind::Readings))?;
        let mut lanes: Vec<Lane<'_>> = Vec::new();
        for channel in &self.channels {
            let readings = self.store.readings(channel.id, from, to);
            let mut lane = Lane { channel: &channel.name, readings, head: None, rows: 0 };
            lane.advance()?;
            lanes.push(lane);
        }
        let mut done = 0_u64;
        // A handful of channels: looking at each head is quicker than keeping a heap.
        while let Some(lane) =
            lanes.iter_mut().filter(|l| l.head.is_some()).min_by_key(|l| l.head.map(|r| r.at))
        {
            let Some(reading) = lane.head else { break };
            rows.row(Row::Reading(lane.channel, reading))?;
            lane.rows += 1;
            lane.advance()?;
            done += 1;
            if done.is_multiple_of(65_536) {
                bar.set_position(done);
            }
        }
        bar.finish_and_clear();
        counted.extend(lanes.into_iter().map(|lane| Counted {
            kind: Kind::Readings.word(),
            channel: Some(lane.channel.to_owned()),
            rows: lane.rows,
        }));
        Ok(())
    }

    fn write_intervals(&self, rows: &mut dyn Rows, counted: &mut Vec<Counted>) -> anyhow::Result<()> {
        let mut all = Vec::new();
        for channel in &self.channels {
            let intervals = self.store.intervals(channel.id, self.stretch.from, self.stretch.to)?;
            counted.push(Counted {
                kind: Kind::Intervals.word(),
                channel: Some(channel.name.clone()),
                rows: intervals.len() as u64,
            });
            all.extend(intervals.into_iter().map(|interval| (channel.name.as_str(), interval)));
        }
        all.sort_by_key(|(_, interval)| interval.start);
        for (channel, interval) in all {
            rows.row(Row::Interval(channel, interval))?;
        }
        Ok(())
    }

    fn journal(&self) -> anyhow::Result<Vec<crate::alarm::JournalEntry>> {
        let Stretch { from, to } = self.stretch;
        Ok(self.store.journal(&JournalFilter {
            from: Some(from),
            to: Some(to),
            ..JournalFilter::default()
        })?)
    }
}

/// One channel's readings, the next one at hand.
struct Lane<'s> {
    channel: &'s str,
    readings: Readings<'s>,
    head: Option<Reading>,
    rows: u64,
}

impl Lane<'_> {
    /// Takes the next reading; a damaged hour is said and passed over, so that what can be read is saved.
    fn advance(&mut self) -> anyhow::Result<()> {
        self.head = loop {
            match self.readings.next() {
                Some(Err(damaged @ StoreError::Damaged { .. })) => {
                    super::remark(&format!("passed over: {damaged}"))?;
                }
                other => break other.transpose()?,
            }
        };
        Ok(())
    }
}

/// The channels that are meant: those named, or all that the record has known.
fn chosen(store: &Store, names: &[String]) -> anyhow::Result<Vec<StoredChannel>> {
    let all = store.channels()?;
    if names.is_empty() {
        return Ok(all);
    }
    names
        .iter()
        .map(|name| {
            all.iter().find(|c| c.name == *name).cloned().with_context(|| {
                let known: Vec<_> = all.iter().map(|c| c.name.as_str()).collect();
                format!("the record knows no channel \"{name}\"; it has {}", known.join(", "))
            })
        })
        .collect()
}

/// A progress bar on standard error where that is a terminal; counting the whole is only worth while for one.
fn bar(total: impl FnOnce() -> anyhow::Result<u64>) -> anyhow::Result<ProgressBar> {
    if !io::stderr().is_terminal() {
        return Ok(ProgressBar::hidden());
    }
    let style = ProgressStyle::with_template("{human_pos} of {human_len} {wide_bar} {eta}")?;
    Ok(ProgressBar::new(total()?).with_style(style))
}

fn back_up(store: &Store, target: &Path) -> anyhow::Result<()> {
    if target.exists() {
        bail!("{} is there already; name a new file", target.display());
    }
    let part = with_suffix(target, ".part");
    let copied = store.copy_to(&part);
    if copied.is_err() {
        let _ = std::fs::remove_file(&part);
    }
    copied?;
    std::fs::rename(&part, target).with_context(|| format!("{} can't be written", target.display()))?;
    super::remark(&format!("the record as it is now is copied to {}", target.display()))
}

fn digest(file: &Path) -> anyhow::Result<(u64, String)> {
    let mut reader = File::open(file)?;
    let mut hash = Sha256::new();
    let mut buffer = vec![0; 1 << 16];
    let mut bytes = 0;
    loop {
        let read = reader.read(&mut buffer)?;
        if read == 0 {
            break;
        }
        hash.update(&buffer[..read]);
        bytes += read as u64;
    }
    Ok((bytes, hash.finalize().iter().map(|byte| format!("{byte:02x}")).collect()))
}

fn with_suffix(file: &Path, suffix: &str) -> PathBuf {
    let mut name = file.as_os_str().to_owned();
    name.push(suffix);
    PathBuf::from(name)
}
