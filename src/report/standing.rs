//! Where mains and rails stand: the figures of `railtide now`.

use std::fmt;
use std::time::Duration;

use serde::Serialize;

use super::time::{LocalTime, ago};
use crate::config::Site;
use crate::quantity::{Uncertain, Utc};
use crate::reading::{ChannelQuantity, Quality, Reading};
use crate::supply::Basis;
use crate::watch::{RailWatch, fresh_for, mains_channel, uncertain};

/// Where everything stands at one moment.
#[derive(Clone, Debug, Serialize)]
pub struct Standing {
    /// The site's name.
    pub site: String,
    /// The moment.
    pub at: LocalTime,
    /// Every channel, in the config's order.
    pub channels: Vec<ChannelStanding>,
    /// Every limit on a rail, in the config's order.
    pub rails: Vec<RailStanding>,
}

/// One channel's last reading.
#[derive(Clone, Debug, Serialize)]
pub struct ChannelStanding {
    /// Its name.
    pub channel: String,
    /// What it measures.
    pub quantity: ChannelQuantity,
    /// Its last value, V.
    pub value_v: Option<f64>,
    /// The expanded uncertainty (k = 2) of that value by the channel's accuracy, V.
    pub value_u_v: Option<f64>,
    /// When that was.
    pub read_at: Option<LocalTime>,
    /// How old that is, s.
    pub age_s: Option<f64>,
    /// How far to trust it.
    pub quality: Option<Quality>,
    /// Whether it's recent and sound enough to project from.
    pub fresh: bool,
    #[serde(skip)]
    read_utc: Option<Utc>,
}

/// One rail against one limit.
#[derive(Clone, Debug, Serialize)]
pub struct RailStanding {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node's name.
    pub node: String,
    /// The loading that the limit is judged at.
    pub loading: &'static str,
    /// The limit, V.
    pub limit_v: f64,
    /// Why that is the limit.
    pub why: String,
    /// Where the projection comes from.
    pub basis: Option<Basis>,
    /// The projected rail, V; absent while mains or this loading is unknown.
    pub projected_v: Option<f64>,
    /// Its expanded uncertainty (k = 2), V.
    pub projected_u_v: Option<f64>,
    /// The limit less the projection's guard band, V.
    pub projected_setpoint_v: Option<f64>,
    /// Setpoint less projected rail, V.
    pub headroom_v: Option<f64>,
    /// The measured rail, V.
    pub measured_v: Option<f64>,
    /// Its expanded uncertainty (k = 2), V.
    pub measured_u_v: Option<f64>,
    /// The limit less the measurement's guard band, V.
    pub measured_setpoint_v: Option<f64>,
    /// Whether a rail channel proves the amplifier on or off.
    pub proved_on: Option<bool>,
    /// The mains at which the setpoint is reached, V.
    pub setpoint_at_mains_v: Option<f64>,
}

impl Standing {
    /// Where things stand at `now`, by the last reading of each channel (in the order of [`Site::channels`]).
    /// Readings reach the record only every `commit_every`, so they may be that much older than fresh ones.
    pub fn new(site: &Site, rails: &[RailWatch], latest: &[Option<Reading>], now: Utc) -> Self {
        let channels: Vec<ChannelStanding> = site
            .channels()
            .zip(latest)
            .map(|((_, channel), reading)| {
                let patience = fresh_for(channel.sample_period) + site.store.commit_every;
                ChannelStanding::new(site, channel, *reading, now, patience)
            })
            .collect();
        let value = |i: usize| {
            let channel: &ChannelStanding = &channels[i];
            channel.fresh.then_some(())?;
            Some(Uncertain::new(channel.value_v?, channel.value_u_v?))
        };
        let mains = mains_channel(site).and_then(value);
        let rails = rails.iter().map(|rail| RailStanding::new(rail, mains, value)).collect();
        Standing { site: site.name.clone(), at: LocalTime::of(now, site.time_zone), channels, rails }
    }
}

impl ChannelStanding {
    fn new(
        site: &Site,
        channel: &crate::config::Channel,
        reading: Option<Reading>,
        now: Utc,
        patience: Duration,
    ) -> Self {
        let value = reading.map(|r| uncertain(channel, r.value.volts()));
        let age_ms = reading.map(|r| now.0 - r.at.0);
        ChannelStanding {
            channel: channel.name.clone(),
            quantity: channel.quantity,
            value_v: value.map(|v| v.volts),
            value_u_v: value.map(|v| v.u),
            read_at: reading.map(|r| LocalTime::of(r.at, site.time_zone)),
            age_s: age_ms.map(|ms| ms as f64 / 1000.0),
            quality: reading.map(|r| r.quality),
            fresh: reading.is_some_and(|r| r.quality.value_is_sound())
                && age_ms.is_some_and(|ms| ms <= patience.as_millis() as i64),
            read_utc: reading.map(|r| r.at),
        }
    }
}

