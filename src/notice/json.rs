//! A notice as JSON, for programs. Keys come in this order; one without a value is left out.
//!
//! | key | type | meaning |
//! | --- | --- | --- |
//! | `version` | integer | 1. It grows when a key changes its meaning or goes away, not when one is added |
//! | `idempotency_key` | string | the same in every attempt of one notice, also in the header: take each key once |
//! | `notice_id` | integer | the notice's number in the outbox |
//! | `receiver` | string | the receiver's name in the config |
//! | `kind` | string | `raised`, `returned`, or `trial` (asked for by a person, no alarm behind it) |
//! | `priority` | string | `high`, `medium`, `low` |
//! | `condition`, `subject` | string | which alarm; `subject` is left out where it is the whole site |
//! | `at` | string | when that happened, RFC 3339 with the site's offset |
//! | `raised_at` | string | when the alarm was raised: with `condition` and `subject` it names one rise |
//! | `value_v`, `value_u_v` | number | the judged figure and its expanded uncertainty (k = 2) |
//! | `setpoint_v`, `limit_v` | number | what it was judged against, and the limit behind that |
//! | `mains_v` | number | mains at the time, V r.m.s. |
//! | `source` | string | `measured` or `projected`; a projected rail is what it *would* be |
//! | `loading` | string | the loading that a projection assumes |
//! | `note`, `advice` | string | what else there is to say; what to do |
//! | `recorded` | boolean | `false`: sent from memory because the record could not be written |
//! | `title`, `text` | string | the notice in words: one line; some lines, the caution at their end |
//! | `caution` | string | what the tool is not |
//!
//! The four figures are in SI units with the unit in the key: `_v` volts, `_a` amperes, `_w` watts, `_ohm` ohms, `_s`
//! seconds, `_hz` hertz, `_c` degrees Celsius, `_pct` per cent. A unit without a suffix here leaves the keys bare and
//! adds `unit`.

use chrono_tz::Tz;
use serde::ser::{Serialize, SerializeMap, Serializer};

use crate::alarm::Notice;
use crate::report::{CAUTION, LocalTime, notice_text};

const VERSION: u32 = 1;

/// The JSON of `notice`, its times in `zone`.
pub(super) fn render(notice: &Notice, zone: Tz) -> Vec<u8> {
    // Strings and numbers into a vector: there is nothing here that could fail.
    serde_json::to_vec(&Body { notice, zone }).unwrap_or_default()
}

struct Body<'a> {
    notice: &'a Notice,
    zone: Tz,
}

impl Serialize for Body<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        let Notice { key, facts, .. } = self.notice;
        let text = notice_text(self.notice, self.zone);
        let mut map = serializer.serialize_map(None)?;
        map.serialize_entry("version", &VERSION)?;
        map.serialize_entry("idempotency_key", &self.notice.idempotency_key)?;
        map.serialize_entry("notice_id", &self.notice.id)?;
        map.serialize_entry("receiver", &self.notice.receiver)?;
        map.serialize_entry("kind", &self.notice.kind)?;
        map.serialize_entry("priority", &self.notice.priority)?;
        map.serialize_entry("condition", &key.condition)?;
        some_text(&mut map, "subject", &key.subject)?;
        map.serialize_entry("at", &LocalTime::of(self.notice.at, self.zone))?;
        map.serialize_entry("raised_at", &LocalTime::of(self.notice.raised_at, self.zone))?;
        let suffix = suffix(&facts.unit);
        for (figure, value) in [
            ("value", facts.value),
            ("value_u", facts.value_u),
            ("setpoint", facts.setpoint),
            ("limit", facts.limit),
        ] {
            number(&mut map, &format!("{figure}{}", suffix.unwrap_or_default()), value)?;
        }
        if suffix.is_none() {
            some_text(&mut map, "unit", &facts.unit)?;
        }
        number(&mut map, "mains_v", facts.mains_v)?;
        some_text(&mut map, "source", &facts.source)?;
        some_text(&mut map, "loading", &facts.loading)?;
        some_text(&mut map, "note", &facts.note)?;
        some_text(&mut map, "advice", &self.notice.advice)?;
        map.serialize_entry("recorded", &self.notice.recorded)?;
        map.serialize_entry("title", &text.title)?;
        map.serialize_entry("text", &text.body)?;
        map.serialize_entry("caution", CAUTION)?;
        map.end()
    }
}

fn some_text<M: SerializeMap>(map: &mut M, key: &str, text: &str) -> Result<(), M::Error> {
    if text.is_empty() { Ok(()) } else { map.serialize_entry(key, text) }
}

/// JSON knows no NaN and no infinity: such a figure is left out.
fn number<M: SerializeMap>(map: &mut M, key: &str, value: Option<f64>) -> Result<(), M::Error> {
    match value.filter(|value| value.is_finite()) {
        Some(value) => map.serialize_entry(key, &value),
        None => Ok(()),
    }
}

