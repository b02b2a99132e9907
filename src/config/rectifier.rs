//! `[amplifier.rectifier]`: its wiring, its device, and what stands while the valves are cold.

use super::complaint::At;
use super::site::{ColdStart, Standby};
use super::table::{Bounds, Keys, Table};
use super::valves::{nearest_rectifier, perveance, rectifier};
use crate::supply::{Device, RectifierCircuit, Winding};

pub(super) const RECTIFIER: Keys = &[
    ("circuit", "\"bridge\""),
    ("device", "\"silicon\""),
    ("forward_v", "0.85"),
    ("on_ohm", "0.05"),
    ("drop_v", "17"),
    ("at_ma", "225"),
    ("doubler_uf", "[220, 220]"),
    ("standby", "\"ht-ac\""),
    ("warm_up_s", "20"),
];

/// From switching on to drawing current for an indirectly heated output valve of unknown type, s (from memory).
const ORDINARY_WARM_UP_S: f64 = 15.0;

/// The rectifier of a circuit.
pub(super) struct ReadRectifier {
    pub(super) circuit: RectifierCircuit,
    pub(super) device: Device,
    pub(super) doubler_f: Option<[f64; 2]>,
}

const CIRCUITS: [(&str, RectifierCircuit); 4] = [
    ("bridge", RectifierCircuit::Bridge),
    ("full-wave", RectifierCircuit::FullWave),
    ("half-wave", RectifierCircuit::HalfWave),
    ("doubler", RectifierCircuit::Doubler),
];

/// Whether the table says that the rectifier is a doubler.
pub(super) fn is_doubler(table: Table<'_>) -> bool {
    table.key("circuit").peek() == Some("doubler")
}

/// The winding that the table's wiring needs.
pub(super) fn usual_winding(table: Table<'_>) -> Winding {
    if table.key("circuit").peek() == Some("full-wave") { Winding::CentreTapped } else { Winding::Single }
}

/// Reads wiring and device; `winding` is the transformer's, where that is known.
pub(super) fn read_rectifier(table: Table<'_>, winding: Option<Winding>) -> Option<ReadRectifier> {
    let circuit = table.need("circuit").word(&CIRCUITS);
    let fits = match (circuit, winding) {
        (Some(RectifierCircuit::FullWave), Some(Winding::Single)) => table
            .key("circuit")
            .refuse("expected winding = \"centre-tapped\" in [amplifier.transformer] with it"),
        (Some(RectifierCircuit::FullWave), _) => Some(()),
        (Some(_), Some(Winding::CentreTapped)) => table.key("circuit").refuse(
            "expected \"full-wave\" with a centre-tapped winding; a bridge across both halves is winding = \
             \"single\" with the voltage of both",
        ),
        _ => Some(()),
    };
    let device = read_device(table);
    let doubler_f = read_doubler(table);
    fits?;
    Some(ReadRectifier { circuit: circuit?, device: device?, doubler_f: doubler_f? })
}

fn read_device(table: Table<'_>) -> Option<Device> {
    let entry = table.need("device");
    let device = entry.text()?.value;
    if device != "silicon" {
        table.refuse(&["forward_v", "on_ohm"], "belongs to device = \"silicon\"");
    }
    if device != "valve" {
        table.refuse(&["drop_v", "at_ma"], "belongs to device = \"valve\"; a type of the table has its own");
    }
    match device.as_str() {
        "silicon" => Some(Device::Silicon {
            forward_v: table.key("forward_v").number(Bounds::Within(0.0, 100.0)).unwrap_or(0.85),
            on_ohm: table.key("on_ohm").number(Bounds::Within(0.0, 1000.0)).unwrap_or(0.05),
        }),
        "valve" => {
            let drop_v = table.need("drop_v").number(Bounds::Above0To(500.0));
            let at_ma = table.need("at_ma").number(Bounds::Above0To(10_000.0));
            Some(Device::Valve { perveance: perveance(drop_v?, at_ma? / 1000.0), type_name: None })
        }
        designation => match rectifier(designation) {
            Some(row) => {
                Some(Device::Valve { perveance: row.perveance(), type_name: Some(row.type_name.clone()) })
            }
            None => {
                let near = nearest_rectifier(designation).unwrap_or("GZ34");
                entry.refuse(&format!(
                    "expected \"silicon\", \"valve\" with drop_v and at_ma, or a type of the table such as \"{near}\""
                ))
            }
        },
    }
}

/// The outer `None` is a complaint, the inner one no doubler.
fn read_doubler(table: Table<'_>) -> Option<Option<[f64; 2]>> {
    if !is_doubler(table) {
        table.refuse(&["doubler_uf"], "belongs to circuit = \"doubler\"");
        return Some(None);
    }
    let entry = table.need("doubler_uf");
    match entry.numbers(Bounds::Above0To(100_000.0))?.as_slice() {
        [upper, lower] => Some(Some([upper / 1e6, lower / 1e6])),
        _ => entry.refuse("expected its two capacitors, such as [220, 220]"),
    }
}

/// Standby and warm-up. Without the owner's word the rail stands unloaded from the rectifier's conducting to the
/// output valves' drawing current.
pub(super) fn read_cold_start(
    table: Table<'_>,
    device: Option<&Device>,
    valves_warm_up_s: Option<f64>,
) -> Option<ColdStart> {
    let entry = table.key("standby");
    let standby = match entry.text() {
        None if entry.is_present() => None,
        None => Some(Standby::None),
        Some(At { value, .. }) => match (value.as_str(), value.strip_prefix("after:")) {
            ("none", _) => Some(Standby::None),
            ("ht-ac", _) => Some(Standby::HtAc),
            (_, Some(node)) => Some(Standby::After(node.trim().to_owned())),
            _ => entry.refuse(
                "expected \"none\", \"ht-ac\", or \"after:\" with a node, such as \"after:reservoir\"",
            ),
        },
    };
    let rectifier_s = match device {
        Some(Device::Valve { type_name, .. }) => {
            type_name.as_deref().and_then(rectifier).map_or(0.0, |row| row.warm_up_s)
        }
        _ => 0.0,
    };
    let from_heating = (valves_warm_up_s.unwrap_or(ORDINARY_WARM_UP_S) - rectifier_s).max(0.0);
    let warm_up_s = table.key("warm_up_s").number(Bounds::Within(0.0, 600.0)).unwrap_or(from_heating);
    Some(ColdStart { standby: standby?, warm_up_s })
}
