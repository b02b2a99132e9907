//! The week as one HTML file that needs no network and no script, and prints on two sheets of A4.

use std::fmt::{self, Write};

use super::text::{limits, percent, rail_sentence, verdict, volts};
use super::{BandPoint, CAUTIONS, METHOD, Week};
use crate::report::chart::{RailScale, TwoScale, escape, mains_range};

const STYLE: &str = "\
:root{--paper:#fbf7ef;--ink:#2b2620;--faint:#d9cfbd;--soft:#6d6455;--brass:#8a6414;--danger:#a3231c;--good:#2c6e3f}\
@media(prefers-color-scheme:dark){:root{--paper:#211d18;--ink:#efe6d6;--faint:#4a4235;--soft:#b5a88f;--brass:#dcb45c;\
--danger:#ff9a8f;--good:#8fd0a0}}\
*{box-sizing:border-box}body{margin:0 auto;padding:1rem;max-width:60rem;background:var(--paper);color:var(--ink);\
font:1rem/1.45 system-ui,sans-serif}h1{font-size:1.35rem;margin:0 0 .2rem}h2{font-size:1.05rem;margin:1.1rem 0 .3rem;\
border-bottom:2px solid var(--brass)}p{margin:.3rem 0}.soft{color:var(--soft)}.wide{overflow-x:auto}\
table{border-collapse:collapse;width:100%;font-size:.92rem}th,td{text-align:left;padding:.15rem .5rem .15rem 0;\
border-bottom:1px solid var(--faint);vertical-align:top}th{color:var(--soft);font-weight:600}\
td.n,th.n{text-align:right;font-variant-numeric:tabular-nums}.broken{color:var(--danger);font-weight:700}\
.held{color:var(--good)}figure{margin:0 0 .4rem}figure svg{display:block;width:100%;height:auto}\
.figures{display:flex;flex-wrap:wrap;gap:.2rem 1.6rem;margin:.4rem 0}.figures b{display:block;font-size:1.15rem}\
@page{size:A4;margin:11mm 13mm}\
@media print{:root{--paper:#fff;--ink:#000;--faint:#bbb;--soft:#444;--brass:#5b4210;--danger:#000;--good:#000}\
body{padding:0;max-width:none;font-size:9.5pt;line-height:1.32}h1{font-size:14pt}h2{font-size:11pt;margin:.5rem 0 .15rem}\
.strips{break-before:page}figure{break-inside:avoid;margin:0 0 1mm}figure svg{width:100%;height:auto}}";

/// Writes the page.
pub fn week_html(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    let title = format!("{}: a week of mains, from {}", week.site, week.from.day());
    write!(
        out,
        "<!doctype html>\n<html lang=\"en\"><head><meta charset=\"utf-8\"><meta name=\"viewport\" \
         content=\"width=device-width,initial-scale=1\"><title>{}</title><style>{STYLE}</style></head>\n<body><main>\n",
        escape(&title)
    )?;
    writeln!(
        out,
        "<header><h1>{}</h1><p class=\"soft\">{} to {} ({}). Measured by {}.</p></header>",
        escape(&title),
        week.from.in_full(),
        week.to.in_full(),
        escape(week.time_zone.name()),
        escape(&week.instrument)
    )?;
    if week.is_empty() {
        out.write_str(
            "<p>Nothing was recorded in this time: nothing can be said of the mains or of any rail.</p>\n",
        )?;
    } else {
        figures(week, out)?;
        rules(week, out)?;
        rails(week, out)?;
        days(week, out)?;
        events(week, out)?;
    }
    writeln!(out, "<h2>How, and cautions</h2><p class=\"soft\">{METHOD}</p><p>{CAUTIONS}</p>")?;
    if !week.is_empty() {
        strips(week, out)?;
    }
    out.write_str("</main></body></html>\n")
}

fn figures(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    let counts = week.intervals;
    write!(
        out,
        "<p>{} of {} ten-minute intervals are valid, {} flagged, {} missing. Declared {} V.</p>\n<div class=\"figures\">",
        counts.valid,
        counts.expected,
        counts.flagged,
        counts.expected.saturating_sub(counts.valid + counts.flagged),
        week.declared_v
    )?;
    let mut figure = |name: &str, value: Option<f64>| match value {
        Some(value) => write!(out, "<span>{name}<b>{value:.1} V</b></span>"),
        None => Ok(()),
    };
    figure("lowest reading", week.min_v)?;
    if let Some(p) = week.percentiles {
        figure("1 %", Some(p.p1_v))?;
        figure("5 %", Some(p.p5_v))?;
        figure("median", Some(p.p50_v))?;
        figure("95 %", Some(p.p95_v))?;
        figure("99 %", Some(p.p99_v))?;
    }
    figure("highest reading", week.max_v)?;
    out.write_str("</div>\n")
}

