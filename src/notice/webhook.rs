//! The webhook: one HTTP POST of our JSON per attempt.
//!
//! # The JSON
//!
//! `POST` with `Content-Type: application/json`, `Idempotency-Key: …`, `User-Agent: railtide/VERSION` and, where the
//! config names a token, `Authorization: Bearer …`. Keys come in this order; one without a value is left out.
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
//!
//! # The answer
//!
//! | answer | what becomes of the notice |
//! | --- | --- |
//! | any 2xx | delivered; the body isn't looked at |
//! | none (refused, no such host, TLS, closed early, not within 10 s), 408, 425, 429, 5xx, and anything else that is no HTTP final answer | tried again without end, `Retry-After` kept |
//! | 410 | given up at once |
//! | 400, 413, 414, 415, 422, 431 | it dislikes this notice: given up after [`DISLIKED_ALLOWED`] such answers |
//! | any other 4xx, and 3xx (redirects are never followed) | address or token is wrong: given up after [`WRONG_ALLOWED`], about a day, in which the owner can mend it |

use std::time::Duration;

use chrono::{DateTime, NaiveDateTime};
use chrono_tz::Tz;
use reqwest::header::{AUTHORIZATION, CONTENT_TYPE, HeaderMap, HeaderValue, RETRY_AFTER};
use reqwest::{Client, Response, StatusCode, Url};
use secrecy::{ExposeSecret, SecretString};
use serde::ser::{Serialize, SerializeMap, Serializer};

use super::NoticeError;
use super::route::{Answer, Verdict};
use super::secret::resolve;
use crate::alarm::Notice;
use crate::clock::Clock;
use crate::config::SecretSource;
use crate::quantity::Utc;
use crate::report::{CAUTION, notice_text, rfc3339};

/// From the first packet to the answer's status, and for what is read of its body.
const TIME_LIMIT: Duration = Duration::from_secs(10);
/// No more is read of an answer's body.
const BODY_LIMIT: usize = 64 * 1024;
/// No more of it is shown.
const SHOWN_CHARS: usize = 120;
/// Answers that dislike the notice itself.
const DISLIKED_ALLOWED: u32 = 5;
/// Answers that say that address or token is wrong: 100 attempts take about a day.
const WRONG_ALLOWED: u32 = 100;
const VERSION: u32 = 1;

/// A webhook receiver and its client.
pub(super) struct Webhook {
    url: Url,
    client: Client,
    token: Option<SecretString>,
}

impl Webhook {
    pub(super) fn new(name: &str, url: &str, token: Option<&SecretSource>) -> Result<Self, NoticeError> {
        let bad_url = |found| NoticeError::Url { receiver: name.to_owned(), found };
        let url = Url::parse(url).map_err(|_| bad_url("no URL"))?;
        if !matches!(url.scheme(), "http" | "https") {
            return Err(bad_url("neither http nor https"));
        }
        let mut headers = HeaderMap::new();
        headers.insert(CONTENT_TYPE, HeaderValue::from_static("application/json"));
        let token = token
            .map(resolve)
            .transpose()
            .map_err(|cause| NoticeError::Secret { receiver: name.to_owned(), cause })?;
        if let Some(token) = &token {
            let mut bearer = HeaderValue::try_from(format!("Bearer {}", token.expose_secret()))
                .map_err(|_| NoticeError::TokenCharacters { receiver: name.to_owned() })?;
            bearer.set_sensitive(true);
            headers.insert(AUTHORIZATION, bearer);
        }
        Ok(Webhook { client: client(name, &url, headers)?, url, token })
    }

    /// One POST of `body`.
    pub(super) async fn deliver(&self, idempotency_key: &str, body: Vec<u8>, clock: &Clock) -> Answer {
        let deadline = clock.now().mono + TIME_LIMIT;
        let request =
            self.client.post(self.url.clone()).header("Idempotency-Key", idempotency_key).body(body).send();
        let sent = tokio::select! {
            sent = request => sent,
            () = clock.sleep_until(deadline) => {
                let said = format!("no answer within {} s", TIME_LIMIT.as_secs());
                return Answer { verdict: Verdict::Later { retry_after: None }, said };
            }
        };
        let response = match sent {
            Ok(response) => response,
            Err(error) => {
                let said = self.without_secrets(&innermost(error));
                return Answer { verdict: Verdict::Later { retry_after: None }, said };
            }
        };
        let status = response.status();
        let retry_after = response
            .headers()
            .get(RETRY_AFTER)
            .and_then(|value| value.to_str().ok())
            .and_then(|value| wait_asked_for(value, clock.now().utc));
        let mut said = status.to_string();
        // What a receiver adds to a failure helps to find it; what it adds to a success is nobody's business.
        if !status.is_success() {
            let body = tokio::select! {
                body = beginning(response) => body,
                () = clock.sleep_until(deadline) => Vec::new(),
            };
            let line = first_line(&body);
            if !line.is_empty() {
                said = format!("{said}: {line}");
            }
        }
        Answer { verdict: verdict(status, retry_after), said: self.without_secrets(&said) }
    }