fn suffix(unit: &str) -> Option<&'static str> {
    Some(match unit {
        "V" => "_v",
        "A" => "_a",
        "W" => "_w",
        "Ω" => "_ohm",
        "s" => "_s",
        "Hz" => "_hz",
        "°C" => "_c",
        "%" => "_pct",
        _ => return None,
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::alarm::{AlarmKey, Facts, NoticeKind, Priority};
    use crate::quantity::Utc;

    fn rail_high() -> Notice {
        Notice {
            id: 7,
            receiver: "phone".into(),
            kind: NoticeKind::Raised,
            priority: Priority::High,
            at: Utc(1_791_304_930_000), // 2026-10-06T16:42:10Z
            key: AlarmKey { condition: "rail-high".into(), subject: "hall.reservoir".into() },
            raised_at: Utc(1_791_304_930_000),
            facts: Facts {
                value: Some(491.6),
                value_u: Some(4.2),
                setpoint: Some(475.8),
                limit: Some(480.0),
                unit: "V".into(),
                mains_v: Some(239.3),
                source: "projected".into(),
                loading: "idle".into(),
                proved_on: None,
                note: String::new(),
            },
            advice: "Switch the amplifier off.".into(),
            idempotency_key: "4f1c-7".into(),
            recorded: true,
        }
    }

    fn json(notice: &Notice) -> String {
        let value: serde_json::Value = serde_json::from_slice(&render(notice, Tz::Europe__Berlin)).unwrap();
        assert_eq!(value["caution"], CAUTION);
        String::from_utf8(render(notice, Tz::Europe__Berlin)).unwrap().replace(",\"", ",\n\"")
    }

    #[test]
    fn the_json_of_a_projected_rail() {
        insta::assert_snapshot!(json(&rail_high()), @r#"
        {"version":1,
        "idempotency_key":"4f1c-7",
        "notice_id":7,
        "receiver":"phone",
        "kind":"raised",
        "priority":"high",
        "condition":"rail-high",
        "subject":"hall.reservoir",
        "at":"2026-10-06T18:42:10+02:00",
        "raised_at":"2026-10-06T18:42:10+02:00",
        "value_v":491.6,
        "value_u_v":4.2,
        "setpoint_v":475.8,
        "limit_v":480.0,
        "mains_v":239.3,
        "source":"projected",
        "loading":"idle",
        "advice":"Switch the amplifier off.",
        "recorded":true,
        "title":"rail-high: hall.reservoir would stand at 492 V ± 4 V",
        "text":"Alarm rail-high for hall.reservoir, priority high.\nIt would stand at 492 V ± 4 V, projected from mains at 239.3 V for the loading \"idle\"; the setpoint is 475.8 V, the limit 480 V.\nNothing proves that the amplifier is on.\nSince 18:42:10 CEST on Tue 6 Oct 2026.\nWhat to do: Switch the amplifier off.\nrailtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.",
        "caution":"railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe."}
        "#);
    }

    #[test]
    fn the_json_of_a_silent_logger_from_memory() {
        let mut notice = rail_high();
        notice.kind = NoticeKind::Returned;
        notice.key = AlarmKey { condition: "logger-silent".into(), subject: "bench".into() };
        notice.at = Utc(notice.raised_at.0 + 65_000);
        notice.facts =
            Facts { value: Some(65.0), setpoint: Some(30.0), unit: "s".into(), ..Facts::default() };
        notice.recorded = false;
        insta::assert_snapshot!(json(&notice), @r#"
        {"version":1,
        "idempotency_key":"4f1c-7",
        "notice_id":7,
        "receiver":"phone",
        "kind":"returned",
        "priority":"high",
        "condition":"logger-silent",
        "subject":"bench",
        "at":"2026-10-06T18:43:15+02:00",
        "raised_at":"2026-10-06T18:42:10+02:00",
        "value_s":65.0,
        "setpoint_s":30.0,
        "advice":"Switch the amplifier off.",
        "recorded":false,
        "title":"Back to normal: logger-silent, bench (not recorded)",
        "text":"Alarm logger-silent for bench has returned to normal.\nIt lasted 1 min 5 s; the setpoint is 30 s.\nRaised at 18:42:10 CEST on Tue 6 Oct 2026, returned at 18:43:15 CEST on Tue 6 Oct 2026, after 1 min 5 s.\nNot recorded: the record could not be written, so this comes from memory.\nrailtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.",
        "caution":"railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe."}
        "#);
    }

    #[test]
    fn the_json_of_a_trial() {
        let mut notice = rail_high();
        notice.kind = NoticeKind::Trial;
        notice.key.subject = String::new();
        notice.facts = Facts::default();
        notice.advice = String::new();
        insta::assert_snapshot!(json(&notice), @r#"
        {"version":1,
        "idempotency_key":"4f1c-7",
        "notice_id":7,
        "receiver":"phone",
        "kind":"trial",
        "priority":"high",
        "condition":"rail-high",
        "at":"2026-10-06T18:42:10+02:00",
        "raised_at":"2026-10-06T18:42:10+02:00",
        "recorded":true,
        "title":"Trial notice from railtide",
        "text":"A trial of the receiver phone, asked for at 18:42:10 CEST on Tue 6 Oct 2026.\nNo alarm stands behind it: if you can read this, notices reach you.\nrailtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.",
        "caution":"railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe."}
        "#);
    }

    #[test]
    fn a_unit_without_a_suffix_is_said_beside_the_figures() {
        let mut notice = rail_high();
        notice.facts = Facts { value: Some(3.0), unit: "furlongs".into(), ..Facts::default() };
        assert!(json(&notice).contains("\"value\":3.0,\n\"unit\":\"furlongs\""), "{}", json(&notice));
    }

    #[test]
    fn a_figure_that_is_none_is_left_out() {
        let mut notice = rail_high();
        notice.facts.value = Some(f64::NAN);
        notice.facts.mains_v = Some(f64::INFINITY);
        assert!(
            !json(&notice).contains("value_v") && !json(&notice).contains("mains_v"),
            "{}",
            json(&notice)
        );
    }
}
