//! Where in the period the solver looks: evenly, or finely where the rectifier conducts.

use std::f64::consts::{SQRT_2, TAU};

use super::circuit::MainsWave;

/// α of the two-stage method: its first stage lies at this part of a step, and both stages are implicit by it.
pub(super) const ALPHA: f64 = 1.0 - SQRT_2 / 2.0;

/// A part of the period in which a diode conducts, in fractions of the period from the fundamental's rise.
pub(super) type Window = (f64, f64);

/// What part of the steps goes to the windows in which a diode conducts, and to those in which both paths do: the
/// former carry all the charge, the latter are short and rarely decide anything.
const SHARES: [f64; 2] = [0.65, 0.25];

/// Windows wider than this part of the mesh need no finer steps than the rest.
const WIDE: f64 = 0.6;

/// Each window is widened by this part of itself, since the next solution's lies a little beside it.
const MARGIN: f64 = 0.12;

/// A mesh is fitted anew when its fine part is this many times what conducts.
const MOST_FINE: f64 = 1.5;

/// One step: its start and length in fractions of the mains' period, and the unit-r.m.s. wave at its two stages.
#[derive(Clone, Copy, Debug)]
pub(super) struct Step {
    pub(super) start: f64,
    pub(super) length: f64,
    pub(super) wave: [f64; 2],
}

/// The steps of one period, or of half of one where the other half repeats it.
#[derive(Clone, Debug)]
pub(super) struct Mesh {
    pub(super) steps: Vec<Step>,
    /// Where its steps are fine; empty where they are even.
    fine: Vec<Window>,
}

impl Mesh {
    /// Even steps over `span` (a half or a whole period).
    pub(super) fn even(wave: &MainsWave, span: f64, steps: usize) -> Mesh {
        Mesh::of(wave, &[(0.0, span, steps)], Vec::new())
    }

    /// About `steps` steps over `span`, most of them where a diode `conducts`; where that is nearly always, as behind a
    /// choke, in the `overlaps` in which both paths do. (Windows in order, from 0 to `span`.)
    pub(super) fn refined(
        wave: &MainsWave,
        span: f64,
        steps: usize,
        conducts: &[Window],
        overlaps: &[Window],
    ) -> Mesh {
        let Some((windows, share)) = deciding(span, conducts, overlaps, MARGIN) else {
            return Mesh::even(wave, span, steps);
        };
        let inside = length(&windows);
        let count =
            |length: f64, of: f64, share: f64| ((steps as f64 * share * length / of).ceil() as usize).max(4);
        let mut pieces = Vec::with_capacity(2 * windows.len() + 1);
        let mut at = 0.0;
        let gap = |pieces: &mut Vec<_>, from: f64, to: f64| {
            if to - from > 1e-9 {
                pieces.push((from, to, count(to - from, span - inside, 1.0 - share)));
            }
        };
        for &(from, to) in &windows {
            gap(&mut pieces, at, from);
            pieces.push((from, to, count(to - from, inside, share)));
            at = to;
        }
        gap(&mut pieces, at, span);
        Mesh::of(wave, &pieces, windows)
    }

    /// Whether it is fine where it should be for these windows, and not over much more.
    pub(super) fn suits(&self, span: f64, conducts: &[Window], overlaps: &[Window]) -> bool {
        let Some((windows, _)) = deciding(span, conducts, overlaps, 0.0) else { return self.fine.is_empty() };
        let held = |window: &Window| self.fine.iter().any(|fine| fine.0 <= window.0 && window.1 <= fine.1);
        windows.iter().all(held) && length(&self.fine) <= MOST_FINE * length(&windows)
    }

    fn of(wave: &MainsWave, pieces: &[(f64, f64, usize)], fine: Vec<Window>) -> Mesh {
        let mut steps = Vec::new();
        for &(from, to, count) in pieces {
            let length = (to - from) / count as f64;
            steps.extend((0..count).map(|i| {
                let start = from + i as f64 * length;
                let wave = [ALPHA, 1.0].map(|part| wave.at(TAU * (start + part * length)));
                Step { start, length, wave }
            }));
        }
        Mesh { steps, fine }
    }
}

fn length(windows: &[Window]) -> f64 {
    windows.iter().map(|(from, to)| to - from).sum()
}

/// The windows that want fine steps, widened by `margin` of themselves, and the share of the steps that they get.
fn deciding(span: f64, conducts: &[Window], overlaps: &[Window], margin: f64) -> Option<(Vec<Window>, f64)> {
    [conducts, overlaps]
        .map(|windows| widened(windows, span, margin))
        .into_iter()
        .zip(SHARES)
        .find(|(windows, _)| !windows.is_empty() && length(windows) <= WIDE * span)
}

/// Windows with their margins, those that meet made one.
fn widened(windows: &[Window], span: f64, margin: f64) -> Vec<Window> {
    let mut merged: Vec<Window> = Vec::new();
    for &(from, to) in windows {
        let margin = margin * (to - from);
        let (from, to) = ((from - margin).max(0.0), (to + margin).min(span));
        match merged.last_mut() {
            Some(last) if from <= last.1 => last.1 = last.1.max(to),
            _ => merged.push((from, to)),
        }
    }
    merged
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_steps_fill_the_span_without_a_gap_and_are_finest_in_the_windows() {
        let windows = [(0.19, 0.26), (0.7, 0.76)];
        let mesh = Mesh::refined(&MainsWave::default(), 1.0, 100, &windows, &[]);
        let mut at = 0.0;
        for step in &mesh.steps {
            assert!((step.start - at).abs() < 1e-12);
            at = step.start + step.length;
        }
        assert!((at - 1.0).abs() < 1e-12);
        let inside = mesh.steps.iter().filter(|s| s.start > 0.19 && s.start < 0.26).count();
        assert!(inside > 20, "{inside} steps in the first window");
    }
}
