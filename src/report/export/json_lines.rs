//! JSON Lines: one object a line, keys as the CSV's columns, with figures as numbers.

use std::io::{self, Write};

use chrono_tz::Tz;
use serde_json::{Value, json};

use super::{Kind, Row, Rows, StampWriter};

/// Writes JSON Lines into `out`.
#[derive(Debug)]
pub struct JsonLines<W: Write> {
    out: W,
    stamps: StampWriter,
}

impl<W: Write> JsonLines<W> {
    /// Times are in `zone`. `out` should be buffered.
    pub fn new(out: W, zone: Tz) -> Self {
        JsonLines { out, stamps: StampWriter::new(zone) }
    }

    fn stamp(&mut self, at: crate::quantity::Utc) -> io::Result<String> {
        let mut text = Vec::with_capacity(32);
        self.stamps.write(at, &mut text)?;
        Ok(String::from_utf8_lossy(&text).into_owned())
    }
}

impl<W: Write> Rows for JsonLines<W> {
    fn begin(&mut self, _kind: Kind) -> io::Result<()> {
        Ok(())
    }

    fn row(&mut self, row: Row<'_>) -> io::Result<()> {
        let line: Value = match row {
            Row::Reading(channel, r) => json!({
                "time": self.stamp(r.at)?, "channel": channel, "value_v": r.value.volts(), "quality": r.quality,
            }),
            Row::Interval(channel, i) => json!({
                "start": self.stamp(i.start)?, "channel": channel, "rms_v": i.rms_v, "min_v": i.min_v,
                "max_v": i.max_v, "readings": i.count, "covered_pct": i.covered * 100.0, "flagged": i.flagged,
            }),
            Row::Alarm(entry) => json!({
                "time": self.stamp(entry.at)?, "number": entry.seq, "alarm": entry.key.to_string(),
                "event": entry.event, "from": entry.from.word(), "to": entry.to.word(),
                "priority": entry.priority, "by": entry.by, "facts": entry.facts,
            }),
        };
        serde_json::to_writer(&mut self.out, &line)?;
        self.out.write_all(b"\n")
    }

    fn finish(&mut self) -> io::Result<()> {
        self.out.flush()
    }
}
