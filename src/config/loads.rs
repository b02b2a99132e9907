//! What the rail feeds: output valves, other loads, bleeders; and the heater winding.

use super::names::expect_known;
use super::site::{Bias, BiasFrom, MeasuredSupply, OutputStage};
use super::table::{Bounds, HIGHEST_RAIL_V, Keys, Table};
use super::transformer::MAINS_V;
use crate::supply::{Heater, Load, Loading};

pub(super) const OUTPUT: Keys = &[
    ("type", "\"KT66\""),
    ("count", "4"),
    ("idle_ma_each", "40"),
    ("idle_mv", "400"),
    ("cathode_ohm", "10"),
    ("full_ma_each", "70"),
    ("at_v", "450"),
    ("cathode_v", "0"),
    ("node", "\"reservoir\""),
    ("bias", "\"cathode\""),
    ("bias_from", "\"own-winding\""),
    ("law", "1.5"),
];

pub(super) const LOAD: Keys = &[
    ("node", "\"reservoir\""),
    ("idle_ma", "20"),
    ("full_ma", "20"),
    ("at_v", "450"),
    ("law", "1.0"),
    ("bleeder_kohm", "220"),
];

pub(super) const HEATER: Keys =
    &[("nominal_v", "6.3"), ("tolerance_pct", "10"), ("measured_v", "6.5"), ("at_mains_v", "224")];

const RAIL_V: Bounds = Bounds::Above0To(HIGHEST_RAIL_V);
const MILLIAMPERES: Bounds = Bounds::Within(0.0, 20_000.0);
const LAW: Bounds = Bounds::Within(0.0, 10.0);

/// What is known of the output valves beside what dissipation needs.
pub(super) struct ReadOutput {
    pub(super) stage: OutputStage,
    /// Current of one at full output, A.
    pub(super) full_a_each: Option<f64>,
}

impl ReadOutput {
    /// What all of them draw from the node of that index.
    pub(super) fn load(&self, node: usize) -> Load {
        let count = f64::from(self.stage.count);
        Load::Law {
            node,
            idle_a: self.stage.idle_a_each * count,
            full_a: self.full_a_each.map(|each| each * count),
            at_v: self.stage.at_v,
            law: self.stage.law,
        }
    }
}

/// The output valves. The rail at which their current was read may come from the measured pair.
pub(super) fn read_output(table: Table<'_>, measured: Option<&MeasuredSupply>) -> Option<ReadOutput> {
    let type_name = table.key("type").text().map(|name| name.value);
    let count = table.need("count").whole(1, 100);
    let idle_a_each = read_idle_current(table);
    let full_ma_each = table.key("full_ma_each").number(MILLIAMPERES);
    let cathode_v = table.key("cathode_v").number(Bounds::Within(0.0, 500.0)).unwrap_or(0.0);
    let node = table.need("node").name(false).map(|node| node.value);
    let at_v = read_at_v(table, node.as_deref(), measured);
    let biases = [("cathode", Bias::Cathode), ("winding", Bias::Winding), ("regulated", Bias::Regulated)];
    let bias = table.key("bias").word(&biases);
    let law = match (table.key("law"), bias) {
        (law, _) if law.is_present() => law.number(LAW),
        (_, Some(bias)) => Some(law_of(bias)),
        (_, None) => {
            table.need("bias");
            None
        }
    };
    let sources = [
        ("own-winding", BiasFrom::OwnWinding),
        ("ht-tap", BiasFrom::HtTap),
        ("ht-capacitor", BiasFrom::HtCapacitor),
        ("none", BiasFrom::None),
        ("unknown", BiasFrom::Unknown),
    ];
    let bias_from = table.key("bias_from").word(&sources).unwrap_or(BiasFrom::Unknown);
    let stage = OutputStage {
        type_name,
        count: count?,
        idle_a_each: idle_a_each?,
        at_v: at_v?,
        cathode_v,
        node: node?,
        bias,
        bias_from,
        law: law?,
    };
    Some(ReadOutput { stage, full_a_each: full_ma_each.map(|ma| ma / 1000.0) })
}

