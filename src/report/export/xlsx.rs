//! A workbook for people who will open it in a spreadsheet: typed columns, a sheet for each kind of row.

use std::io::{self, Seek, Write};

use chrono::{DateTime, Offset};
use chrono_tz::Tz;
use rust_xlsxwriter::{Format, Workbook, Worksheet, XlsxError};

use super::{Kind, Row, Rows};
use crate::quantity::Utc;

/// Rows that one sheet holds below its header (the format's own limit of 1,048,576 rows).
pub const XLSX_ROWS: u64 = 1_048_575;

/// From 1899-12-30, which a spreadsheet counts from, to 1970-01-01.
const DAYS_TO_1970: f64 = 25_569.0;

/// Collects a workbook and writes it into `out` at the end.
pub struct XlsxRows<W: Write + Seek + Send> {
    out: W,
    zone: Tz,
    book: Workbook,
    sheet: Option<Worksheet>,
    row: u32,
    time: Format,
    volts: Format,
    head: Format,
}

impl<W: Write + Seek + Send> XlsxRows<W> {
    /// Times are the local ones of `zone`, with their offset from UTC in a column of its own, since a spreadsheet's
    /// times know no zone.
    pub fn new(out: W, zone: Tz) -> Self {
        XlsxRows {
            out,
            zone,
            book: Workbook::new(),
            sheet: None,
            row: 0,
            time: Format::new().set_num_format("yyyy-mm-dd hh:mm:ss"),
            volts: Format::new().set_num_format("0.000"),
            head: Format::new().set_bold(),
        }
    }

    /// The local time as a spreadsheet counts it, days since 1899-12-30, and its offset from UTC.
    fn local(&self, at: Utc) -> (f64, String) {
        let local = DateTime::from_timestamp_millis(at.0).unwrap_or_default().with_timezone(&self.zone);
        let ms = local.naive_local().and_utc().timestamp_millis();
        (ms as f64 / 86_400_000.0 + DAYS_TO_1970, local.offset().fix().to_string())
    }

    fn keep_sheet(&mut self) {
        if let Some(sheet) = self.sheet.take() {
            self.book.push_worksheet(sheet);
        }
    }

    fn write(&mut self, row: Row<'_>) -> Result<(), XlsxError> {
        let at = match row {
            Row::Reading(_, reading) => reading.at,
            Row::Interval(_, interval) => interval.start,
            Row::Alarm(entry) => entry.at,
        };
        let (local, offset) = self.local(at);
        self.row += 1;
        let r = self.row;
        let Some(sheet) = &mut self.sheet else { return Ok(()) };
        sheet.write_number_with_format(r, 0, local, &self.time)?;
        sheet.write_string(r, 1, offset)?;
        match row {
            Row::Reading(channel, reading) => {
                sheet.write_string(r, 2, channel)?;
                sheet.write_number_with_format(r, 3, reading.value.volts(), &self.volts)?;
                sheet.write_string(r, 4, reading.quality.word())?;
            }
            Row::Interval(channel, i) => {
                sheet.write_string(r, 2, channel)?;
                for (column, volts) in [(3, i.rms_v), (4, i.min_v), (5, i.max_v)] {
                    sheet.write_number_with_format(r, column, volts, &self.volts)?;
                }
                sheet.write_number(r, 6, i.count)?;
                sheet.write_number(r, 7, (i.covered * 1000.0).round() / 10.0)?;
                sheet.write_boolean(r, 8, i.flagged)?;
            }
            Row::Alarm(entry) => {
                sheet.write_number(r, 2, entry.seq as f64)?;
                for (column, word) in [
                    (3, entry.key.to_string().as_str()),
                    (4, entry.event.word()),
                    (5, entry.from.word()),
                    (6, entry.to.word()),
                    (7, entry.priority.word()),
                    (8, entry.by.as_deref().unwrap_or_default()),
                    (12, &entry.facts.unit),
                ] {
                    sheet.write_string(r, column, word)?;
                }
                let facts = &entry.facts;
                for (column, figure) in
                    [(9, facts.value), (10, facts.setpoint), (11, facts.limit), (13, facts.mains_v)]
                {
                    if let Some(figure) = figure {
                        sheet.write_number_with_format(r, column, figure, &self.volts)?;
                    }
                }
            }
        }
        Ok(())
    }
}

impl<W: Write + Seek + Send> Rows for XlsxRows<W> {
    fn begin(&mut self, kind: Kind) -> io::Result<()> {
        self.keep_sheet();
        let mut sheet = Worksheet::new();
        let head = |sheet: &mut Worksheet| -> Result<(), XlsxError> {
            sheet.set_name(kind.word())?;
            let columns = kind.columns();
            let names = columns[..1].iter().chain(&["utc_offset"]).chain(&columns[1..]);
            for (column, name) in names.enumerate() {
                sheet.write_string_with_format(0, column as u16, *name, &self.head)?;
            }
            sheet.set_column_width(0, 20)?;
            sheet.set_freeze_panes(1, 0)?;
            Ok(())
        };
        head(&mut sheet).map_err(io::Error::other)?;
        self.sheet = Some(sheet);
        self.row = 0;
        Ok(())
    }

    fn row(&mut self, row: Row<'_>) -> io::Result<()> {
        self.write(row).map_err(io::Error::other)
    }

    fn finish(&mut self) -> io::Result<()> {
        self.keep_sheet();
        self.book.save_to_writer(&mut self.out).map_err(io::Error::other)?;
        self.out.flush()
    }
}
