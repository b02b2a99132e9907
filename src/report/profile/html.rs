//! The profile as one page that needs no network and no script, and prints on A4.

use std::fmt::{self, Write};

use super::{Profile, RailProfile, TurnLine};
use crate::report::CAUTION;
use crate::report::chart::escape;

/// Ink on warm paper; a printer gets black on white.
const STYLE: &str = "\
:root{color-scheme:light dark;--paper:#fbf7ef;--ink:#2b2620;--soft:#6d6455;--faint:#d9cfbd}\
@media(prefers-color-scheme:dark){:root{--paper:#211d18;--ink:#efe6d6;--soft:#b5a88f;--faint:#4a4235}}\
@media print{:root{--paper:#fff;--ink:#000;--soft:#444;--faint:#ccc}@page{size:A4;margin:14mm}}\
body{margin:0 auto;max-width:44rem;padding:1rem;background:var(--paper);color:var(--ink);\
font:16px/1.45 system-ui,sans-serif}h2{break-after:avoid}td{white-space:nowrap}td:last-child{white-space:normal}h1{font-size:1.4rem}h2{font-size:1.1rem;margin:1.4rem 0 .4rem}\
svg{width:100%;height:auto;display:block}figure{margin:.6rem 0;break-inside:avoid}\
.wide{overflow-x:auto}table{border-collapse:collapse;font-variant-numeric:tabular-nums}\
th,td{padding:.2rem .7rem .2rem 0;text-align:left;vertical-align:top;border-bottom:1px solid var(--faint)}\
tr{break-inside:avoid}.soft{color:var(--soft)}";

/// Writes the page.
pub fn profile_html(profile: &Profile, out: &mut impl Write) -> fmt::Result {
    let (from, to) = (profile.from.to_the_minute(), profile.to.to_the_minute());
    write!(
        out,
        "<!doctype html>\n<html lang=\"en\"><head><meta charset=\"utf-8\">\
         <meta name=\"viewport\" content=\"width=device-width,initial-scale=1\">\
         <title>The household's day</title><style>{STYLE}</style></head><body>\n\
         <h1>The household's day</h1>\n<p class=\"soft\">{from} to {to} ({}), {} intervals of 10 minutes</p>\n",
        escape(&profile.time_zone),
        profile.intervals
    )?;
    tide(profile, out)?;
    writeln!(out, "<h2>By time of day</h2>\n<figure>{}</figure>", profile.day_svg())?;
    for (n, rail) in profile.rails.iter().enumerate() {
        writeln!(out, "<figure>{}</figure>", rail.day_svg(&format!("rail{n}")))?;
    }
    highest(profile, out)?;
    for rail in profile.rails.iter().filter(|rail| rail.limit_v.is_some()) {
        above(rail, out)?;
    }
    writeln!(out, "<p>{CAUTION}</p>\n</body></html>")
}

fn tide(profile: &Profile, out: &mut impl Write) -> fmt::Result {
    writeln!(
        out,
        "<h2>Tide table as of {}</h2>\n<figure>{}</figure>",
        profile.as_of.to_the_minute(),
        profile.tide_svg()
    )?;
    if let Some(why) = &profile.no_tide {
        return writeln!(out, "<p>None: {}.</p>", escape(why));
    }
    if profile.turns.is_empty() {
        return writeln!(out, "<p>No high or low stands out in the hours to come.</p>");
    }
    writeln!(
        out,
        "<div class=\"wide\"><table><tr><th>turn</th><th>at about</th><th>mains, V</th><th>rails would stand at, V</th></tr>"
    )?;
    for turn in &profile.turns {
        self::turn(turn, out)?;
    }
    writeln!(
        out,
        "</table></div>\n<p class=\"soft\">In brackets: nine of ten 10-minute values are expected within; seconds go \
         further. ± is the projection's own expanded uncertainty (k = 2), on top.</p>"
    )
}

fn turn(turn: &TurnLine, out: &mut impl Write) -> fmt::Result {
    write!(
        out,
        "<tr><td>{}</td><td>{}</td><td>{:.1} ({:.1}–{:.1})</td><td>",
        turn.kind,
        turn.at.to_the_minute(),
        turn.mains_v,
        turn.low_v,
        turn.high_v
    )?;
    for rail in &turn.rails {
        write!(
            out,
            "{}.{} {}: {:.0} ({:.0}–{:.0}, each ± {:.0})<br>",
            escape(&rail.amplifier),
            escape(&rail.node),
            rail.loading.word(),
            rail.rail_v,
            rail.low_v,
            rail.high_v,
            rail.u_v
        )?;
    }
    writeln!(out, "</td></tr>")
}

fn highest(profile: &Profile, out: &mut impl Write) -> fmt::Result {
    if profile.highest.is_empty() {
        return Ok(());
    }
    writeln!(out, "<h2>Highest quarter hours of the last seven days</h2>\n<table>")?;
    for quarter in &profile.highest {
        writeln!(out, "<tr><td>{}</td><td>{:.1} V</td></tr>", quarter.at.to_the_minute(), quarter.rms_v)?;
    }
    writeln!(out, "</table>")
}

fn above(rail: &RailProfile, out: &mut impl Write) -> fmt::Result {
    let (Some(limit_v), Some(setpoint_v)) = (rail.limit_v, rail.setpoint_v) else { return Ok(()) };
    writeln!(
        out,
        "<h2>{}.{} ({}) above its limit of {limit_v:.0} V</h2>\n<div class=\"wide\"><table><tr><th>day</th><th>recorded, h</th>\
         <th>above limit, h</th><th>above setpoint ({setpoint_v:.0} V), h</th></tr>",
        escape(&rail.amplifier),
        escape(&rail.node),
        rail.loading.word()
    )?;
    for day in rail.days.iter().filter(|day| day.recorded_h > 0.0) {
        writeln!(
            out,
            "<tr><td>{}</td><td>{:.1}</td><td>{:.1}</td><td>{:.1}</td></tr>",
            day.date.format("%a %-d %b"),
            day.recorded_h,
            day.over_limit_h,
            day.over_setpoint_h
        )?;
    }
    writeln!(out, "</table></div>")
}
