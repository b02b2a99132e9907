//! The week in words and aligned figures, for a terminal.

use std::fmt::{self, Write};
use std::time::Duration;

use comfy_table::{CellAlignment, Table};

use super::{CAUTIONS, METHOD, RailLine, RuleLine, Week, basis_words};
use crate::quantity::Uncertain;
use crate::report::time::span;

/// Writes the week as text.
pub fn week_text(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    writeln!(
        out,
        "{}: mains from {} to {} ({})",
        week.site,
        week.from.people(),
        week.to.people(),
        week.time_zone
    )?;
    writeln!(out, "Measured by {}.", week.instrument)?;
    let counts = week.intervals;
    writeln!(
        out,
        "{} of {} ten-minute intervals are valid, {} flagged, {} missing.",
        counts.valid,
        counts.expected,
        counts.flagged,
        counts.expected.saturating_sub(counts.valid + counts.flagged)
    )?;
    if week.is_empty() {
        writeln!(out, "Nothing was recorded in this time: nothing can be said of the mains or of any rail.")?;
        return Ok(());
    }
    if let Some(p) = week.percentiles {
        writeln!(
            out,
            "\nMains, V: 1 % {:.1}   5 % {:.1}   median {:.1}   95 % {:.1}   99 % {:.1}",
            p.p1_v, p.p5_v, p.p50_v, p.p95_v, p.p99_v
        )?;
    }
    if let (Some(low), Some(high)) = (week.min_v, week.max_v) {
        writeln!(out, "Lowest reading {low:.1} V, highest {high:.1} V; declared {} V.", week.declared_v)?;
    }
    rules(week, out)?;
    days(week, out)?;
    rails(week, out)?;
    events(week, out)?;
    writeln!(out, "\n{METHOD}\n{CAUTIONS}")
}

fn rules(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    if week.rules.is_empty() {
        return Ok(());
    }
    let mut table = plain(&["rule", "statistic", "limits, V", "within", "required", "verdict"]);
    for rule in &week.rules {
        table.add_row([
            rule.rule.clone(),
            rule.statistic.to_owned(),
            limits(rule),
            percent(rule.share_pct),
            rule.required_pct.map_or_else(String::new, |pct| format!("{pct} %")),
            verdict(rule),
        ]);
    }
    writeln!(out, "\n{table}")
}

/// `207.0 to 253.0`.
pub(super) fn limits(rule: &RuleLine) -> String {
    match (rule.low_v, rule.high_v) {
        (Some(low), Some(high)) => format!("{low:.1} to {high:.1}"),
        (Some(low), None) => format!("from {low:.1}"),
        (None, Some(high)) => format!("up to {high:.1}"),
        (None, None) => String::new(),
    }
}

pub(super) fn percent(share: Option<f64>) -> String {
    share.map_or_else(|| "unknown".to_owned(), |pct| format!("{pct:.2} %"))
}

pub(super) fn verdict(rule: &RuleLine) -> String {
    match rule.held {
        Some(false) => format!("BROKEN, {} of {} outside", rule.outside, rule.judged),
        _ => rule.words.to_owned(),
    }
}

fn days(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    let mut table = plain(&["day", "lowest V", "r.m.s. V", "highest V", "valid"]);
    right(&mut table, 1..5);
    for day in &week.days {
        table.add_row([
            day.date.format("%a %-d %b").to_string(),
            volts(day.min_v),
            volts(day.rms_v),
            volts(day.max_v),
            format!("{} of {}", day.intervals.valid, day.intervals.expected),
        ]);
    }
    writeln!(out, "\n{table}")
}

pub(super) fn volts(value: Option<f64>) -> String {
    value.map_or_else(|| "–".to_owned(), |v| format!("{v:.1}"))
}

fn rails(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    for rail in &week.amplifiers {
        writeln!(out, "\n{}", rail_sentence(rail))?;
        for over in rail.excursions.iter().take(LISTED) {
            writeln!(
                out,
                "  {} for {}, up to {:.0} V",
                over.from.people(),
                span(Duration::from_secs_f64(over.length_s)),
                over.highest_v
            )?;
        }
        more(rail.excursions.len(), out)?;
    }
    for finding in &week.findings {
        writeln!(out, "\nThe {} as it stands: {}", finding.amplifier, finding.text)?;
    }
    Ok(())
}

/// Events and excursions are listed up to here; the JSON holds them all.
const LISTED: usize = 10;

fn more(count: usize, out: &mut impl Write) -> fmt::Result {
    if count > LISTED { writeln!(out, "  and {} more", count - LISTED) } else { Ok(()) }
}

/// What is to be said of one rail.
pub(super) fn rail_sentence(rail: &RailLine) -> String {
    let mut text =
        format!("The {}'s {} ({}, {}): ", rail.name, rail.node, rail.loading, basis_words(rail.basis));
    let (Some(highest), Some(at)) = (rail.highest_rail_v, rail.at) else {
        return text + "nothing is known of this time.";
    };
    let highest = Uncertain::new(highest, rail.highest_rail_u_v.unwrap_or_default());
    let _ = write!(
        text,
        "over its limit of {:.0} V{} for {}, over its setpoint of {:.0} V for {}; highest {highest} on {}. ",
        rail.limit_v,
        if rail.why.is_empty() { String::new() } else { format!(" ({})", rail.why) },
        hours(rail.over_limit_h),
        rail.setpoint_v,
        hours(rail.over_setpoint_h),
        at.people()
    );
    match rail.reduction_v {
        Some(reduction) if reduction > 0.0 => {
            let pct = 100.0 * reduction / highest.volts;
            let _ = write!(
                text,
                "A rail lower by {reduction:.0} V ({pct:.1} %) would have stayed under its setpoint throughout."
            );
        }
        _ => text.push_str("It would have stayed under its setpoint throughout."),
    }
    text
}

/// `no time at all`, `40 min`, `5 h 20 min`.
pub(super) fn hours(hours: f64) -> String {
    if hours <= 0.0 {
        "no time at all".to_owned()
    } else {
        span(Duration::from_secs_f64((hours * 3600.0).round()))
    }
}

fn events(week: &Week<'_>, out: &mut impl Write) -> fmt::Result {
    if week.events.is_empty() {
        return writeln!(out, "\nNo dip, swell or interruption was seen in the readings.");
    }
    writeln!(out)?;
    for event in week.events.iter().take(LISTED) {
        let length = Duration::from_secs_f64(event.length_s);
        writeln!(
            out,
            "{} on {}, {}: {:.1} V",
            event.kind,
            event.from.people(),
            span(length),
            event.extreme_v
        )?;
    }
    more(week.events.len(), out)
}

fn plain(heads: &[&str]) -> Table {
    let mut table = Table::new();
    table.load_style(comfy_table::presets::NOTHING).set_header(heads.to_vec());
    table
}

fn right(table: &mut Table, columns: std::ops::Range<usize>) {
    for column in columns {
        if let Some(column) = table.column_mut(column) {
            column.set_cell_alignment(CellAlignment::Right);
        }
    }
}
