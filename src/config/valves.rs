//! Data sheets as data: vacuum rectifiers and output valves by type designation, from the tables in `config/`.

use std::sync::LazyLock;

use serde::Deserialize;

use super::nearest::nearest;
use super::site::Rating;

/// One vacuum rectifier, as its sheet has it.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Rectifier {
    /// Type designation.
    #[serde(rename = "type")]
    pub type_name: String,
    /// Other designations of the same.
    #[serde(default)]
    pub aliases: Vec<String>,
    /// Drop across one anode's path at `at_ma`, V.
    pub drop_v: f64,
    /// The current of that drop, mA.
    pub at_ma: f64,
    /// Direct current that the supply may draw with a first capacitor, mA.
    pub max_ma: f64,
    /// Repetitive peak of one anode, mA.
    pub peak_ma: f64,
    /// Peak inverse voltage of one anode, V.
    pub inverse_v: f64,
    /// Largest first capacitor, µF.
    pub max_uf: f64,
    /// Least source resistance in each anode's path: (r.m.s. volts of the anode's winding, Ω), by rising volts.
    #[serde(default)]
    pub min_ohm: Vec<(f64, f64)>,
    /// Heater or filament, V.
    pub heater_v: f64,
    /// Heater or filament, A.
    pub heater_a: f64,
    /// From switching on to conducting, s.
    pub warm_up_s: f64,
    /// Where the row comes from.
    pub source: String,
}

impl Rectifier {
    /// Perveance k of i = k·v^1.5 (Child–Langmuir) through the sheet's point, A/V^1.5.
    pub fn perveance(&self) -> f64 {
        perveance(self.drop_v, self.at_ma / 1000.0)
    }

    /// Least source resistance at `winding_v` r.m.s., Ω: linear between the sheet's points, the nearest point's
    /// outside them; `None` where the sheet gives none.
    pub fn min_ohm_at(&self, winding_v: f64) -> Option<f64> {
        let above = self.min_ohm.partition_point(|(volts, _)| *volts < winding_v);
        let (high, low) = (self.min_ohm.get(above), above.checked_sub(1).map(|i| self.min_ohm[i]));
        match (low, high) {
            (Some((v0, ohm0)), Some((v1, ohm1))) => Some(ohm0 + (ohm1 - ohm0) * (winding_v - v0) / (v1 - v0)),
            (Some((_, ohm)), None) | (None, Some(&(_, ohm))) => Some(ohm),
            (None, None) => None,
        }
    }
}

/// k of i = k·v^1.5 through one point (Child–Langmuir law of the plane diode), A/V^1.5.
pub(super) fn perveance(drop_v: f64, at_a: f64) -> f64 {
    at_a / drop_v.powf(1.5)
}

/// One output valve, as its sheet has it.
#[derive(Clone, Debug, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct OutputValve {
    /// Type designation.
    #[serde(rename = "type")]
    pub type_name: String,
    /// Other designations of the same.
    #[serde(default)]
    pub aliases: Vec<String>,
    /// Highest anode to cathode voltage, V.
    pub anode_v: f64,
    /// Highest screen voltage, V; a triode has none.
    pub screen_v: Option<f64>,
    /// Anode dissipation, W.
    pub anode_w: f64,
    /// Screen dissipation, W.
    pub screen_w: Option<f64>,
    /// Highest mean cathode current, mA.
    pub cathode_ma: Option<f64>,
    /// Heater or filament, V.
    pub heater_v: f64,
    /// Heater or filament, A.
    pub heater_a: f64,
    /// From switching on to drawing current, s.
    pub warm_up_s: f64,
    /// What the figures already allow for.
    pub rating: Rating,
    /// Where the row comes from.
    pub source: String,
}

/// The rectifier of that type designation; case, spaces and hyphens don't matter.
pub fn rectifier(designation: &str) -> Option<&'static Rectifier> {
    RECTIFIERS.iter().find(|row| is_called(designation, &row.type_name, &row.aliases))
}

/// The output valve of that type designation; case, spaces and hyphens don't matter.
pub fn output_valve(designation: &str) -> Option<&'static OutputValve> {
    OUTPUT_VALVES.iter().find(|row| is_called(designation, &row.type_name, &row.aliases))
}

/// Every rectifier of the table.
pub fn rectifiers() -> &'static [Rectifier] {
    &RECTIFIERS
}

/// Every output valve of the table.
pub fn output_valves() -> &'static [OutputValve] {
    &OUTPUT_VALVES
}

/// The known rectifier whose designation is nearest to a misspelt one.
pub(super) fn nearest_rectifier(designation: &str) -> Option<&'static str> {
    let names = RECTIFIERS.iter().flat_map(|row| std::iter::once(&row.type_name).chain(&row.aliases));
    nearest(designation, names.map(String::as_str))
}

static RECTIFIERS: LazyLock<Vec<Rectifier>> = LazyLock::new(|| {
    #[derive(Deserialize)]
    struct File {
        rectifier: Vec<Rectifier>,
    }
    let file: File = toml::from_str(include_str!("../../config/rectifiers.toml"))
        .expect("a test reads the table that is built in");
    file.rectifier
});

static OUTPUT_VALVES: LazyLock<Vec<OutputValve>> = LazyLock::new(|| {
    #[derive(Deserialize)]
    struct File {
        output_valve: Vec<OutputValve>,
    }
    let file: File = toml::from_str(include_str!("../../config/output-valves.toml"))
        .expect("a test reads the table that is built in");
    file.output_valve
});

