//! Monotone piecewise cubic interpolation: F. N. Fritsch and R. E. Carlson, "Monotone piecewise cubic interpolation",
//! SIAM J. Numer. Anal. 17, 1980. Between rising points the curve rises, so that it can be read backwards.

/// A curve through points whose x rises.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct MonotoneCubic {
    x: Vec<f64>,
    y: Vec<f64>,
    /// Of each piece, by powers of the distance from its start.
    pieces: Vec<[f64; 4]>,
    /// Slope at the last point.
    last_slope: f64,
    /// Pieces per unit of x on average: where x is even this finds the piece at once.
    pieces_per_x: f64,
}

/// Halvings that a backward reading takes at most: the interval is then narrower than a double can tell.
const MOST_HALVINGS: usize = 64;

impl MonotoneCubic {
    /// The curve through (x, y); `None` for fewer than two points, for x that doesn't rise, or for figures that aren't
    /// finite.
    pub(super) fn new(x: Vec<f64>, y: Vec<f64>) -> Option<Self> {
        let rises = x.windows(2).all(|pair| pair[0] < pair[1]);
        let finite = x.iter().chain(&y).all(|v| v.is_finite());
        if x.len() < 2 || x.len() != y.len() || !rises || !finite {
            return None;
        }
        let secant: Vec<f64> =
            x.windows(2).zip(y.windows(2)).map(|(x, y)| (y[1] - y[0]) / (x[1] - x[0])).collect();
        let mut slope = first_slopes(&x, &secant);
        for (k, &secant) in secant.iter().enumerate() {
            if secant == 0.0 {
                (slope[k], slope[k + 1]) = (0.0, 0.0);
                continue;
            }
            // The circle of radius 3 in (α, β) lies within the region where the cubic is monotone.
            let (alpha, beta) = ((slope[k] / secant).max(0.0), (slope[k + 1] / secant).max(0.0));
            let radius = alpha.hypot(beta);
            let shrink = if radius > 3.0 { 3.0 / radius } else { 1.0 };
            (slope[k], slope[k + 1]) = (shrink * alpha * secant, shrink * beta * secant);
        }
        let pieces = (0..secant.len())
            .map(|k| {
                let h = x[k + 1] - x[k];
                let second = (3.0 * secant[k] - 2.0 * slope[k] - slope[k + 1]) / h;
                let third = (slope[k] + slope[k + 1] - 2.0 * secant[k]) / (h * h);
                [y[k], slope[k], second, third]
            })
            .collect();
        let pieces_per_x = secant.len() as f64 / (x[x.len() - 1] - x[0]);
        Some(MonotoneCubic { last_slope: slope[slope.len() - 1], x, y, pieces, pieces_per_x })
    }

    /// First and last x.
    pub(super) fn span(&self) -> (f64, f64) {
        (self.x[0], self.x[self.x.len() - 1])
    }

    /// y at `x`; beyond the ends along the end's tangent.
    pub(super) fn at(&self, x: f64) -> f64 {
        let (low, high) = self.span();
        if x < low {
            return self.y[0] + self.pieces[0][1] * (x - low);
        }
        if x > high {
            return self.y[self.y.len() - 1] + self.last_slope * (x - high);
        }
        self.value(self.piece(x), x)
    }

    /// dy/dx at `x`.
    pub(super) fn slope_at(&self, x: f64) -> f64 {
        let (low, high) = self.span();
        let x = x.clamp(low, high);
        let k = self.piece(x);
        let (d, [_, first, second, third]) = (x - self.x[k], self.pieces[k]);
        first + d * (2.0 * second + d * 3.0 * third)
    }

    /// The x at which a rising curve stands at `y`, within its span.
    pub(super) fn backwards(&self, y: f64) -> Option<f64> {
        let above = self.y.partition_point(|&at| at < y);
        if above == 0 {
            return (y == self.y[0]).then_some(self.x[0]);
        }
        if above == self.y.len() {
            return None;
        }
        let k = above - 1;
        let (mut low, mut high) = (self.x[k], self.x[k + 1]);
        for _ in 0..MOST_HALVINGS {
            let middle = 0.5 * (low + high);
            if self.value(k, middle) < y { low = middle } else { high = middle }
        }
        Some(0.5 * (low + high))
    }