    /// Some receivers send back what they were sent.
    fn without_secrets(&self, said: &str) -> String {
        match &self.token {
            Some(token) => said.replace(token.expose_secret(), "[token]"),
            None => said.to_owned(),
        }
    }
}

/// One request is one attempt: no redirect, no second try behind our back, no connection kept that may have gone
/// stale, no proxy that the environment happens to name.
fn client(name: &str, url: &Url, headers: HeaderMap) -> Result<Client, NoticeError> {
    // Somebody in this process may have installed it before; one is enough.
    let _ = rustls::crypto::ring::default_provider().install_default();
    let mut builder = Client::builder()
        .default_headers(headers)
        .user_agent(concat!("railtide/", env!("CARGO_PKG_VERSION")))
        .redirect(reqwest::redirect::Policy::none())
        .retry(reqwest::retry::never())
        .referer(false)
        .no_proxy()
        .pool_max_idle_per_host(0);
    if url.scheme() == "http" {
        // Plain HTTP must work on a board that has no certificates of the system's to load.
        builder = builder.tls_certs_only([]);
    }
    builder
        .build()
        .map_err(|error| NoticeError::Client { receiver: name.to_owned(), cause: innermost(error) })
}

fn verdict(status: StatusCode, retry_after: Option<Duration>) -> Verdict {
    match status.as_u16() {
        200..=299 => Verdict::Taken,
        410 => Verdict::Gone,
        408 | 425 | 429 => Verdict::Later { retry_after },
        400 | 413 | 414 | 415 | 422 | 431 => Verdict::Refused { allowed: DISLIKED_ALLOWED },
        300..=499 => Verdict::Refused { allowed: WRONG_ALLOWED },
        _ => Verdict::Later { retry_after },
    }
}

/// `Retry-After` is a number of seconds or an HTTP date (RFC 9110 10.2.3); a date in the past asks for no wait.
fn wait_asked_for(value: &str, now: Utc) -> Option<Duration> {
    let value = value.trim();
    if let Ok(seconds) = value.parse() {
        return Some(Duration::from_secs(seconds));
    }
    // The three forms that RFC 9110 5.6.7 obliges a recipient to read.
    let until =
        DateTime::parse_from_rfc2822(value).map(|date| date.timestamp_millis()).ok().or_else(|| {
            ["%A, %d-%b-%y %H:%M:%S GMT", "%a %b %e %H:%M:%S %Y"]
                .into_iter()
                .find_map(|form| NaiveDateTime::parse_from_str(value, form).ok())
                .map(|date| date.and_utc().timestamp_millis())
        })?;
    Some(Duration::from_millis(u64::try_from(until.saturating_sub(now.0)).unwrap_or(0)))
}

/// At most [`BODY_LIMIT`] bytes of the body, as they came: nothing is decompressed, so that nothing can swell.
async fn beginning(mut response: Response) -> Vec<u8> {
    let mut body = Vec::new();
    while let Ok(Some(chunk)) = response.chunk().await {
        let room = BODY_LIMIT - body.len();
        body.extend_from_slice(&chunk[..chunk.len().min(room)]);
        if body.len() == BODY_LIMIT {
            break;
        }
    }
    body
}

/// What of a body can be shown in one line; nothing if it isn't text.
fn first_line(body: &[u8]) -> String {
    let text = String::from_utf8_lossy(body);
    let line = text.lines().map(str::trim).find(|line| !line.is_empty()).unwrap_or_default();
    let clean: String = line.chars().map(|c| if c.is_control() { ' ' } else { c }).collect();
    let shown = match clean.char_indices().nth(SHOWN_CHARS) {
        Some((end, _)) => format!("{}…", &clean[..end]),
        None => clean,
    };
    if shown.contains(char::REPLACEMENT_CHARACTER) { String::new() } else { shown.trim().to_owned() }
}

