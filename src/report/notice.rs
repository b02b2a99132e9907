//! A notice as it is said to a person: what, how much, since when, what to do, and how far to trust the tool.

use std::fmt::Write;
use std::time::Duration;

use chrono_tz::Tz;

use super::time::{LocalTime, span};
use crate::alarm::{Facts, Notice, NoticeKind};
use crate::quantity::Uncertain;

/// Closes every notice.
pub const CAUTION: &str =
    "railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.";

/// What a person reads of a notice.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct NoticeText {
    /// One line, for a lock screen or a mail's subject.
    pub title: String,
    /// The whole of it, some short lines that end with [`CAUTION`]; no line break at the end.
    pub body: String,
}

/// `notice` in words, its times in `zone`.
///
/// A figure that was projected "would stand at" where nothing proves that the amplifier is on. The same notice and
/// zone give the same text whenever it is rendered.
pub fn notice_text(notice: &Notice, zone: Tz) -> NoticeText {
    let mut title = title(notice);
    let mut lines = match notice.kind {
        NoticeKind::Raised => raised(notice, zone),
        NoticeKind::Returned => returned(notice, zone),
        NoticeKind::Trial => trial(notice, zone),
    };
    if !notice.facts.note.is_empty() {
        lines.push(format!("Note: {}", notice.facts.note));
    }
    if !notice.recorded {
        title.push_str(" (not recorded)");
        lines.push("Not recorded: the record could not be written, so this comes from memory.".to_owned());
    }
    lines.push(CAUTION.to_owned());
    NoticeText { title, body: lines.join("\n") }
}

fn title(notice: &Notice) -> String {
    let what = about(notice, ": ");
    match notice.kind {
        NoticeKind::Raised => match (notice.facts.value, standing(&notice.facts, Tense::Now)) {
            (Some(value), _) if notice.facts.unit == "s" => format!("{what}, for {}", plain(value, "s")),
            (_, Some(standing)) => format!("{what} {standing}"),
            _ => what,
        },
        NoticeKind::Returned => format!("Back to normal: {}", about(notice, ", ")),
        NoticeKind::Trial => "Trial notice from railtide".to_owned(),
    }
}

fn raised(notice: &Notice, zone: Tz) -> Vec<String> {
    let mut lines = vec![format!("Alarm {}, priority {}.", about(notice, " for "), notice.priority.word())];
    lines.extend(figures(&notice.facts, Tense::Now));
    lines.extend(evidence(&notice.facts).map(str::to_owned));
    lines.push(format!("Since {}.", LocalTime::of(notice.raised_at, zone).in_full()));
    if !notice.advice.is_empty() {
        lines.push(format!("What to do: {}", notice.advice));
    }
    lines
}

fn returned(notice: &Notice, zone: Tz) -> Vec<String> {
    let mut lines = vec![format!("Alarm {} has returned to normal.", about(notice, " for "))];
    lines.extend(figures(&notice.facts, Tense::Past));
    let mut times = format!(
        "Raised at {}, returned at {}",
        LocalTime::of(notice.raised_at, zone).in_full(),
        LocalTime::of(notice.at, zone).in_full()
    );
    // The labels of a host whose clock was set in between say nothing about how long it took.
    if let Ok(ms @ 1..) = u64::try_from(notice.at.0.saturating_sub(notice.raised_at.0)) {
        let _ = write!(times, ", after {}", span(Duration::from_millis(ms)));
    }
    lines.push(times + ".");
    lines
}

fn trial(notice: &Notice, zone: Tz) -> Vec<String> {
    vec![
        format!(
            "A trial of the receiver {}, asked for at {}.",
            notice.receiver,
            LocalTime::of(notice.at, zone).in_full()
        ),
        "No alarm stands behind it: if you can read this, notices reach you.".to_owned(),
    ]
}

/// The condition and, after `joint`, its subject where it has one.
fn about(notice: &Notice, joint: &str) -> String {
    let key = &notice.key;
    if key.subject.is_empty() {
        key.condition.clone()
    } else {
        format!("{}{joint}{}", key.condition, key.subject)
    }
}

#[derive(Clone, Copy)]
enum Tense {
    Now,
    Past,
}

/// Whether the amplifier is on, where that is known of a rail.
fn evidence(facts: &Facts) -> Option<&'static str> {
    match (facts.source.as_str(), facts.proved_on) {
        (_, Some(true)) => Some("A rail channel proves that the amplifier is on."),
        ("projected", None) if !facts.loading.is_empty() => Some("Nothing proves that the amplifier is on."),
        _ => None,
    }
}