    /// Index of the piece that holds `x`, which lies within the span.
    fn piece(&self, x: f64) -> usize {
        let last = self.pieces.len() - 1;
        let mut k = (((x - self.x[0]) * self.pieces_per_x) as usize).min(last);
        while k > 0 && x < self.x[k] {
            k -= 1;
        }
        while k < last && x >= self.x[k + 1] {
            k += 1;
        }
        k
    }

    fn value(&self, k: usize, x: f64) -> f64 {
        let (d, [start, first, second, third]) = (x - self.x[k], self.pieces[k]);
        start + d * (first + d * (second + d * third))
    }
}

/// The parabola's slope through each point and its neighbours; at an end the parabola of the three nearest.
fn first_slopes(x: &[f64], secant: &[f64]) -> Vec<f64> {
    let last = x.len() - 1;
    (0..=last)
        .map(|k| match (k, last) {
            (_, 1) => secant[0],
            (0, _) => {
                let (h0, h1) = (x[1] - x[0], x[2] - x[1]);
                secant[0] + (secant[0] - secant[1]) * h0 / (h0 + h1)
            }
            (k, last) if k == last => {
                let (h0, h1) = (x[last - 1] - x[last - 2], x[last] - x[last - 1]);
                secant[last - 1] + (secant[last - 1] - secant[last - 2]) * h1 / (h0 + h1)
            }
            (k, _) => {
                let (h0, h1) = (x[k] - x[k - 1], x[k + 1] - x[k]);
                (h1 * secant[k - 1] + h0 * secant[k]) / (h0 + h1)
            }
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_parabola_is_met_exactly_and_read_backwards() {
        // Three-point slopes are a parabola's own, so Hermite's cubic is that parabola.
        let x: Vec<f64> = vec![1.0, 1.5, 2.5, 3.0, 4.5];
        let curve = MonotoneCubic::new(x.clone(), x.iter().map(|x| x * x + x).collect()).unwrap();
        for i in 0..=70 {
            let x = 1.0 + f64::from(i) / 20.0;
            assert!((curve.at(x) - (x * x + x)).abs() < 1e-12, "{x}");
            assert!((curve.slope_at(x) - (2.0 * x + 1.0)).abs() < 1e-12, "{x}");
            assert!((curve.backwards(x * x + x).unwrap() - x).abs() < 1e-9, "{x}");
        }
        assert_eq!(curve.backwards(1.9), None);
        assert_eq!(curve.backwards(25.0), None);
    }

    #[test]
    fn between_rising_points_it_never_falls() {
        // The data of Fritsch and Carlson's table 1 ("RPN 14"), on which an ordinary spline overshoots.
        let x = vec![7.99, 8.09, 8.19, 8.7, 9.2, 10.0, 12.0, 15.0, 20.0];
        let y = vec![0.0, 2.76429e-5, 4.37498e-2, 0.169183, 0.469428, 0.943740, 0.998636, 0.999919, 0.999994];
        let curve = MonotoneCubic::new(x, y).unwrap();
        let samples: Vec<f64> = (0..=12_010).map(|i| curve.at(7.99 + f64::from(i) / 1000.0)).collect();
        assert!(samples.is_sorted(), "it falls somewhere");
    }

    #[test]
    fn what_is_no_curve_is_refused() {
        assert!(MonotoneCubic::new(vec![1.0], vec![1.0]).is_none());
        assert!(MonotoneCubic::new(vec![1.0, 1.0], vec![1.0, 2.0]).is_none());
        assert!(MonotoneCubic::new(vec![1.0, 2.0], vec![1.0, f64::NAN]).is_none());
    }
}