fn rules(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    if week.rules.is_empty() {
        return Ok(());
    }
    out.write_str(
        "<h2>Supply rules</h2><div class=\"wide\"><table><tr><th>rule</th><th>statistic</th><th class=\"n\">limits, V</th>\
         <th class=\"n\">within</th><th class=\"n\">required</th><th>verdict</th></tr>\n",
    )?;
    for rule in &week.rules {
        let class = match rule.held {
            Some(true) => "held",
            Some(false) => "broken",
            None => "soft",
        };
        writeln!(
            out,
            "<tr><td title=\"{}\">{}</td><td>{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td>\
             <td class=\"{class}\">{}</td></tr>",
            escape(&rule.source),
            escape(&rule.rule),
            rule.statistic,
            limits(rule),
            percent(rule.share_pct),
            rule.required_pct.map_or_else(String::new, |pct| format!("{pct} %")),
            verdict(rule)
        )?;
    }
    out.write_str("</table></div>\n<p class=\"soft\">Sources: ")?;
    let mut sources: Vec<String> =
        week.rules.iter().map(|rule| format!("{}: {}", rule.rule, rule.source)).collect();
    sources.dedup();
    writeln!(out, "{}.</p>", escape(&sources.join("; ")))
}

fn rails(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    if week.amplifiers.is_empty() {
        return out.write_str("<p>No amplifier with a limit and a known supply: no rail is projected.</p>\n");
    }
    out.write_str("<h2>Rails</h2>\n")?;
    for rail in &week.amplifiers {
        writeln!(out, "<p>{}</p>", escape(&rail_sentence(rail)))?;
    }
    for finding in &week.findings {
        writeln!(
            out,
            "<p><b>The {} as it stands:</b> {}</p>",
            escape(&finding.amplifier),
            escape(&finding.text)
        )?;
    }
    Ok(())
}

fn days(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    out.write_str(
        "<h2>Days</h2><div class=\"wide\"><table><tr><th>day</th><th class=\"n\">lowest, V</th><th class=\"n\">r.m.s., V</th>\
         <th class=\"n\">highest, V</th><th class=\"n\">valid intervals</th></tr>\n",
    )?;
    for day in &week.days {
        writeln!(
            out,
            "<tr><td>{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{}</td><td class=\"n\">{} of {}</td></tr>",
            day.date.format("%A %-d %B"),
            volts(day.min_v),
            volts(day.rms_v),
            volts(day.max_v),
            day.intervals.valid,
            day.intervals.expected
        )?;
    }
    out.write_str("</table></div>\n")
}

/// Events are listed up to here on paper.
const LISTED: usize = 8;

fn events(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    out.write_str("<h2>Dips, swells, interruptions</h2>\n")?;
    if week.events.is_empty() {
        return out.write_str("<p>None was seen in the readings.</p>\n");
    }
    let listed: Vec<String> = week
        .events
        .iter()
        .take(LISTED)
        .map(|e| format!("{} on {}, {:.0} s, {:.1} V", e.kind, e.from.people(), e.length_s, e.extreme_v))
        .collect();
    let more = week.events.len().saturating_sub(LISTED);
    let tail = if more > 0 { format!("; and {more} more") } else { String::new() };
    writeln!(out, "<p>{}{tail}.</p>", escape(&listed.join("; ")))
}

/// A two-scale curve for each day, all on one scale; the right-hand side is the first rail's.
fn strips(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    let names: Vec<String> =
        week.amplifiers.iter().map(|rail| format!("{}.{}, {}", rail.name, rail.node, rail.loading)).collect();
    let rail =
        week.amplifiers.first().zip(week.curves.first().and_then(Option::as_ref)).map(|(line, curve)| {
            RailScale { name: &names[0], curve, limit_v: line.limit_v, setpoint_v: Some(line.setpoint_v) }
        });
    let range = mains_range(&week.points, rail.as_ref());
    out.write_str("<section class=\"strips\"><h2>Day by day: mains on the left")?;
    if rail.is_some() {
        out.write_str(", on the right where the rail would have stood")?;
    }
    out.write_str("</h2>\n")?;
    for (i, day) in week.days.iter().enumerate() {
        let points: Vec<BandPoint> =
            week.points.iter().filter(|p| (day.from..day.to).contains(&p.at)).copied().collect();
        let title = day.date.format("%A %-d %B").to_string();
        let strip = TwoScale {
            id: &format!("day-{}", i + 1),
            title: &title,
            zone: week.time_zone,
            from: day.from,
            to: day.to,
            recorded: &points,
            expected: &[],
            rail: rail.clone(),
            mains_v: range,
            height: 110.0,
        };
        writeln!(out, "<figure>{}</figure>", strip.svg())?;
    }
    out.write_str("</section>\n")
}
