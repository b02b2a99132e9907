//! `[[amplifier.filter]]` and `[amplifier.dropper]`: what stands between the rectifier and the nodes.

use super::names::complain_of_doubles;
use super::table::{Bounds, Keys, Table};
use crate::supply::{Capacitor, Dropper, Section, SeriesPart};

pub(super) const FILTER: Keys = &[
    ("node", "\"reservoir\""),
    ("choke_h", "5.0"),
    ("choke_ohm", "120"),
    ("series_ohm", "1000"),
    ("capacitor_uf", "100"),
    ("rated_v", "550"),
    ("esr_ohm", "0"),
    ("series", "2"),
    ("rated_v_each", "350"),
    ("balance_kohm", "220"),
];

pub(super) const DROPPER: Keys = &[
    ("kind", "\"return-mosfet\""),
    ("zener_v", "[18, 18]"),
    ("zener_ohm", "30"),
    ("vgs_v", "4.5"),
    ("vgs_at_a", "0.2"),
    ("threshold_v", "3.5"),
    ("k_a_per_v2", "1.0"),
    ("resistor_ohm", "100"),
];

/// Every section, in order from the rectifier.
pub(super) fn read_filter(tables: &[Table<'_>], doubler: bool) -> Option<Vec<Section>> {
    complain_of_doubles(tables, "node", "[[amplifier.filter]]");
    let sections: Vec<_> =
        tables.iter().enumerate().map(|(i, table)| read_section(*table, i == 0, doubler)).collect();
    sections.into_iter().collect()
}

fn read_section(table: Table<'_>, first: bool, doubler: bool) -> Option<Section> {
    let node = table.need("node").name(false);
    let series = if first && doubler {
        let why = "the doubler's own two capacitors stand at the first node; put it into the next section";
        table.refuse(&["choke_h", "choke_ohm", "series_ohm"], why);
        Some(SeriesPart::None)
    } else {
        read_series(table, first)
    };
    let optional = first && doubler && !table.key("capacitor_uf").is_present();
    let capacitor = if optional { Some(None) } else { read_capacitor(table).map(Some) };
    Some(Section { node: node?.value, series: series?, capacitor: capacitor? })
}

fn read_series(table: Table<'_>, first: bool) -> Option<SeriesPart> {
    let ohms = Bounds::Above0To(1e6);
    if table.has_any(&["choke_h", "choke_ohm"]) {
        table.refuse(&["series_ohm"], "a section has one series part; add the resistor to choke_ohm");
        let henry = table.need("choke_h").number(Bounds::Above0To(1000.0));
        let ohm = table.need("choke_ohm").number(ohms);
        return Some(SeriesPart::Choke { henry: henry?, ohm: ohm? });
    }
    let resistor = table.key("series_ohm");
    if resistor.is_present() {
        return resistor.number(ohms).map(SeriesPart::Resistor);
    }
    if first {
        return Some(SeriesPart::None);
    }
    table.missing("its series part", "expected series_ohm = 1000, or choke_h = 5.0 with choke_ohm = 120");
    None
}

/// The capacitor as its node sees it: of `series` equal ones the value is divided and the ratings are added.
fn read_capacitor(table: Table<'_>) -> Option<Capacitor> {
    let one_uf = table.need("capacitor_uf").number(Bounds::Above0To(100_000.0));
    let one_esr_ohm = table.key("esr_ohm").number(Bounds::Within(0.0, 1000.0)).unwrap_or(0.0);
    let volts = Bounds::Above0To(10_000.0);
    let string = table.key("series");
    let (in_series, one_rated_v, balance_kohm) = if string.is_present() {
        table.refuse(&["rated_v"], "expected rated_v_each with capacitors in series");
        let balance = table.key("balance_kohm").number(Bounds::Above0To(100_000.0));
        (string.whole(2, 12), table.key("rated_v_each").number(volts), balance)
    } else {
        table
            .refuse(&["rated_v_each", "balance_kohm"], "belongs to capacitors in series, such as series = 2");
        (Some(1), table.key("rated_v").number(volts), None)
    };
    let in_series = in_series?;
    let count = f64::from(in_series);
    Some(Capacitor {
        farad: one_uf? / 1e6 / count,
        rated_v: one_rated_v.map(|volts| volts * count),
        esr_ohm: one_esr_ohm * count,
        in_series,
        balance_ohm: balance_kohm.map(|kohm| kohm * 1000.0),
    })
}

/// Tolerance of a zener's voltage, as a fraction: the usual ±5 % grade.
const ZENER_DOUBT: f64 = 0.05;

/// k of i = k·(v_gs − threshold)² where only one V_GS is known, A/V²: of the order of a high-voltage power MOSFET
/// (from memory).
const USUAL_K_A_PER_V2: f64 = 1.0;

/// V_GS at work where nothing is known of it: 2 to 6 V, at some 0.2 A.
const UNKNOWN_VGS_V: f64 = 4.0;
const UNKNOWN_VGS_DOUBT_V: f64 = 2.0;
const UNKNOWN_VGS_AT_A: f64 = 0.2;

/// Half-width of a V_GS that was read at one current and holds at others only as far as k is right, V.
const ONE_POINT_VGS_DOUBT_V: f64 = 0.5;

#[derive(Clone, Copy, PartialEq)]
enum Kind {
    ReturnMosfet,
    ReturnZener,
    ReturnResistor,
    LineResistor,
}

/// A dropper that is fitted already; `sections` is how many the filter has.
pub(super) fn read_dropper(table: Table<'_>, sections: usize) -> Option<Dropper> {
    let kinds = [
        ("return-mosfet", Kind::ReturnMosfet),
        ("return-zener", Kind::ReturnZener),
        ("return-resistor", Kind::ReturnResistor),
        ("line-resistor", Kind::LineResistor),
    ];
    let entry = table.need("kind");
    let kind = entry.word(&kinds)?;
    let (zener, mosfet, resistor) =
        (["zener_ohm"], ["vgs_v", "vgs_at_a", "threshold_v", "k_a_per_v2"], ["resistor_ohm"]);
    let why = format!("a {} has none", entry.peek().unwrap_or_default());
    if kind != Kind::ReturnMosfet {
        table.refuse(&mosfet, &why);
    }
    if kind != Kind::ReturnZener {
        table.refuse(&zener, &why);
    }
    if matches!(kind, Kind::ReturnMosfet | Kind::ReturnZener) {
        table.refuse(&resistor, &why);
    } else {
        table.refuse(&["zener_v"], &why);
    }
    match kind {
        Kind::ReturnMosfet => read_mosfet(table),
        Kind::ReturnZener => {
            let zener_v = read_zeners(table);
            let zener_ohm = table.key("zener_ohm").number(Bounds::Within(0.0, 10_000.0)).unwrap_or(0.0);
            Some(Dropper::ReturnZener { zener_v: zener_v?, zener_ohm })
        }
        Kind::ReturnResistor => read_resistor(table).map(Dropper::ReturnResistor),
        Kind::LineResistor if sections < 2 => entry.refuse(
            "expected a second [[amplifier.filter]]: it stands after the reservoir and feeds the next node",
        ),
        Kind::LineResistor => read_resistor(table).map(Dropper::LineResistor),
    }
}

fn read_resistor(table: Table<'_>) -> Option<f64> {
    table.need("resistor_ohm").number(Bounds::Above0To(100_000.0))
}

/// The sum of the zeners, V.
fn read_zeners(table: Table<'_>) -> Option<f64> {
    Some(table.need("zener_v").numbers(Bounds::Above0To(500.0))?.iter().sum())
}

/// Threshold and k as they are given; else threshold from one V_GS and the usual k; else the range in which V_GS
/// lies.
fn read_mosfet(table: Table<'_>) -> Option<Dropper> {
    let volts = Bounds::Within(0.0, 20.0);
    let amperes = Bounds::Above0To(20.0);
    let zener_v = read_zeners(table);
    let (threshold_v, k_a_per_v2, vgs_doubt_v) = if table.has_any(&["threshold_v", "k_a_per_v2"]) {
        table.refuse(&["vgs_v", "vgs_at_a"], "threshold_v and k_a_per_v2 say it already");
        let threshold = table.need("threshold_v").number(volts);
        let k = table.need("k_a_per_v2").number(Bounds::Above0To(1000.0));
        (threshold?, k?, 0.0)
    } else if table.has_any(&["vgs_v", "vgs_at_a"]) {
        let entry = table.need("vgs_v");
        let vgs_v = entry.number(volts);
        let at_a = table.need("vgs_at_a").number(amperes);
        let above_threshold_v = (at_a? / USUAL_K_A_PER_V2).sqrt();
        let threshold_v = vgs_v? - above_threshold_v;
        if threshold_v < 0.0 {
            return entry.refuse(&format!("expected more than {above_threshold_v:.1} V at that current"));
        }
        (threshold_v, USUAL_K_A_PER_V2, ONE_POINT_VGS_DOUBT_V)
    } else {
        let above_threshold_v = (UNKNOWN_VGS_AT_A / USUAL_K_A_PER_V2).sqrt();
        (UNKNOWN_VGS_V - above_threshold_v, USUAL_K_A_PER_V2, UNKNOWN_VGS_DOUBT_V)
    };
    let zener_v = zener_v?;
    let half_width_v = zener_v * ZENER_DOUBT + vgs_doubt_v;
    Some(Dropper::ReturnMosfet { zener_v, threshold_v, k_a_per_v2, half_width_v })
}
