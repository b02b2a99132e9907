//! Preferred values by IEC 60063.

/// Three-digit E24 values of one decade. Not a rounded formula: 27, 30, 33, 36, 39, 43, 47 and 82 are by decree.
const E24: [u32; 24] = [
    100, 110, 120, 130, 150, 160, 180, 200, 220, 240, 270, 300, 330, 360, 390, 430, 470, 510, 560, 620, 680,
    750, 820, 910,
];

/// Which series of IEC 60063.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ESeries {
    /// ±10 % parts: every second value of E24.
    E12,
    /// ±5 % parts.
    E24,
    /// ±1 % parts: 100·10^(k/96) rounded to three digits, without exception.
    E96,
}

/// Which neighbour of a wanted value is taken.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Fit {
    /// The greatest that is not above it.
    Below,
    /// The least that is not below it.
    Above,
    /// The one whose ratio to it is nearest to one.
    Nearest,
}

impl ESeries {
    /// One decade as whole numbers from 100 to below 1000, rising.
    pub fn decade(self) -> Vec<u32> {
        match self {
            ESeries::E12 => E24.into_iter().step_by(2).collect(),
            ESeries::E24 => E24.to_vec(),
            ESeries::E96 => {
                (0..96).map(|k| (100.0 * 10f64.powf(f64::from(k) / 96.0)).round() as u32).collect()
            }
        }
    }

    /// The preferred value for `wanted`, in its unit; `None` unless that is finite and above zero.
    pub fn choose(self, wanted: f64, fit: Fit) -> Option<f64> {
        if !(wanted.is_finite() && wanted > 0.0) {
            return None;
        }
        let power = wanted.log10().floor() as i32;
        let mut values = (power - 1..=power + 1)
            .flat_map(|decade| self.decade().into_iter().map(move |v| scaled(v, decade)));
        // A value that was itself computed from preferred ones must not miss its own by the last bit.
        let slack = 1e-9;
        match fit {
            Fit::Below => values.rfind(|v| *v <= wanted * (1.0 + slack)),
            Fit::Above => values.find(|v| *v >= wanted * (1.0 - slack)),
            Fit::Nearest => values.min_by(|a, b| (a / wanted).ln().abs().total_cmp(&(b / wanted).ln().abs())),
        }
    }
}

/// 100 to 999 as 1.00 to 9.99 times ten to the `decade`, by one division or product so that 4.7 is 4.7.
fn scaled(value: u32, decade: i32) -> f64 {
    let power = decade - 2;
    match power >= 0 {
        true => f64::from(value) * 10f64.powi(power),
        false => f64::from(value) / 10f64.powi(-power),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_series_are_whole() {
        // IEC 60063: E12 and E24 as in handbook section 7; E96 written out from memory, and the
        // package eseries of PyPI gives the same three lists.
        assert_eq!(ESeries::E12.decade(), [100, 120, 150, 180, 220, 270, 330, 390, 470, 560, 680, 820]);
        assert_eq!(
            ESeries::E24.decade(),
            [
                100, 110, 120, 130, 150, 160, 180, 200, 220, 240, 270, 300, 330, 360, 390, 430, 470, 510,
                560, 620, 680, 750, 820, 910
            ]
        );
        let e96 = "100 102 105 107 110 113 115 118 121 124 127 130 133 137 140 143 147 150 154 158 162 165 169 174 178 \
                   182 187 191 196 200 205 210 215 221 226 232 237 243 249 255 261 267 274 280 287 294 301 309 316 324 \
                   332 340 348 357 365 374 383 392 402 412 422 432 442 453 464 475 487 499 511 523 536 549 562 576 590 \
                   604 619 634 649 665 681 698 715 732 750 768 787 806 825 845 866 887 909 931 953 976";
        let e96: Vec<u32> = e96.split_whitespace().map(|v| v.parse().unwrap()).collect();
        assert_eq!(ESeries::E96.decade(), e96);
    }

    #[test]
    fn e24_is_not_its_rounded_formula() {
        let formula = |k: u32| 10 * (10.0 * 10f64.powf(f64::from(k) / 24.0)).round() as u32;
        let differ: Vec<u32> = ESeries::E24
            .decade()
            .into_iter()
            .zip(0..)
            .filter(|(v, k)| *v != formula(*k))
            .map(|(v, _)| v)
            .collect();
        assert_eq!(differ, [270, 300, 330, 360, 390, 430, 470, 820]);
    }

    #[test]
    fn a_wanted_value_finds_its_neighbours_across_decades() {
        let choose = |v, fit| ESeries::E24.choose(v, fit);
        assert_eq!(choose(0.95, Fit::Above), Some(1.0));
        assert_eq!(choose(0.95, Fit::Below), Some(0.91));
        assert_eq!(choose(1200.0, Fit::Above), Some(1200.0));
        assert_eq!(choose(4.7, Fit::Below), Some(4.7));
        assert_eq!(choose(97.0, Fit::Nearest), Some(100.0));
        assert_eq!(ESeries::E12.choose(4.8e6, Fit::Above), Some(5.6e6));
        assert_eq!(choose(0.0, Fit::Above), None);
        assert_eq!(choose(f64::NAN, Fit::Nearest), None);
    }
}
