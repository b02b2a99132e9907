//! `railtide fit AMP`: fits the supply's model to recorded pairs of mains and rail.

use std::path::PathBuf;

use anyhow::{Context, bail};
use clap::Args;

use super::Format;
use super::stretch::{Stretch, StretchArguments};
use crate::clock::Clock;
use crate::config::{Amplifier, Channel, Site};
use crate::mains::start_of;
use crate::quantity::Utc;
use crate::reading::ChannelId;
use crate::report::{FitReport, LocalTime, fit_text};
use crate::store::Store;
use crate::supply::Loading;
use crate::supply::fit::{Accuracy, Pair, RecordedFit, fit, pairs};
use crate::watch::{mains_channel, valid_fit};

/// The shortest stretch over which mains and rail make one pair.
const PAIR_MS: i64 = 60_000;

/// Arguments of `fit`.
#[derive(Debug, Args)]
pub(super) struct FitCommand {
    /// The amplifier's name.
    amplifier: String,
    #[command(flatten)]
    stretch: StretchArguments,
    /// What it did whenever it was on, in the owner's word: unloaded, idle or full. Without it, the rail's own
    /// behaviour tells.
    #[arg(long, value_parser = super::curve::loading)]
    loading: Option<Loading>,
    /// The node whose recorded rail is taken; the first that a channel measures without it.
    #[arg(long, value_name = "NODE")]
    node: Option<String>,
    /// Only says what would come of it: the fit is not kept.
    #[arg(long)]
    dry_run: bool,
    /// How to print.
    #[arg(long, value_enum, default_value_t)]
    format: Format,
}

impl FitCommand {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let amplifier = super::site::amplifier(&site, &self.amplifier)?;
        let Some(circuit) = &amplifier.circuit else {
            bail!(
                "the config states no circuit of {}, so there is nothing to fit; state its supply the full way \
                 ([amplifier.transformer], [amplifier.rectifier], [[amplifier.filter]])",
                amplifier.name
            );
        };
        let (mains, rail) = self.channels(&site, amplifier)?;
        let now = Clock::system().now().utc;
        let asked = self.stretch.resolve(site.time_zone, now)?.unwrap_or(Stretch { from: Utc(0), to: now });
        let not_before = last_change(&site, amplifier, asked);
        let stretch = Stretch { from: not_before.map_or(asked.from, |cut| cut.max(asked.from)), ..asked };
        let store = super::site::open_record(&site)?;
        let record = recorded_pairs(&store, mains, rail, stretch)?;
        let (Some(first), Some(last)) = (record.pairs.first(), record.pairs.last()) else {
            bail!(
                "the record holds no time at which both {} and {} were read in that stretch; record some, or give \
                 another --from and --to",
                mains.name,
                rail.name
            );
        };
        let node = &rail.rail.as_ref().context("a rail channel measures a rail")?.node;
        let made = fit(circuit, node, &record.pairs, accuracy(mains, rail, &record.pairs), self.loading)?;
        let made = RecordedFit {
            made_at: now,
            from: Utc(first.at_ms),
            to: Utc(last.at_ms + record.width_ms),
            fit: made,
        };
        let used = valid_fit(amplifier, std::slice::from_ref(&made), site.time_zone).is_some();
        if !self.dry_run {
            drop(store);
            Store::open_beside(&site.store.path)?.insert_fit(&made)?;
        }
        let kept = !self.dry_run;
        let cut = not_before.filter(|cut| *cut > asked.from).map(|cut| LocalTime::of(cut, site.time_zone));
        let report = FitReport::new(&made, site.time_zone, cut, kept, kept && used);
        match self.format {
            Format::Json => super::print_json(&report),
            Format::Text => {
                let mut text = String::new();
                fit_text(&report, &mut text)?;
                super::print(&text)
            }
        }
    }

    /// The channels of mains and of the rail that is to be taken.
    fn channels<'s>(
        &self,
        site: &'s Site,
        amplifier: &Amplifier,
    ) -> anyhow::Result<(&'s Channel, &'s Channel)> {
        let channels: Vec<&Channel> = site.channels().map(|(_, channel)| channel).collect();
        let mains = mains_channel(site).map(|i| channels[i]).context(
            "the config has no mains channel, and a fit needs recorded pairs of mains and rail; add one",
        )?;
        let of_amplifier = |channel: &&&Channel| {
            channel.rail.as_ref().is_some_and(|rail| {
                rail.amplifier == amplifier.name && self.node.as_ref().is_none_or(|node| *node == rail.node)
            })
        };
        let order = |channel: &&&Channel| {
            let circuit = amplifier.circuit.as_ref()?;
            circuit.node(&channel.rail.as_ref()?.node)
        };
        let rail = channels.iter().filter(of_amplifier).min_by_key(order);
        let rail = rail.with_context(|| match &self.node {
            Some(node) => format!("no channel measures {node} of {}", amplifier.name),
            None => format!(
                "no channel measures a rail of {}, and a fit needs recorded pairs of mains and rail; add a [[channel]] \
                 with quantity = \"rail\"",
                amplifier.name
            ),
        })?;
        Ok((mains, rail))
    }
}

/// The end of the last day of the service log that lies before the stretch's end: a fit never mixes pairs from both
/// sides of a change, and nobody knows the hour.
fn last_change(site: &Site, amplifier: &Amplifier, stretch: Stretch) -> Option<Utc> {
    amplifier
        .events
        .iter()
        .filter(|event| start_of(event.on, site.time_zone) < stretch.to)
        .filter_map(|event| Some(start_of(event.on.succ_opt()?, site.time_zone)))
        .max()
}

struct Record {
    pairs: Vec<Pair>,
    width_ms: i64,
}

fn recorded_pairs(
    store: &Store,
    mains: &Channel,
    rail: &Channel,
    stretch: Stretch,
) -> anyhow::Result<Record> {
    let longest = mains.sample_period.max(rail.sample_period).as_millis() as i64;
    let width_ms = PAIR_MS.max(longest);
    let stored = store.channels()?;
    let mut failed = None;
    let [of_mains, of_rail] = [mains, rail].map(|channel| stored.iter().find(|s| s.name == channel.name));
    let (Some(of_mains), Some(of_rail)) = (of_mains, of_rail) else {
        return Ok(Record { pairs: Vec::new(), width_ms });
    };
    // One after the other and as they come: a year of seconds need not lie in memory.
    let failure = std::cell::RefCell::new(&mut failed);
    let sound = |id: ChannelId| {
        store.readings(id, stretch.from, stretch.to).filter_map(|reading| match reading {
            Ok(reading) => reading.quality.value_is_sound().then(|| (reading.at.0, reading.value.volts())),
            Err(error) => {
                failure.borrow_mut().get_or_insert(error);
                None
            }
        })
    };
    let pairs = pairs(sound(of_mains.id), sound(of_rail.id), width_ms);
    match failed {
        Some(error) => Err(error.into()),
        None => Ok(Record { pairs, width_ms }),
    }
}

/// Both channels' accuracy as fractions of what they usually read.
fn accuracy(mains: &Channel, rail: &Channel, pairs: &[Pair]) -> Accuracy {
    let highest = |of: fn(&Pair) -> f64| pairs.iter().map(of).fold(1.0, f64::max);
    let (mains_v, rail_v) = (highest(|p| p.mains_v), highest(|p| p.rail_v));
    Accuracy { mains: mains.half_width_v(mains_v) / mains_v, rail: rail.half_width_v(rail_v) / rail_v }
}