/// The library's own words say "error sending request"; the cause that helps a person lies beneath. The URL is left
/// out, for it can hold a secret.
fn innermost(error: reqwest::Error) -> String {
    let error = error.without_url();
    let mut cause: &dyn std::error::Error = &error;
    while let Some(deeper) = cause.source() {
        cause = deeper;
    }
    first_line(cause.to_string().as_bytes())
}

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
        map.serialize_entry("at", &rfc3339(self.notice.at, self.zone))?;
        map.serialize_entry("raised_at", &rfc3339(self.notice.raised_at, self.zone))?;
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

    #[test]
    fn every_form_of_retry_after_is_read() {
        // The three spellings of one moment are those of RFC 9110 5.6.7.
        let a_minute_before = Utc(784_111_777_000 - 60_000); // 1994-11-06T08:48:37Z
        for value in [
            "60",
            " 60 ",
            "Sun, 06 Nov 1994 08:49:37 GMT",
            "Sunday, 06-Nov-94 08:49:37 GMT",
            "Sun Nov  6 08:49:37 1994",
        ] {
            assert_eq!(wait_asked_for(value, a_minute_before), Some(Duration::from_secs(60)), "{value}");
        }
        let long_after = Utc(1_791_304_930_000);
        assert_eq!(wait_asked_for("Sun, 06 Nov 1994 08:49:37 GMT", long_after), Some(Duration::ZERO));
        for value in ["", "-1", "soon", "1.5", "99999999999999999999999"] {
            assert_eq!(wait_asked_for(value, long_after), None, "{value}");
        }
    }

    #[test]
    fn only_what_can_heal_is_tried_without_end() {
        let of = |code| verdict(StatusCode::from_u16(code).unwrap(), None);
        for code in [200, 201, 202, 204] {
            assert_eq!(of(code), Verdict::Taken, "{code}");
        }
        for code in [408, 425, 429, 500, 502, 503, 504, 599, 999] {
            assert_eq!(of(code), Verdict::Later { retry_after: None }, "{code}");
        }
        for code in [301, 302, 307, 401, 403, 404, 405, 451] {
            assert_eq!(of(code), Verdict::Refused { allowed: WRONG_ALLOWED }, "{code}");
        }
        for code in [400, 413, 422] {
            assert_eq!(of(code), Verdict::Refused { allowed: DISLIKED_ALLOWED }, "{code}");
        }
        assert_eq!(of(410), Verdict::Gone);
    }

    #[test]
    fn a_body_is_shown_as_one_short_clean_line() {
        assert_eq!(first_line(b"\r\n  no such \x1b[31mtopic\nsecond"), "no such  [31mtopic");
        assert_eq!(first_line(&[0x1f, 0x8b, 0xff, 0xfe]), "", "what isn't text isn't shown");
        assert_eq!(first_line("é".repeat(500).as_bytes()), format!("{}…", "é".repeat(SHOWN_CHARS)));
        assert_eq!(first_line(b""), "");
    }

    #[test]
    fn a_url_that_cannot_be_posted_to_is_refused_by_the_receivers_name() {
        for url in ["ftp://127.0.0.1/", "phone", ""] {
            let error = Webhook::new("phone", url, None).err().map(|error| error.to_string());
            assert!(error.as_deref().is_some_and(|said| said.contains("\"phone\"")), "{url}: {error:?}");
        }
    }

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
        "at":"2026-10-06T18:42:10.000+02:00",
        "raised_at":"2026-10-06T18:42:10.000+02:00",
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
        "text":"Alarm rail-high for hall.reservoir, priority high.\nIt would stand at 492 V ± 4 V, projected from mains at 239.3 V for the loading \"idle\"; the setpoint is 475.8 V, the limit 480 V.\nSince 18:42:10 CEST on Tue 6 Oct 2026.\nWhat to do: Switch the amplifier off.\nrailtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.",
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
        "at":"2026-10-06T18:43:15.000+02:00",
        "raised_at":"2026-10-06T18:42:10.000+02:00",
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
        "at":"2026-10-06T18:42:10.000+02:00",
        "raised_at":"2026-10-06T18:42:10.000+02:00",
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
