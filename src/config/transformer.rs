//! `[amplifier.transformer]`: every way of stating it becomes an open-circuit voltage and a source resistance, each
//! with the doubt that its way leaves.

use super::table::{Bounds, Keys, Table};
use crate::supply::{Doubtful, Transformer, Winding};

pub(super) const TRANSFORMER: Keys = &[
    ("wound_for_v", "230"),
    ("wound_for_hz", "50"),
    ("taps_v", "[220, 240]"),
    ("winding", "\"single\""),
    ("secondary_v", "350"),
    ("open_v", "357"),
    ("at_mains_v", "234"),
    ("label_v", "330"),
    ("label_ma", "250"),
    ("regulation_pct", "8"),
    ("rated_va", "120"),
    ("source_ohm", "38"),
    ("primary_ohm", "8.5"),
    ("secondary_ohm", "18"),
    ("loaded_v", "341"),
    ("loaded_ma", "200"),
    ("leakage_mh", "0"),
    ("meter_pct", "1.0"),
];

/// Mains for which transformers are wound and at which meters are read, V.
pub(super) const MAINS_V: Bounds = Bounds::Within(80.0, 480.0);

/// Half-width of an open-circuit voltage that the owner just states, as a fraction: windings are within about 2 %
/// (common practice, no source).
const STATED_V_DOUBT: f64 = 0.02;

/// Half-width of a source resistance that the owner just states, as a fraction.
const STATED_OHM_DOUBT: f64 = 0.1;

/// Half-width of resistances that a meter read on a cold transformer: copper gains 0.393 % a kelvin, and a
/// transformer at work is some 40 K warmer (from memory).
const COLD_COPPER_DOUBT: f64 = 0.16;

/// Half-width of a regulation that the label gives, and of the usual one of a size, as fractions of it.
const LABEL_REGULATION_DOUBT: f64 = 0.2;
const USUAL_REGULATION_DOUBT: f64 = 0.5;

/// Usual regulation by size: (VA, (V_noload − V_full)/V_full). Typical of toroids, from memory; it falls with size.
const USUAL_REGULATION: [(f64, f64); 6] =
    [(30.0, 0.16), (50.0, 0.13), (120.0, 0.09), (225.0, 0.08), (300.0, 0.07), (500.0, 0.05)];

/// The transformer; `site_hz` and `usual_winding` are what it is wound for and how, where nothing else is said.
pub(super) fn read_transformer(
    table: Table<'_>,
    site_hz: f64,
    usual_winding: Winding,
) -> Option<Transformer> {
    let wound_for = table.need("wound_for_v").number(MAINS_V);
    let wound_for_v = wound_for.unwrap_or(230.0);
    let wound_for_hz = table.key("wound_for_hz").number(Bounds::Within(40.0, 70.0)).unwrap_or(site_hz);
    let taps_v = read_taps(table, wound_for);
    let windings = [("single", Winding::Single), ("centre-tapped", Winding::CentreTapped)];
    let winding = table.key("winding").word(&windings).unwrap_or(usual_winding);
    let leakage_mh = table.key("leakage_mh").number(Bounds::Within(0.0, 10_000.0)).unwrap_or(0.0);
    refuse_strays(table);
    let meter = Meter {
        doubt: table.key("meter_pct").number(Bounds::Within(0.0, 20.0)).unwrap_or(1.0) / 100.0,
        at_mains_v: table.key("at_mains_v").number(MAINS_V),
    };
    let secondary_v = read_open_voltage(table, wound_for_v, meter);
    let source_ohm = secondary_v.and_then(|open| read_source(table, open, wound_for_v, meter));
    Some(Transformer {
        wound_for_v: wound_for?,
        wound_for_hz,
        taps_v: taps_v?,
        secondary_v: secondary_v?,
        winding,
        source_ohm: source_ohm?,
        leakage_h: leakage_mh / 1000.0,
    })
}

fn read_taps(table: Table<'_>, wound_for_v: Option<f64>) -> Option<Vec<f64>> {
    let entry = table.key("taps_v");
    if !entry.is_present() {
        return Some(wound_for_v.into_iter().collect());
    }
    let taps = entry.numbers(MAINS_V)?;
    match wound_for_v {
        Some(tap) if !taps.contains(&tap) => {
            entry.refuse(&format!("expected the tap in use among them, wound_for_v = {tap}"))
        }
        _ => Some(taps),
    }
}

/// Keys that say nothing without another.
fn refuse_strays(table: Table<'_>) {
    if !table.has_any(&["open_v", "loaded_v"]) {
        table.refuse(&["at_mains_v"], "expected with open_v or loaded_v, which a meter read at that mains");
    }
    if !table.has_any(&["label_v"]) {
        table.refuse(&["label_ma"], "expected with label_v, the volts at that current");
    }
    if !table.has_any(&["label_v", "rated_va"]) {
        table.refuse(&["regulation_pct"], "expected with label_v or rated_va");
    }
}

/// The owner's meter.
#[derive(Clone, Copy)]
struct Meter {
    /// Half-width of one reading, as a fraction.
    doubt: f64,
    /// The mains while it was read, V.
    at_mains_v: Option<f64>,
}

