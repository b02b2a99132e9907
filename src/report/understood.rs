//! What the config was understood to mean, in plain sentences: the text of `railtide check`.

use std::fmt;

use super::supply;
use super::time::span;
use crate::config::{Channel, Rating, Receiver, Route, Site};
use crate::supply::Finding;
use crate::watch::{Projecting, RailWatch};

/// A checked config and what follows from it.
#[derive(Clone, Copy, Debug)]
pub struct Understood<'a> {
    /// The config.
    pub site: &'a Site,
    /// What each amplifier's rails are projected by.
    pub projections: &'a [Projecting],
    /// Every limit.
    pub rails: &'a [RailWatch],
    /// Each amplifier's findings.
    pub findings: &'a [Vec<Finding>],
}

/// Says back a checked config.
pub fn understood_text(understood: Understood<'_>, out: &mut impl fmt::Write) -> fmt::Result {
    let Understood { site, projections, rails, findings } = understood;
    writeln!(
        out,
        "The site \"{}\" keeps the time of {}; its mains is declared {} V at {} Hz.",
        site.name, site.time_zone, site.declared_v, site.frequency_hz
    )?;
    writeln!(
        out,
        "The record is {}; readings are written to it every {}, alarms at once.",
        site.store.path.display(),
        span(site.store.commit_every)
    )?;
    if let Some(keep) = site.store.keep_readings {
        writeln!(out, "Readings are kept for {}; intervals, alarms and fits for ever.", span(keep))?;
    }
    if site.loggers.is_empty() {
        writeln!(out, "No logger: `run` has nothing to read; the commands that need none work.")?;
    }
    for logger in &site.loggers {
        writeln!(
            out,
            "The logger \"{}\" speaks tide lines at {} baud on {}:",
            logger.name,
            logger.baud,
            logger.port.display()
        )?;
        for channel in &logger.channels {
            writeln!(out, "  {}", channel_sentence(channel))?;
        }
    }
    if site.amplifiers.is_empty() {
        writeln!(out, "No amplifier: mains is recorded, no rail is projected.")?;
    }
    for ((amplifier, projecting), findings) in site.amplifiers.iter().zip(projections).zip(findings) {
        writeln!(out, "{}", supply_sentence(amplifier))?;
        for sentence in supply::sentences(amplifier, projecting, site.declared_v) {
            writeln!(out, "  {sentence}")?;
        }
        if amplifier.limits.is_empty() {
            writeln!(out, "  It has no limit, so nothing can warn about it: add an [[amplifier.limit]].")?;
        }
        for rail in rails.iter().filter(|rail| rail.amplifier == amplifier.name) {
            writeln!(out, "  {}", limit_sentence(rail))?;
        }
        supply::findings_text(findings, site.declared_v, out)?;
    }
    for change in &site.alarms {
        let what = if change.enabled { "is changed by the config" } else { "is switched off by the config" };
        writeln!(out, "The condition {} {what}.", change.condition)?;
    }
    if site.receivers.is_empty() {
        writeln!(out, "No receiver: alarms are seen only by whoever asks (`railtide alarm`).")?;
    }
    for receiver in &site.receivers {
        writeln!(out, "{}", receiver_sentence(receiver))?;
    }
    Ok(())
}

fn channel_sentence(channel: &Channel) -> String {
    let what = match &channel.rail {
        None => "the mains, V r.m.s.".to_owned(),
        Some(rail) => format!("the rail of \"{}\" at \"{}\", V", rail.amplifier, rail.node),
    };
    let mut sentence = format!(
        "\"{}\" is {what}, a reading every {} ms, ±({} % + {} V)",
        channel.name,
        channel.sample_period.as_millis(),
        channel.accuracy_pct,
        channel.accuracy_v
    );
    if channel.gain != 1.0 || channel.offset_v != 0.0 {
        sentence += &format!(", calibrated: raw × {} + {} V", channel.gain, channel.offset_v);
    }
    sentence + "."
}

fn supply_sentence(amplifier: &crate::config::Amplifier) -> String {
    let name = &amplifier.name;
    match &amplifier.measured {
        _ if amplifier.circuit.is_some() => format!("The amplifier \"{name}\":"),
        Some(m) => format!(
            "The amplifier \"{name}\": \"{}\" follows mains in proportion, from {} V measured at {} V of mains \
             ({}, meter ±{} %). Other loadings and nodes are unknown.",
            m.node,
            m.pair.rail_v,
            m.pair.mains_v,
            m.loading.word(),
            m.pair.meter_pct
        ),
        None => format!(
            "The amplifier \"{name}\": nothing says how its rails follow mains; add [amplifier.measured] to project them."
        ),
    }
}

fn limit_sentence(rail: &RailWatch) -> String {
    let limit = &rail.limit;
    let why = if limit.why.is_empty() { String::new() } else { format!(" ({})", limit.why) };
    let system = match limit.rating {
        Rating::Absolute => "",
        Rating::DesignCentre => ", a design-centre figure that already allows for mains 10 % over",
        Rating::DesignMaximum => ", a design-maximum figure, kept as if it were absolute",
    };
    let head = format!("\"{}\" must stay under {} V{why}{system}: ", limit.node, limit.max_v);
    let mut parts = Vec::new();
    match &rail.projection {
        Some(p) => {
            let at = |mains: Option<f64>| {
                mains.map_or("no likely mains".to_owned(), |v| format!("{v:.1} V of mains"))
            };
            parts.push(format!(
                "projected at {}, it is reached at {}; the alarm's setpoint is {:.0} V (less its uncertainty), reached at {}",
                limit.loading.word(),
                at(p.limit_at_mains_v),
                p.setpoint_v,
                at(p.setpoint_at_mains_v)
            ));
        }
        None => parts.push(format!("at loading {} it can't be projected", limit.loading.word())),
    }
    if let Some((_, setpoint_v)) = rail.measured {
        parts.push(format!("measured, its setpoint is {setpoint_v:.0} V"));
    }
    head + &parts.join("; ") + "."
}

fn receiver_sentence(receiver: &Receiver) -> String {
    let Route::Webhook { url, token } = &receiver.route;
    let secret = if token.is_some() { ", with a token" } else { "" };
    format!(
        "Notices of priority {} and above go to \"{}\" by webhook, {}{secret}.",
        receiver.min_priority.word(),
        receiver.name,
        without_query(url)
    )
}

/// A query may hold a key: it's never shown.
fn without_query(url: &str) -> String {
    match url.split_once('?') {
        Some((head, _)) => format!("{head}?…"),
        None => url.to_owned(),
    }
}