fn is_called(designation: &str, type_name: &str, aliases: &[String]) -> bool {
    let wanted = bare(designation);
    bare(type_name) == wanted || aliases.iter().any(|alias| bare(alias) == wanted)
}

fn bare(designation: &str) -> String {
    designation.chars().filter(|c| !matches!(c, '-' | ' ')).map(|c| c.to_ascii_uppercase()).collect()
}

#[cfg(test)]
mod tests {
    use std::collections::HashSet;

    use super::*;

    #[test]
    fn both_tables_have_at_least_twenty_types_and_no_designation_twice() {
        assert!(rectifiers().len() >= 20 && output_valves().len() >= 20);
        let names = |type_name: &str, aliases: &[String]| {
            std::iter::once(bare(type_name)).chain(aliases.iter().map(|a| bare(a))).collect::<Vec<_>>()
        };
        let mut seen = HashSet::new();
        let of_rectifiers = rectifiers().iter().flat_map(|row| names(&row.type_name, &row.aliases));
        let of_valves = output_valves().iter().flat_map(|row| names(&row.type_name, &row.aliases));
        for name in of_rectifiers.chain(of_valves) {
            assert!(seen.insert(name.clone()), "{name} stands in the tables twice");
        }
    }

    #[test]
    fn every_row_names_its_source_and_is_within_what_such_valves_are() {
        for row in rectifiers() {
            assert!(!row.source.is_empty(), "{row:?}");
            assert!(
                (10.0..=70.0).contains(&row.drop_v) && (300.0..=3000.0).contains(&row.inverse_v),
                "{row:?}"
            );
            assert!(row.peak_ma > row.max_ma && row.max_ma >= 50.0 && row.max_uf >= 4.0, "{row:?}");
            assert!(row.min_ohm.is_sorted() && row.min_ohm.iter().all(|(_, ohm)| *ohm > 0.0), "{row:?}");
            assert!((1e-4..1e-2).contains(&row.perveance()), "{row:?}");
            assert!((1.0..=60.0).contains(&row.warm_up_s), "{row:?}");
        }
        for row in output_valves() {
            assert!(!row.source.is_empty(), "{row:?}");
            assert!(
                (200.0..=2000.0).contains(&row.anode_v) && (5.0..=150.0).contains(&row.anode_w),
                "{row:?}"
            );
            assert_eq!(row.screen_v.is_some(), row.screen_w.is_some(), "{row:?}");
            assert!((1.0..100.0).contains(&(row.heater_v * row.heater_a)), "{row:?}");
        }
    }

    #[test]
    fn a_type_is_found_by_any_of_its_designations_in_any_spelling() {
        for spelling in ["GZ34", "gz34", "5AR4", "5-ar4", "GZ 34"] {
            assert_eq!(rectifier(spelling).map(|row| row.type_name.as_str()), Some("GZ34"));
        }
        assert_eq!(output_valve("6bq5").map(|row| row.type_name.as_str()), Some("EL84"));
        assert_eq!(output_valve("6L6GC").map(|row| row.anode_v), Some(500.0));
        assert_eq!((rectifier("EL84"), output_valve("GZ34")), (None, None));
        assert_eq!(nearest_rectifier("GZ35"), Some("GZ34"));
    }

    #[test]
    fn the_space_charge_law_goes_through_the_sheets_points() {
        // O24, computed from data-sheet points: 22 V at 70 mA is 27.9 V at 100 mA, 45 V at 225 mA is 26.2 V,
        // 67 V at 250 mA is 36.4 V.
        for (name, drop_v) in [("6X4", 27.9), ("5T4", 26.2), ("5R4-GY", 36.4)] {
            let at_100_ma = (0.1 / rectifier(name).unwrap().perveance()).powf(2.0 / 3.0);
            assert!((at_100_ma - drop_v).abs() < 0.1, "{name}: {at_100_ma}");
        }
        // EZ40: the K of 8.41e-4 that fits the four points of its sheet; GZ34 3.21e-3, 5V4-G 1.40e-3 (from memory).
        for (name, k) in [("EZ40", 8.41e-4), ("EZ41", 1.03e-3), ("GZ34", 3.21e-3), ("5V4-G", 1.40e-3)] {
            let perveance = rectifier(name).unwrap().perveance();
            assert!((perveance / k - 1.0).abs() < 0.01, "{name}: {perveance}");
        }
    }

    #[test]
    fn the_least_source_resistance_is_the_sheets_and_lies_between_its_points() {
        // EZ40 sheet: 125, 175, 215, 300 Ω at 250, 275, 300, 350 V.
        let ez40 = rectifier("EZ40").unwrap();
        let at = |volts| ez40.min_ohm_at(volts).unwrap();
        assert_eq!(
            [200.0, 250.0, 275.0, 325.0, 350.0, 400.0].map(at),
            [125.0, 125.0, 175.0, 257.5, 300.0, 300.0]
        );
        assert_eq!(rectifier("5V4-G").unwrap().min_ohm_at(300.0), None);
    }

    #[test]
    fn output_valves_have_the_limits_of_their_sheets() {
        // EL84 (ru.wikipedia EL84), 6L6-GC (Essential Characteristics 1973), KT66 (Super Radiotron Valve Manual).
        let limits = |name| {
            let row = output_valve(name).unwrap();
            (row.anode_v, row.anode_w)
        };
        assert_eq!(limits("EL84"), (300.0, 12.0));
        assert_eq!(limits("6L6-GC"), (500.0, 30.0));
        assert_eq!(limits("KT66"), (500.0, 25.0));
        assert_eq!(output_valve("EL84").unwrap().rating, Rating::DesignCentre);
    }
}