impl RailStanding {
    fn new(rail: &RailWatch, mains: Option<Uncertain>, fresh: impl Fn(usize) -> Option<Uncertain>) -> Self {
        let figures = rail.figures(mains, fresh);
        RailStanding {
            amplifier: figures.amplifier,
            node: figures.node,
            loading: figures.loading.word(),
            limit_v: figures.limit_v,
            why: figures.why,
            basis: figures.basis,
            projected_v: figures.projected.map(|p| p.volts),
            projected_u_v: figures.projected.map(|p| p.u),
            projected_setpoint_v: figures.projected_setpoint_v,
            headroom_v: figures.projected_setpoint_v.zip(figures.projected).map(|(s, p)| s - p.volts),
            measured_v: figures.measured.map(|m| m.volts),
            measured_u_v: figures.measured.map(|m| m.u),
            measured_setpoint_v: figures.measured_setpoint_v,
            proved_on: figures.proved_on,
            setpoint_at_mains_v: rail.projection.as_ref().and_then(|p| p.setpoint_at_mains_v),
        }
    }
}

/// Says a standing in plain sentences, a channel and a rail each on a line of their own.
pub fn standing_text(standing: &Standing, now: Utc, out: &mut impl fmt::Write) -> fmt::Result {
    writeln!(out, "{}, {}", standing.site, standing.at.people())?;
    let widest = standing.channels.iter().map(|c| c.channel.len()).max().unwrap_or(0);
    for channel in &standing.channels {
        write!(out, "  {:widest$}  ", channel.channel)?;
        match (channel.value_v, channel.value_u_v, channel.read_utc) {
            (Some(value_v), Some(u), Some(read)) => {
                write!(out, "{}  ({}", Uncertain::new(value_v, u), ago(read, now))?;
                match channel.quality {
                    Some(quality) if quality != Quality::Good => write!(out, ", {}", quality.word())?,
                    _ => {}
                }
                writeln!(
                    out,
                    "{})",
                    if channel.fresh { "" } else { "; too old or doubtful to project from" }
                )?;
            }
            _ => writeln!(out, "no reading yet")?,
        }
    }
    for rail in &standing.rails {
        writeln!(out, "{}", rail_sentence(rail))?;
    }
    Ok(())
}

/// "The hall's reservoir would stand at 471 V ± 4 V (idle, projected), 5 V under its setpoint of 476 V."
fn rail_sentence(rail: &RailStanding) -> String {
    let name = format!("The {}'s {}", rail.amplifier, rail.node);
    let against = |v: f64, setpoint_v: f64| {
        let side = if v > setpoint_v { "OVER" } else { "under" };
        format!(
            "{:.0} V {side} its setpoint of {setpoint_v:.0} V (limit {:.0} V{})",
            (setpoint_v - v).abs(),
            rail.limit_v,
            if rail.why.is_empty() { String::new() } else { format!(": {}", rail.why) }
        )
    };
    let mut sentences = Vec::new();
    if let (Some(v), Some(u), Some(setpoint_v)) =
        (rail.measured_v, rail.measured_u_v, rail.measured_setpoint_v)
    {
        sentences.push(match rail.proved_on {
            Some(false) => format!("{name} measures {}: the amplifier is off", Uncertain::new(v, u)),
            _ => format!("{name} stands at {} (measured), {}", Uncertain::new(v, u), against(v, setpoint_v)),
        });
    }
    sentences.push(match (rail.projected_v, rail.projected_u_v, rail.projected_setpoint_v) {
        (Some(v), Some(u), Some(setpoint_v)) => {
            let verb = if rail.proved_on == Some(true) { "is projected" } else { "would stand" };
            format!(
                "{name} {verb} at {} ({}), {}",
                Uncertain::new(v, u),
                rail.loading,
                against(v, setpoint_v)
            )
        }
        (None, _, Some(setpoint_v)) => format!(
            "{name}: unknown, since mains is; its setpoint of {setpoint_v:.0} V is reached at {}",
            rail.setpoint_at_mains_v.map_or("no likely mains".to_owned(), |m| format!("{m:.1} V of mains"))
        ),
        _ => format!(
            "{name} at loading {}: unknown, since the config doesn't say how it follows mains",
            rail.loading
        ),
    });
    sentences.join(".\n") + "."
}