/// Exponent of current over rail voltage by the kind of bias (common practice, no source): cathode bias makes the
/// valve a resistor; bias that rises with the rail leaves the law of the space charge; bias that stands still lets
/// the current run away, 3 to 6.
fn law_of(bias: Bias) -> f64 {
    match bias {
        Bias::Cathode => 1.0,
        Bias::Winding => 1.5,
        Bias::Regulated => 4.5,
    }
}

/// Idle current of one valve, A: as such, or as the drop across a resistor in its cathode.
fn read_idle_current(table: Table<'_>) -> Option<f64> {
    let pair = if table.key("idle_mv").is_present() { "idle_mv" } else { "cathode_ohm" };
    let way = table.one_of(
        &["idle_ma_each", pair],
        "the idle current",
        "expected idle_ma_each = 40, or idle_mv = 400 over cathode_ohm = 10",
    )?;
    if way == "idle_ma_each" {
        return Some(table.key(way).number(MILLIAMPERES)? / 1000.0);
    }
    let millivolts = table.need("idle_mv").number(Bounds::Within(0.0, 500_000.0));
    let ohm = table.need("cathode_ohm").number(Bounds::Above0To(100_000.0));
    Some(millivolts? / 1000.0 / ohm?)
}

fn read_at_v(table: Table<'_>, node: Option<&str>, measured: Option<&MeasuredSupply>) -> Option<f64> {
    let entry = table.key("at_v");
    if entry.is_present() {
        return entry.number(RAIL_V);
    }
    match measured {
        Some(m) if m.loading == Loading::Idle && Some(m.node.as_str()) == node => Some(m.pair.rail_v),
        _ => {
            table.missing("the rail at which that current was read", "expected for example at_v = 450");
            None
        }
    }
}

/// A load or a bleeder, by the nodes that the filter `feeds`; `None` also where the nodes aren't all known.
pub(super) fn read_load(table: Table<'_>, feeds: Option<&[String]>) -> Option<Load> {
    let node = table.need("node").name(false).and_then(|node| node_index(table, &node.value, feeds?));
    let bleeder = table.key("bleeder_kohm");
    if bleeder.is_present() {
        table.refuse(
            &["idle_ma", "full_ma", "at_v", "law"],
            "a bleeder has none; write another [[amplifier.load]]",
        );
        let kohm = bleeder.number(Bounds::Above0To(100_000.0));
        return Some(Load::Bleeder { node: node?, ohm: kohm? * 1000.0 });
    }
    let idle_ma = table.need("idle_ma").number(MILLIAMPERES);
    let full_ma = table.key("full_ma").number(MILLIAMPERES);
    let at_v = table.need("at_v").number(RAIL_V);
    let law = table.key("law").number(LAW).unwrap_or(1.0);
    Some(Load::Law {
        node: node?,
        idle_a: idle_ma? / 1000.0,
        full_a: full_ma.map(|ma| ma / 1000.0),
        at_v: at_v?,
        law,
    })
}

/// The index of `name` among the nodes, or a complaint at the table's `node`.
pub(super) fn node_index(table: Table<'_>, name: &str, feeds: &[String]) -> Option<usize> {
    let known = feeds.iter().map(String::as_str);
    expect_known(table.key("node"), name, "the supply has no such node", known);
    feeds.iter().position(|node| node == name)
}

/// The heater winding, by a meter's reading or else by its label at `wound_for_v`.
pub(super) fn read_heater(table: Table<'_>, wound_for_v: Option<f64>) -> Option<Heater> {
    let volts = Bounds::Within(0.5, 150.0);
    let nominal_v = table.key("nominal_v").number(volts).unwrap_or(6.3);
    let tolerance_pct = table.key("tolerance_pct").number(Bounds::Above0To(50.0)).unwrap_or(10.0);
    let per_mains_v = if table.has_any(&["measured_v", "at_mains_v"]) {
        let measured_v = table.need("measured_v").number(volts);
        let at_mains_v = table.need("at_mains_v").number(MAINS_V);
        measured_v? / at_mains_v?
    } else {
        nominal_v / wound_for_v?
    };
    Some(Heater { nominal_v, tolerance_pct, per_mains_v })
}