/// Open-circuit secondary r.m.s. at `wound_for_v`.
fn read_open_voltage(table: Table<'_>, wound_for_v: f64, meter: Meter) -> Option<Doubtful> {
    let volts = Bounds::Above0To(3000.0);
    let way = table.one_of(
        &["secondary_v", "open_v", "label_v"],
        "the secondary's voltage",
        "expected secondary_v = 350 (open-circuit at wound_for_v), open_v with at_mains_v, or label_v with label_ma",
    )?;
    match way {
        "secondary_v" => {
            let value = table.key(way).number(volts)?;
            Some(Doubtful { value, half_width: value * STATED_V_DOUBT })
        }
        "open_v" => {
            table.need("at_mains_v");
            let value = table.key(way).number(volts)? * wound_for_v / meter.at_mains_v?;
            // Two readings of one meter, taken as independent.
            Some(Doubtful { value, half_width: value * meter.doubt * 2f64.sqrt() })
        }
        _ => {
            let label_v = table.key("label_v").number(volts);
            table.need("label_ma");
            if !table.has_any(&["regulation_pct", "rated_va"]) {
                table.missing(
                    "the label's regulation",
                    "expected regulation_pct = 8, or rated_va = 120 for the usual one of that size: a label gives \
                     loaded volts",
                );
            }
            let regulation = read_regulation(table)?;
            let label_v = label_v?;
            Some(Doubtful {
                value: label_v * (1.0 + regulation.value),
                half_width: label_v * regulation.half_width,
            })
        }
    }
}

/// (V_noload − V_full)/V_full, as the label says or as usual for the size.
fn read_regulation(table: Table<'_>) -> Option<Doubtful> {
    let stated = table.key("regulation_pct");
    if stated.is_present() {
        let value = stated.number(Bounds::Above0To(50.0))? / 100.0;
        return Some(Doubtful { value, half_width: value * LABEL_REGULATION_DOUBT });
    }
    let value = usual_regulation(table.key("rated_va").number(Bounds::Within(1.0, 10_000.0))?);
    Some(Doubtful { value, half_width: value * USUAL_REGULATION_DOUBT })
}

/// The usual regulation of a transformer of `va`: straight in log VA between the points, the end's beyond them.
fn usual_regulation(va: f64) -> f64 {
    let above = USUAL_REGULATION.partition_point(|(size, _)| *size < va);
    match (above.checked_sub(1).map(|i| USUAL_REGULATION[i]), USUAL_REGULATION.get(above)) {
        (Some((va0, r0)), Some((va1, r1))) => r0 + (r1 - r0) * (va / va0).ln() / (va1 / va0).ln(),
        (Some((_, r)), None) | (None, Some(&(_, r))) => r,
        (None, None) => unreachable!("the table of regulations isn't empty"),
    }
}

/// Resistance in one conducting path, primary referred. `open` is the open-circuit voltage at `wound_for_v`.
fn read_source(table: Table<'_>, open: Doubtful, wound_for_v: f64, meter: Meter) -> Option<Doubtful> {
    let ohms = Bounds::Above0To(100_000.0);
    // Either key of a pair stands for the pair, so that the missing one is named.
    let pair = |a: &'static str, b: &'static str| if table.key(a).is_present() { a } else { b };
    let ways = ["source_ohm", pair("secondary_ohm", "primary_ohm"), pair("loaded_v", "loaded_ma")];
    if !table.has_any(&ways) && table.has_any(&["label_v", "rated_va"]) {
        return source_from_label(table, open);
    }
    let way = table.one_of(
        &ways,
        "the source resistance",
        "expected source_ohm = 38, primary_ohm with secondary_ohm, loaded_v with loaded_ma, or rated_va",
    )?;
    match way {
        "source_ohm" => {
            let value = table.key(way).number(ohms)?;
            Some(Doubtful { value, half_width: value * STATED_OHM_DOUBT })
        }
        "secondary_ohm" | "primary_ohm" => {
            let primary = table.need("primary_ohm").number(ohms);
            let secondary = table.need("secondary_ohm").number(ohms);
            let ratio = open.value / wound_for_v;
            let value = secondary? + ratio * ratio * primary?;
            Some(Doubtful { value, half_width: value * COLD_COPPER_DOUBT })
        }
        _ => {
            let entry = table.need("loaded_v");
            let loaded_v = entry.number(Bounds::Above0To(3000.0));
            let loaded_ma = table.need("loaded_ma").number(Bounds::Above0To(10_000.0));
            let open_v = open.value * meter.at_mains_v.unwrap_or(wound_for_v) / wound_for_v;
            let (loaded_v, loaded_a) = (loaded_v?, loaded_ma? / 1000.0);
            if loaded_v >= open_v {
                return entry
                    .refuse(&format!("expected less than the {open_v:.1} V of no load at that mains"));
            }
            let half_width = meter.doubt * open_v.hypot(loaded_v) / loaded_a;
            Some(Doubtful { value: (open_v - loaded_v) / loaded_a, half_width })
        }
    }
}

/// What the label's regulation makes of the source resistance: the drop from no load to full, over the current of
/// the label, or of the rated VA.
fn source_from_label(table: Table<'_>, open: Doubtful) -> Option<Doubtful> {
    let regulation = read_regulation(table)?;
    let full_v = open.value / (1.0 + regulation.value);
    let full_a = match table.key("label_ma") {
        label if label.is_present() => label.number(Bounds::Above0To(10_000.0))? / 1000.0,
        _ => table.key("rated_va").number(Bounds::Within(1.0, 10_000.0))? / full_v,
    };
    let value = regulation.value * full_v / full_a;
    Some(Doubtful { value, half_width: value * regulation.half_width / regulation.value })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_usual_regulation_is_the_tables_and_falls_with_size() {
        // Handbook section 5, transformer regulation by size (from memory): 120 VA about 9 %.
        assert_eq!(usual_regulation(120.0), 0.09);
        let sizes = [10.0, 30.0, 75.0, 120.0, 200.0, 400.0, 500.0, 2000.0].map(usual_regulation);
        assert!(sizes.is_sorted_by(|a, b| a >= b), "{sizes:?}");
        assert_eq!((sizes[0], sizes[7]), (0.16, 0.05));
    }
}
