//! CSV by RFC 4180: a header, one line a row, CR LF at its end, quotes only where they are needed.

use std::io::{self, Write};

use chrono_tz::Tz;

use super::{Kind, Row, Rows, StampWriter, write_volts};

/// Writes CSV into `out`; one kind only, since a CSV file has one header.
#[derive(Debug)]
pub struct CsvRows<W: Write> {
    out: W,
    stamps: StampWriter,
}

impl<W: Write> CsvRows<W> {
    /// Times are in `zone`. `out` should be buffered.
    pub fn new(out: W, zone: Tz) -> Self {
        CsvRows { out, stamps: StampWriter::new(zone) }
    }
}

impl<W: Write> Rows for CsvRows<W> {
    fn begin(&mut self, kind: Kind) -> io::Result<()> {
        self.out.write_all(kind.columns().join(",").as_bytes())?;
        self.out.write_all(b"\r\n")
    }

    fn row(&mut self, row: Row<'_>) -> io::Result<()> {
        match row {
            Row::Reading(channel, reading) => {
                self.stamps.write(reading.at, &mut self.out)?;
                self.out.write_all(b",")?;
                write_field(&mut self.out, channel)?;
                self.out.write_all(b",")?;
                write_volts(&mut self.out, reading.value.0)?;
                self.out.write_all(b",")?;
                self.out.write_all(reading.quality.word().as_bytes())?;
            }
            Row::Interval(channel, interval) => {
                self.stamps.write(interval.start, &mut self.out)?;
                self.out.write_all(b",")?;
                write_field(&mut self.out, channel)?;
                write!(
                    self.out,
                    ",{:.3},{:.3},{:.3},{},{:.1},{}",
                    interval.rms_v,
                    interval.min_v,
                    interval.max_v,
                    interval.count,
                    interval.covered * 100.0,
                    if interval.flagged { "yes" } else { "no" }
                )?;
            }
            Row::Alarm(entry) => {
                self.stamps.write(entry.at, &mut self.out)?;
                let facts = &entry.facts;
                for field in [
                    entry.seq.to_string(),
                    entry.key.to_string(),
                    entry.event.word().to_owned(),
                    entry.from.word().to_owned(),
                    entry.to.word().to_owned(),
                    entry.priority.word().to_owned(),
                    entry.by.clone().unwrap_or_default(),
                    figure(facts.value),
                    figure(facts.setpoint),
                    figure(facts.limit),
                    facts.unit.clone(),
                    figure(facts.mains_v),
                ] {
                    self.out.write_all(b",")?;
                    write_field(&mut self.out, &field)?;
                }
            }
        }
        self.out.write_all(b"\r\n")
    }

    fn finish(&mut self) -> io::Result<()> {
        self.out.flush()
    }
}

/// A figure to three decimals; empty where there is none.
fn figure(value: Option<f64>) -> String {
    value.map_or_else(String::new, |value| format!("{value:.3}"))
}

/// RFC 4180 2.6, 2.7: quoted where it holds a comma, a quote or a line break. A field that a spreadsheet would take for
/// a formula is led by an apostrophe: names can come from outside.
fn write_field(out: &mut impl Write, field: &str) -> io::Result<()> {
    let is_formula =
        field.starts_with(['=', '+', '@', '\t']) || (field.starts_with('-') && field.parse::<f64>().is_err());
    if !is_formula && !field.contains([',', '"', '\r', '\n']) {
        return out.write_all(field.as_bytes());
    }
    let guard = if is_formula { "'" } else { "" };
    write!(out, "\"{guard}{}\"", field.replace('"', "\"\""))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn fields_are_quoted_where_they_must_be_and_formulas_are_disarmed() {
        for (field, written) in [
            ("mains", "mains"),
            ("a,b", "\"a,b\""),
            ("5\" tube", "\"5\"\" tube\""),
            ("=1+1", "\"'=1+1\""),
            ("-3.5", "-3.5"),
        ] {
            let mut out = Vec::new();
            write_field(&mut out, field).unwrap();
            assert_eq!(String::from_utf8(out).unwrap(), written);
        }
    }
}
