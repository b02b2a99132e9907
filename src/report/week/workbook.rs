//! The week as a workbook: the same tables as the page, a sheet each, and the intervals behind them.

use std::io::{Seek, Write};

use rust_xlsxwriter::{Format, Workbook, Worksheet, XlsxError};

use super::Week;
use super::text::{limits, verdict};
use crate::report::time::LocalTime;

/// Writes the workbook into `out`.
pub fn week_workbook(week: &Week<'_>, out: &mut (impl Write + Seek + Send)) -> Result<(), XlsxError> {
    let mut book = Workbook::new();
    let mut summary = sheet("summary", &["what", "value"])?;
    let mut rows: Vec<(&str, String)> = vec![
        ("site", week.site.to_owned()),
        ("from", week.from.rfc3339()),
        ("to", week.to.rfc3339()),
        ("time zone", week.time_zone.name().to_owned()),
        ("measured by", week.instrument.clone()),
    ];
    rows.push(("method", super::METHOD.to_owned()));
    rows.push(("cautions", super::CAUTIONS.to_owned()));
    for (i, (what, value)) in rows.iter().enumerate() {
        summary.write_string(i as u32 + 1, 0, *what)?;
        summary.write_string(i as u32 + 1, 1, value)?;
    }
    let counts = week.intervals;
    let p = week.percentiles;
    let figures = [
        ("declared_v", Some(week.declared_v)),
        ("intervals expected", Some(counts.expected as f64)),
        ("intervals valid", Some(counts.valid as f64)),
        ("intervals flagged", Some(counts.flagged as f64)),
        ("min_v", week.min_v),
        ("p1_v", p.map(|p| p.p1_v)),
        ("p5_v", p.map(|p| p.p5_v)),
        ("p50_v", p.map(|p| p.p50_v)),
        ("p95_v", p.map(|p| p.p95_v)),
        ("p99_v", p.map(|p| p.p99_v)),
        ("max_v", week.max_v),
    ];
    for (r, (what, value)) in (rows.len() as u32 + 1..).zip(figures) {
        summary.write_string(r, 0, what)?;
        number(&mut summary, r, 1, value)?;
    }
    book.push_worksheet(summary);
    book.push_worksheet(rules(week)?);
    book.push_worksheet(days(week)?);
    book.push_worksheet(rails(week)?);
    book.push_worksheet(intervals(week)?);
    book.save_to_writer(out)
}

fn sheet(name: &str, heads: &[&str]) -> Result<Worksheet, XlsxError> {
    let mut sheet = Worksheet::new();
    sheet.set_name(name)?;
    let bold = Format::new().set_bold();
    for (column, head) in heads.iter().enumerate() {
        sheet.write_string_with_format(0, column as u16, *head, &bold)?;
    }
    sheet.set_column_width(0, 26)?;
    sheet.set_freeze_panes(1, 0)?;
    Ok(sheet)
}

fn number(sheet: &mut Worksheet, row: u32, column: u16, value: Option<f64>) -> Result<(), XlsxError> {
    if let Some(value) = value {
        sheet.write_number(row, column, (value * 1000.0).round() / 1000.0)?;
    }
    Ok(())
}

fn rules(week: &Week<'_>) -> Result<Worksheet, XlsxError> {
    let mut sheet = sheet(
        "rules",
        &["rule", "statistic", "limits", "low_v", "high_v", "share_pct", "required_pct", "verdict", "source"],
    )?;
    for (i, rule) in week.rules.iter().enumerate() {
        let r = i as u32 + 1;
        sheet.write_string(r, 0, &rule.rule)?;
        sheet.write_string(r, 1, rule.statistic)?;
        sheet.write_string(r, 2, limits(rule))?;
        for (column, value) in
            [(3, rule.low_v), (4, rule.high_v), (5, rule.share_pct), (6, rule.required_pct)]
        {
            number(&mut sheet, r, column, value)?;
        }
        sheet.write_string(r, 7, verdict(rule))?;
        sheet.write_string(r, 8, &rule.source)?;
    }
    Ok(sheet)
}

fn days(week: &Week<'_>) -> Result<Worksheet, XlsxError> {
    let mut sheet = sheet("days", &["date", "min_v", "rms_v", "max_v", "valid", "flagged", "expected"])?;
    for (i, day) in week.days.iter().enumerate() {
        let r = i as u32 + 1;
        sheet.write_string(r, 0, day.date.to_string())?;
        let counts =
            [day.intervals.valid, day.intervals.flagged, day.intervals.expected].map(|n| Some(n as f64));
        for (column, value) in [day.min_v, day.rms_v, day.max_v].into_iter().chain(counts).enumerate() {
            number(&mut sheet, r, column as u16 + 1, value)?;
        }
    }
    Ok(sheet)
}

fn rails(week: &Week<'_>) -> Result<Worksheet, XlsxError> {
    let heads = [
        "rail",
        "loading",
        "limit_v",
        "setpoint_v",
        "over_limit_h",
        "over_setpoint_h",
        "highest_rail_v",
        "highest_rail_u_v",
        "reduction_v",
        "at",
        "basis",
    ];
    let mut sheet = sheet("rails", &heads)?;
    for (i, rail) in week.amplifiers.iter().enumerate() {
        let r = i as u32 + 1;
        sheet.write_string(r, 0, format!("{}.{}", rail.name, rail.node))?;
        sheet.write_string(r, 1, rail.loading)?;
        let figures = [
            Some(rail.limit_v),
            Some(rail.setpoint_v),
            Some(rail.over_limit_h),
            Some(rail.over_setpoint_h),
            rail.highest_rail_v,
            rail.highest_rail_u_v,
            rail.reduction_v,
        ];
        for (column, value) in figures.into_iter().enumerate() {
            number(&mut sheet, r, column as u16 + 2, value)?;
        }
        sheet.write_string(r, 9, rail.at.map(LocalTime::rfc3339).unwrap_or_default())?;
        sheet.write_string(r, 10, super::basis_words(rail.basis))?;
    }
    Ok(sheet)
}

fn intervals(week: &Week<'_>) -> Result<Worksheet, XlsxError> {
    let mut sheet =
        sheet("intervals", &["start", "rms_v", "min_v", "max_v", "readings", "covered_pct", "flagged"])?;
    for (i, interval) in week.all_intervals.iter().enumerate() {
        let r = i as u32 + 1;
        sheet.write_string(r, 0, LocalTime::of(interval.start, week.time_zone).rfc3339())?;
        let figures = [
            interval.rms_v,
            interval.min_v,
            interval.max_v,
            f64::from(interval.count),
            interval.covered * 100.0,
        ];
        for (column, value) in figures.into_iter().enumerate() {
            number(&mut sheet, r, column as u16 + 1, Some(value))?;
        }
        sheet.write_boolean(r, 6, interval.flagged)?;
    }
    Ok(sheet)
}
