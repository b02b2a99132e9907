//! The shape of the mains: a fundamental and its harmonics in sine phase, held at one r.m.s. value.

use std::f64::consts::{SQRT_2, TAU};

use super::circuit::MainsWave;

/// Samples in a period for finding its peaks, before they are sharpened by a parabola.
const PEAK_SAMPLES: usize = 720;

impl MainsWave {
    /// The wave at unit r.m.s.: √2·(sin θ + Σ aₙ·sin nθ)/√(1 + Σ aₙ²), θ in radians from the fundamental's rise.
    pub fn at(&self, theta: f64) -> f64 {
        let shape = self.harmonics.iter().map(|&(n, a)| a * (f64::from(n) * theta).sin()).sum::<f64>();
        (theta.sin() + shape) * self.fundamental()
    }

    /// Amplitude of the fundamental at unit r.m.s.; the r.m.s. of a sum of harmonics is that of their squares.
    fn fundamental(&self) -> f64 {
        SQRT_2 / (1.0 + self.harmonics.iter().map(|(_, a)| a * a).sum::<f64>()).sqrt()
    }

    /// Highest peak over r.m.s.: √2 for a sine. Both halves have the same, since a sum of sines is odd about its rise.
    pub fn crest_factor(&self) -> f64 {
        if self.harmonics.is_empty() {
            return SQRT_2;
        }
        let sample = |i: usize| self.at(TAU * i as f64 / PEAK_SAMPLES as f64);
        let top = (0..PEAK_SAMPLES).max_by(|&a, &b| sample(a).total_cmp(&sample(b))).unwrap_or_default();
        let [left, middle, right] =
            [top + PEAK_SAMPLES - 1, top + PEAK_SAMPLES, top + PEAK_SAMPLES + 1].map(sample);
        let bend = left - 2.0 * middle + right;
        if bend < 0.0 { middle - (right - left).powi(2) / (8.0 * bend) } else { middle }
    }

    /// Whether the second half-period is the first one upside down: odd harmonics alone.
    pub(super) fn is_half_wave_symmetric(&self) -> bool {
        self.harmonics.iter().all(|(n, a)| n % 2 == 1 || *a == 0.0)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn wave(harmonics: &[(u32, f64)]) -> MainsWave {
        MainsWave { harmonics: harmonics.to_vec(), known: true }
    }

    #[test]
    fn a_flat_topped_wave_of_230_v_peaks_at_312_v() {
        // Computed from first principles: third +2 %, fifth -2 % at 230 V r.m.s. peaks at 312.1 V, not at 325.3 V.
        assert!((230.0 * wave(&[(3, 0.02), (5, -0.02)]).crest_factor() - 312.1).abs() < 0.1);
        assert!((230.0 * wave(&[]).crest_factor() - 325.27).abs() < 0.01);
    }

    #[test]
    fn crest_factors_of_distorted_mains() {
        // Computed from first principles: fractions of the fundamental in sine phase → crest factor.
        let table = [
            (0.01, -0.01, 1.3858),
            (0.01, -0.02, 1.3714),
            (0.02, -0.02, 1.3571),
            (0.0, -0.03, 1.3712),
            (0.03, -0.02, 1.3426),
        ];
        for (third, fifth, crest) in table {
            let wave = wave(&[(3, third), (5, fifth)]);
            assert!((wave.crest_factor() - crest).abs() < 1e-4, "{third} {fifth}: {}", wave.crest_factor());
        }
    }

    #[test]
    fn the_rms_is_one_whatever_the_harmonics() {
        let wave = wave(&[(2, 0.05), (3, 0.04), (5, -0.06)]);
        let squares = (0..1000).map(|i| wave.at(TAU * f64::from(i) / 1000.0).powi(2)).sum::<f64>();
        assert!((squares / 1000.0 - 1.0).abs() < 1e-12);
        assert!(!wave.is_half_wave_symmetric(), "an even harmonic makes the halves differ");
    }
}
