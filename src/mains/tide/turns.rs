//! The turns of a tide table: its expected highs and lows.

use serde::Serialize;

use super::TideStep;

/// A high or a low.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum TurnKind {
    /// The mains comes no higher around here.
    High,
    /// Nor any lower.
    Low,
}

impl TurnKind {
    /// `high` or `low`.
    pub fn word(self) -> &'static str {
        match self {
            TurnKind::High => "high",
            TurnKind::Low => "low",
        }
    }
}

/// An expected high or low.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Turn {
    /// Which.
    pub kind: TurnKind,
    /// The interval in which the median stands highest, or lowest.
    pub step: TideStep,
}

/// The least that the median must go back for a turn to count, as a share of its whole range, and in volts. Our own.
const SHARE: f64 = 0.25;
const LEAST_V: f64 = 0.5;

/// The highs and lows of the median, in turn. The ends of the table are no turns: nobody knows what comes after.
pub fn turns(steps: &[TideStep]) -> Vec<Turn> {
    let range = steps.iter().fold((f64::MAX, f64::MIN), |(l, h), s| (l.min(s.median_v), h.max(s.median_v)));
    let back = (SHARE * (range.1 - range.0)).max(LEAST_V);
    let Some(first) = steps.first() else { return Vec::new() };
    let (mut high, mut low) = (*first, *first);
    let mut seeking: Option<TurnKind> = None;
    let mut found = Vec::new();
    for step in steps {
        if step.median_v > high.median_v {
            high = *step;
        }
        if step.median_v < low.median_v {
            low = *step;
        }
        let fell = high.median_v - step.median_v >= back && seeking != Some(TurnKind::Low);
        let rose = step.median_v - low.median_v >= back && seeking != Some(TurnKind::High);
        if fell {
            found.push(Turn { kind: TurnKind::High, step: high });
            (seeking, low) = (Some(TurnKind::Low), *step);
        } else if rose {
            found.push(Turn { kind: TurnKind::Low, step: low });
            (seeking, high) = (Some(TurnKind::High), *step);
        }
    }
    // What the table starts with is a turn only if it came there by more than a ripple.
    if found.first().is_some_and(|turn| (turn.step.median_v - first.median_v).abs() < LEAST_V) {
        found.remove(0);
    }
    found
}