/// `would stand at 492 V ± 4 V`, `has lasted 35 s`.
fn standing(facts: &Facts, tense: Tense) -> Option<String> {
    let figure = with_uncertainty(facts.value?, facts.value_u, &facts.unit);
    let verb = match (facts.unit.as_str(), facts.source.as_str(), tense) {
        ("s", _, Tense::Now) => "has lasted",
        ("s", _, Tense::Past) => "lasted",
        ("days", _, _) => "has room left for",
        (_, "forecast", Tense::Now) => "may come to",
        (_, "forecast", Tense::Past) => "was expected to come to at most",
        (_, "projected", _) if facts.proved_on == Some(true) => "is taken to stand at",
        (_, "projected", _) => "would stand at",
        _ => "stands at",
    };
    Some(format!("{verb} {figure}"))
}

/// One sentence with all the figures there are.
fn figures(facts: &Facts, tense: Tense) -> Option<String> {
    let mut sentence = format!("It {}", standing(facts, tense)?);
    // Mains judged against its own limits needn't be said twice.
    let mains = facts.mains_v.filter(|mains_v| Some(*mains_v) != facts.value);
    match (facts.source.as_str(), mains) {
        ("projected", Some(mains_v)) => {
            let _ = write!(sentence, ", projected from mains at {mains_v:.1} V");
        }
        ("forecast", Some(mains_v)) => {
            let _ =
                write!(sentence, ", with mains at the upper edge of the tide table's band, {mains_v:.1} V,");
        }
        ("projected", None) => sentence.push_str(", projected from mains"),
        (source, mains) => {
            if !source.is_empty() {
                let _ = write!(sentence, ", {source}");
            }
            if let Some(mains_v) = mains {
                let _ = write!(sentence, ", with mains at {mains_v:.1} V");
            }
        }
    }
    if !facts.loading.is_empty() {
        let _ = write!(sentence, " for the loading \"{}\"", facts.loading);
    }
    match (facts.setpoint, facts.limit) {
        (Some(setpoint), Some(limit)) => {
            let (setpoint, limit) = (plain(setpoint, &facts.unit), plain(limit, &facts.unit));
            let _ = write!(sentence, "; the setpoint is {setpoint}, the limit {limit}");
        }
        (Some(only), None) => {
            let _ = write!(sentence, "; the setpoint is {}", plain(only, &facts.unit));
        }
        (None, Some(only)) => {
            let _ = write!(sentence, "; the limit is {}", plain(only, &facts.unit));
        }
        (None, None) => {}
    }
    Some(sentence + ".")
}

fn with_uncertainty(value: f64, u: Option<f64>, unit: &str) -> String {
    match u {
        Some(u) if unit == "V" => Uncertain::new(value, u).to_string(),
        Some(u) if unit != "s" => format!("{} ± {}", plain(value, unit), plain(u, unit)),
        _ => plain(value, unit),
    }
}

