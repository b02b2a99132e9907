//! The webhook: one HTTP POST of our JSON (`json.rs`) per attempt, with `Content-Type: application/json`,
//! `Idempotency-Key: …`, `User-Agent: railtide/VERSION` and, where the config names a token,
//! `Authorization: Bearer …`.
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
use reqwest::header::{AUTHORIZATION, CONTENT_TYPE, HeaderMap, HeaderValue, RETRY_AFTER};
use reqwest::{Client, Response, StatusCode, Url};
use secrecy::{ExposeSecret, SecretString};

use super::NoticeError;
use super::answer::{Answer, Verdict};
use super::secret::resolve;
use crate::clock::Clock;
use crate::config::SecretSource;
use crate::quantity::Utc;

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

#[cfg(test)]
mod tests {
    use super::*;

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
}
