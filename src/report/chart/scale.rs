//! Scales and their ticks.

/// From figures to a stretch of the drawing, in proportion.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Scale {
    from: (f64, f64),
    to: (f64, f64),
}

impl Scale {
    /// `domain` is drawn along `range`; a domain of no width is widened by one to each side.
    pub(super) fn new(domain: (f64, f64), range: (f64, f64)) -> Self {
        let (low, high) = domain;
        let from = if high > low { domain } else { (low - 1.0, low + 1.0) };
        Scale { from, to: range }
    }

    /// Where `value` is drawn.
    pub(super) fn at(&self, value: f64) -> f64 {
        let share = (value - self.from.0) / (self.from.1 - self.from.0);
        self.to.0 + share * (self.to.1 - self.to.0)
    }

    /// Whether `value` is drawn within the stretch.
    pub(super) fn holds(&self, value: f64) -> bool {
        (self.from.0..=self.from.1).contains(&value)
    }

    pub(super) fn domain(&self) -> (f64, f64) {
        self.from
    }
}

/// Round figures within `domain`, about `wanted` of them: steps of 1, 2 or 5 times a power of ten.
pub(super) fn ticks(domain: (f64, f64), wanted: usize) -> Vec<f64> {
    let (low, high) = domain;
    let width = high - low;
    if !(width > 0.0 && width.is_finite()) {
        return vec![low];
    }
    let rough = width / wanted.max(1) as f64;
    let power = 10_f64.powf(rough.log10().floor());
    let step = [1.0, 2.0, 5.0, 10.0].map(|m| m * power).into_iter().find(|step| *step >= rough).unwrap_or(10.0 * power);
    let first = (low / step).ceil() as i64;
    let last = (high / step).floor() as i64;
    (first..=last).map(|n| n as f64 * step).collect()
}

/// A figure as short as its step allows.
pub(super) fn tick_text(value: f64, step: f64) -> String {
    let decimals = if step >= 1.0 { 0 } else { (-step.log10()).ceil().clamp(0.0, 4.0) as usize };
    format!("{value:.decimals$}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_are_round_and_lie_within() {
        assert_eq!(ticks((226.4, 243.1), 4), [230.0, 235.0, 240.0]);
        assert_eq!(ticks((0.0, 1.0), 4), [0.0, 0.5, 1.0]);
        assert_eq!(ticks((5.0, 5.0), 4), [5.0]);
        assert_eq!(tick_text(0.5, 0.5), "0.5");
        assert_eq!(tick_text(230.0, 5.0), "230");
    }

    #[test]
    fn a_scale_of_no_width_draws_its_figure_in_the_middle() {
        assert_eq!(Scale::new((230.0, 230.0), (0.0, 100.0)).at(230.0), 50.0);
    }
}