/// A figure to a tenth, without an idle `.0`; seconds as people say them.
fn plain(value: f64, unit: &str) -> String {
    match Duration::try_from_secs_f64(value) {
        Ok(lasting) if unit == "s" => span(lasting),
        _ => {
            let tenths = format!("{value:.1}");
            let digits = tenths.strip_suffix(".0").unwrap_or(&tenths);
            if unit.is_empty() { digits.to_owned() } else { format!("{digits} {unit}") }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::alarm::{AlarmKey, Priority};
    use crate::quantity::Utc;

    const RAISED_AT: Utc = Utc(1_791_304_930_000); // 2026-10-06T16:42:10Z

    fn rail_high() -> Notice {
        Notice {
            id: 7,
            receiver: "phone".into(),
            kind: NoticeKind::Raised,
            priority: Priority::High,
            at: RAISED_AT,
            key: AlarmKey { condition: "rail-high".into(), subject: "hall.reservoir".into() },
            raised_at: RAISED_AT,
            facts: Facts {
                value: Some(491.6),
                value_u: Some(4.2),
                setpoint: Some(475.8),
                limit: Some(480.0),
                unit: "V".into(),
                mains_v: Some(239.32),
                source: "projected".into(),
                loading: "idle".into(),
                proved_on: None,
                note: String::new(),
            },
            advice: "Switch the amplifier off until the mains is lower.".into(),
            idempotency_key: "k".into(),
            recorded: true,
        }
    }

    fn said(notice: &Notice) -> String {
        let text = notice_text(notice, Tz::Europe__Berlin);
        assert!(!text.title.contains('\n'));
        format!("{}\n--\n{}", text.title, text.body)
    }

    #[test]
    fn a_projected_rail_would_stand_there() {
        insta::assert_snapshot!(said(&rail_high()), @r#"
        rail-high: hall.reservoir would stand at 492 V ± 4 V
        --
        Alarm rail-high for hall.reservoir, priority high.
        It would stand at 492 V ± 4 V, projected from mains at 239.3 V for the loading "idle"; the setpoint is 475.8 V, the limit 480 V.
        Nothing proves that the amplifier is on.
        Since 18:42:10 CEST on Tue 6 Oct 2026.
        What to do: Switch the amplifier off until the mains is lower.
        railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
        "#);
    }

    #[test]
    fn a_projected_rail_of_an_amplifier_that_is_on_is_taken_to_stand_there() {
        let mut notice = rail_high();
        notice.facts.proved_on = Some(true);
        let text = notice_text(&notice, Tz::Europe__Berlin);
        assert!(text.title.ends_with("is taken to stand at 492 V ± 4 V"), "{}", text.title);
        assert!(text.body.contains("A rail channel proves that the amplifier is on."), "{}", text.body);
    }

    #[test]
    fn a_measured_rail_stands_there() {
        let mut notice = rail_high();
        notice.facts.source = "measured".into();
        notice.facts.value_u = Some(1.3);
        notice.facts.loading = String::new();
        notice.facts.note = "The projection says 489 V ± 4 V.".into();
        insta::assert_snapshot!(said(&notice), @r#"
        rail-high: hall.reservoir stands at 491.6 V ± 1.3 V
        --
        Alarm rail-high for hall.reservoir, priority high.
        It stands at 491.6 V ± 1.3 V, measured, with mains at 239.3 V; the setpoint is 475.8 V, the limit 480 V.
        Since 18:42:10 CEST on Tue 6 Oct 2026.
        What to do: Switch the amplifier off until the mains is lower.
        Note: The projection says 489 V ± 4 V.
        railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
        "#);
    }

    #[test]
    fn a_return_says_how_long_it_took() {
        let mut notice = rail_high();
        notice.kind = NoticeKind::Returned;
        notice.at = RAISED_AT + Duration::from_secs(27 * 60 + 50);
        notice.facts.value = Some(468.2);
        insta::assert_snapshot!(said(&notice), @r#"
        Back to normal: rail-high, hall.reservoir
        --
        Alarm rail-high for hall.reservoir has returned to normal.
        It would stand at 468 V ± 4 V, projected from mains at 239.3 V for the loading "idle"; the setpoint is 475.8 V, the limit 480 V.
        Raised at 18:42:10 CEST on Tue 6 Oct 2026, returned at 19:10:00 CEST on Tue 6 Oct 2026, after 27 min 50 s.
        railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
        "#);
    }

    #[test]
    fn a_return_before_its_own_rise_says_no_span() {
        let mut notice = rail_high();
        notice.kind = NoticeKind::Returned;
        notice.at = Utc(RAISED_AT.0 - 3_600_000);
        let text = said(&notice);
        assert!(text.contains("returned at 17:42:10 CEST on Tue 6 Oct 2026."), "{text}");
    }

    #[test]
    fn a_silent_logger_has_lasted_so_long_and_an_unrecorded_notice_says_so() {
        let mut notice = rail_high();
        notice.priority = Priority::Medium;
        notice.key = AlarmKey { condition: "logger-silent".into(), subject: "bench".into() };
        notice.facts =
            Facts { value: Some(65.0), setpoint: Some(30.0), unit: "s".into(), ..Facts::default() };
        notice.advice = "See whether the logger is plugged in and its lamp is lit.".into();
        notice.recorded = false;
        insta::assert_snapshot!(said(&notice), @r#"
        logger-silent: bench, for 1 min 5 s (not recorded)
        --
        Alarm logger-silent for bench, priority medium.
        It has lasted 1 min 5 s; the setpoint is 30 s.
        Since 18:42:10 CEST on Tue 6 Oct 2026.
        What to do: See whether the logger is plugged in and its lamp is lit.
        Not recorded: the record could not be written, so this comes from memory.
        railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
        "#);
    }

    #[test]
    fn an_alarm_without_figures_is_said_without_any() {
        let mut notice = rail_high();
        notice.key = AlarmKey { condition: "store-full".into(), subject: String::new() };
        notice.facts = Facts::default();
        notice.advice = String::new();
        insta::assert_snapshot!(said(&notice), @r#"
        store-full
        --
        Alarm store-full, priority high.
        Since 18:42:10 CEST on Tue 6 Oct 2026.
        railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
        "#);
    }

    #[test]
    fn a_trial_says_that_no_alarm_stands_behind_it() {
        let mut notice = rail_high();
        notice.kind = NoticeKind::Trial;
        notice.facts = Facts::default();
        insta::assert_snapshot!(said(&notice), @r#"
        Trial notice from railtide
        --
        A trial of the receiver phone, asked for at 18:42:10 CEST on Tue 6 Oct 2026.
        No alarm stands behind it: if you can read this, notices reach you.
        railtide warns; it is no protective device. Do not rely on it to keep an amplifier or a person safe.
        "#);
    }

    #[test]
    fn other_units_and_figures_that_are_none_are_said_without_a_panic() {
        let mut notice = rail_high();
        notice.facts.unit = "%".into();
        notice.facts.value_u = Some(0.25);
        assert!(said(&notice).contains("491.6 % ± 0.2 %"), "{}", said(&notice));
        notice.facts.unit = "s".into();
        notice.facts.value = Some(f64::NAN);
        assert!(said(&notice).contains("has lasted NaN s"), "{}", said(&notice));
    }
}
