//! The full way of stating a supply: what each way of stating it becomes, and what each mistake is told.

use std::path::{Path, PathBuf};

use insta::assert_snapshot;
use proptest::prelude::*;
use railtide::config::{Amplifier, Bias, BiasFrom, Rating, Site, Standby, Surroundings};
use railtide::supply::{
    Capacitor, Circuit, Device, Doubtful, Dropper, Load, RectifierCircuit, SeriesPart, Transformer, Winding,
};

const FULL: &str = include_str!("../config/full.example.toml");

fn read(text: &str) -> Result<Site, String> {
    let surroundings = Surroundings { conditions: &[], default_store: PathBuf::from("railtide.db") };
    Site::parse(text, Path::new("f"), &surroundings).map_err(|complaints| complaints.to_string())
}

/// A supply in which each part can be replaced, one line a table; the transformer's header is in line 4.
struct Supply {
    transformer: &'static str,
    rectifier: &'static str,
    filter: &'static str,
    more: &'static str,
}

const PLAIN: Supply = Supply {
    transformer: "wound_for_v = 220, winding = 'single', secondary_v = 350, source_ohm = 38",
    rectifier: "circuit = 'bridge', device = 'silicon'",
    filter: "{ node = 'reservoir', capacitor_uf = 100 }",
    more: "",
};

impl Supply {
    fn text(&self) -> String {
        let Supply { transformer, rectifier, filter, more } = self;
        format!(
            "site = {{ name = 'h', time_zone = 'Europe/London' }}\n\
             [[amplifier]]\nname = 'hall'\n\
             transformer = {{ {transformer} }}\n\
             rectifier = {{ {rectifier} }}\n\
             filter = [{filter}]\n{more}\n"
        )
    }

    fn amplifier(&self) -> Amplifier {
        read(&self.text()).unwrap_or_else(|complaints| panic!("{complaints}")).amplifiers.remove(0)
    }

    fn circuit(&self) -> Circuit {
        self.amplifier().circuit.expect("the supply is stated the full way")
    }

    fn complaints(&self) -> String {
        match read(&self.text()) {
            Ok(site) => panic!("no complaint about {site:?}"),
            Err(complaints) => complaints,
        }
    }

    fn warnings(&self) -> String {
        let site = read(&self.text()).unwrap_or_else(|complaints| panic!("{complaints}"));
        site.warnings.iter().map(|warning| format!("{warning}\n")).collect()
    }
}

fn transformer(stated: &'static str) -> Transformer {
    Supply { transformer: stated, ..PLAIN }.circuit().transformer
}

fn near(found: Doubtful, value: f64, half_width: f64) {
    assert!((found.value - value).abs() < 1e-6 * value, "{found:?}, expected {value}");
    assert!((found.half_width - half_width).abs() < 1e-6 * value, "{found:?}, expected ±{half_width}");
}

#[test]
fn the_full_example_becomes_what_it_says() {
    let site = read(FULL).unwrap_or_else(|complaints| panic!("{complaints}"));
    assert_eq!(site.warnings, []);
    assert_eq!(site.wave.harmonics, [(3, 0.01), (5, -0.03)]);
    let hall = &site.amplifiers[0];
    let circuit = hall.circuit.as_ref().unwrap();
    assert_eq!((circuit.amplifier.as_str(), circuit.frequency_hz), ("hall", 50.0));
    assert_eq!(circuit.rectifier, RectifierCircuit::Bridge);
    assert_eq!(circuit.device, Device::Silicon { forward_v: 0.85, on_ohm: 0.05 });
    let nodes: Vec<_> = circuit.filter.iter().map(|section| section.node.as_str()).collect();
    assert_eq!(nodes, ["reservoir", "screens", "drivers"]);
    let reservoir = Capacitor {
        farad: 110e-6,
        rated_v: Some(700.0),
        esr_ohm: 0.0,
        in_series: 2,
        balance_ohm: Some(220e3),
    };
    assert_eq!(circuit.filter[0].capacitor, Some(reservoir));
    assert_eq!(circuit.filter[1].series, SeriesPart::Choke { henry: 5.0, ohm: 120.0 });
    assert_eq!(circuit.filter[2].series, SeriesPart::Resistor(4700.0));
    // 400 mV over 10 Ω is 40 mA each, four of them; an unregulated bias winding makes the law 1.5.
    let valves = Load::Law { node: 0, idle_a: 0.16, full_a: Some(0.3), at_v: 455.0, law: 1.5 };
    let screens = Load::Law { node: 1, idle_a: 0.018, full_a: Some(0.04), at_v: 450.0, law: 1.5 };
    let drivers = Load::Law { node: 2, idle_a: 0.012, full_a: Some(0.012), at_v: 390.0, law: 1.0 };
    assert_eq!(circuit.loads, [valves, screens, drivers, Load::Bleeder { node: 0, ohm: 100e3 }]);
    assert!((circuit.heater.unwrap().per_mains_v - 6.5 / 224.0).abs() < 1e-12);

    let output = hall.output.as_ref().unwrap();
    assert_eq!((output.bias, output.bias_from), (Some(Bias::Winding), BiasFrom::OwnWinding));
    let cold = hall.cold.as_ref().unwrap();
    assert_eq!((&cold.standby, cold.warm_up_s), (&Standby::After("reservoir".to_owned()), 18.0));
    // KT66, 500 V from anode to cathode (Super Radiotron Valve Manual 1962).
    assert_eq!((hall.limits[0].max_v, hall.limits[0].rating), (500.0, Rating::DesignCentre));
    assert_eq!(hall.limits[0].why, "highest anode voltage by the sheet of KT66");
    assert_eq!(hall.events[0].on.to_string(), "2026-10-02");

    let choir = &site.amplifiers[1];
    assert_eq!(choir.circuit.as_ref().unwrap().transformer.winding, Winding::CentreTapped);
    // EL84, 300 V from anode to cathode, the cathode 11 V up (ru.wikipedia EL84).
    assert_eq!(choir.limits[0].max_v, 311.0);
    assert_eq!(read(FULL).unwrap(), site);
}

#[test]
fn a_stated_secondary_is_taken_as_it_is_with_two_per_cent_of_doubt() {
    let t = transformer(
        "wound_for_v = 220, winding = 'single', secondary_v = 350, source_ohm = 38, leakage_mh = 2",
    );
    near(t.secondary_v, 350.0, 7.0);
    near(t.source_ohm, 38.0, 3.8);
    assert_eq!((t.wound_for_hz, t.leakage_h, t.taps_v), (50.0, 0.002, vec![220.0]));
}

#[test]
fn a_winding_is_as_the_rectifier_needs_it_unless_it_is_stated() {
    let winding = |rectifier| {
        let transformer = "wound_for_v = 220, secondary_v = 350, source_ohm = 90";
        Supply { transformer, rectifier, ..PLAIN }.circuit().transformer.winding
    };
    assert_eq!(winding("circuit = 'full-wave', device = 'silicon'"), Winding::CentreTapped);
    assert_eq!(winding("circuit = 'half-wave', device = 'silicon'"), Winding::Single);
}

#[test]
fn an_open_circuit_reading_is_brought_to_the_winding_s_own_mains() {
    // By hand: 357 V at 224 V is 350.625 V at 220 V; two readings within 1 % are √2 % of doubt.
    let t =
        transformer("wound_for_v = 220, winding = 'single', open_v = 357, at_mains_v = 224, source_ohm = 38");
    near(t.secondary_v, 350.625, 350.625 * 0.01 * 2f64.sqrt());
}

#[test]
fn resistances_as_read_are_referred_by_the_square_of_the_turns() {
    // By hand: n = 440/220 = 2, so 18 + 4·5 = 38 Ω; copper warms by up to 16 %.
    let t = transformer(
        "wound_for_v = 220, winding = 'single', secondary_v = 440, primary_ohm = 5, secondary_ohm = 18",
    );
    near(t.source_ohm, 38.0, 38.0 * 0.16);
}

#[test]
fn a_loaded_reading_gives_the_resistance_by_its_drop() {
    // By hand: 350 − 340 V at 250 mA is 40 Ω.
    let t = transformer(
        "wound_for_v = 220, winding = 'single', secondary_v = 350, loaded_v = 340, loaded_ma = 250, meter_pct = 0.2",
    );
    near(t.source_ohm, 40.0, 0.002 * 350f64.hypot(340.0) / 0.25);
    // At 110 % of the mains both voltages are 110 %, so the drop is too.
    let t = transformer(
        "wound_for_v = 220, winding = 'single', secondary_v = 350, loaded_v = 374, loaded_ma = 275, at_mains_v = 242",
    );
    near(t.source_ohm, 40.0, 0.01 * 385f64.hypot(374.0) / 0.275);
}

#[test]
fn a_label_gives_loaded_volts_and_its_regulation_the_rest() {
    // Regulation is (V_noload − V_full)/V_full (transformer makers' definition): 330 V + 8 % open, 26.4 V at 250 mA.
    let t = transformer(
        "wound_for_v = 230, winding = 'single', label_v = 330, label_ma = 250, regulation_pct = 8",
    );
    near(t.secondary_v, 356.4, 330.0 * 0.016);
    near(t.source_ohm, 105.6, 105.6 * 0.2);
}

#[test]
fn the_usual_regulation_of_a_size_has_a_wide_doubt() {
    // 120 VA: about 9 % (from memory).
    let t =
        transformer("wound_for_v = 230, winding = 'single', label_v = 330, label_ma = 250, rated_va = 120");
    near(t.secondary_v, 330.0 * 1.09, 330.0 * 0.045);
    near(t.source_ohm, 330.0 * 0.09 / 0.25, 330.0 * 0.045 / 0.25);
    // From open-circuit volts and VA alone: full load 327 V / 1.09 = 300 V, 0.4 A; 27 V over it is 67.5 Ω.
    let t = transformer("wound_for_v = 230, winding = 'single', secondary_v = 327, rated_va = 120");
    near(t.source_ohm, 67.5, 33.75);
}

#[test]
fn a_transformer_stated_twice_or_by_halves_is_told_so() {
    let complaints = |stated| Supply { transformer: stated, ..PLAIN }.complaints();
    assert_snapshot!(complaints(""), @r#"
f:4: [amplifier.transformer]: wound_for_v is missing; expected for example wound_for_v = 230
f:4: [amplifier.transformer]: the secondary's voltage is missing; expected secondary_v = 350 (open-circuit at wound_for_v), open_v with at_mains_v, or label_v with label_ma
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', secondary_v = 350"), @r#"
f:4: [amplifier.transformer]: the source resistance is missing; expected source_ohm = 38, primary_ohm with secondary_ohm, loaded_v with loaded_ma, or rated_va
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', secondary_v = 350, open_v = 350, source_ohm = 38, primary_ohm = 3"), @r#"
f:4: open_v = 350: secondary_v states the secondary's voltage already; expected one of the two
f:4: primary_ohm = 3: source_ohm states the source resistance already; expected one of the two
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', open_v = 350, primary_ohm = 3"), @r#"
f:4: [amplifier.transformer]: at_mains_v is missing; expected for example at_mains_v = 234
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', label_v = 350, source_ohm = 38"), @r#"
f:4: [amplifier.transformer]: label_ma is missing; expected for example label_ma = 250
f:4: [amplifier.transformer]: the label's regulation is missing; expected regulation_pct = 8, or rated_va = 120 for the usual one of that size: a label gives loaded volts
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', secondary_v = 350, source_ohm = 38, at_mains_v = 220, label_ma = 3, regulation_pct = 4"), @r#"
f:4: at_mains_v = 220: expected with open_v or loaded_v, which a meter read at that mains
f:4: label_ma = 3: expected with label_v, the volts at that current
f:4: regulation_pct = 4: expected with label_v or rated_va
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', secondary_v = 350, loaded_v = 360, loaded_ma = 100"), @r#"
f:4: loaded_v = 360: expected less than the 350.0 V of no load at that mains
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'double', secondary_v = -350, source_ohm = 0, taps_v = [230]"), @r#"
f:4: winding = 'double': expected one of "single", "centre-tapped", for example "single"
f:4: secondary_v = -350: expected a number above 0 and at most 3000, such as 350
f:4: taps_v = [230]: expected the tap in use among them, wound_for_v = 220
"#);
    assert_snapshot!(complaints("wound_for_v = 220, winding = 'single', secondary_v = 350, source_ohm = 0, taps_v = []"), @r#"
f:4: source_ohm = 0: expected a number above 0 and at most 100000, such as 38
f:4: taps_v = []: expected at least one number such as [220, 240]
"#);
}

#[test]
fn a_valve_rectifier_goes_through_its_point_or_comes_from_the_table() {
    let device = |stated| {
        let transformer = "wound_for_v = 220, winding = 'centre-tapped', secondary_v = 350, source_ohm = 90";
        Supply { transformer, rectifier: stated, ..PLAIN }.circuit().device
    };
    let Device::Valve { perveance, type_name } =
        device("circuit = 'full-wave', device = 'valve', drop_v = 17, at_ma = 225")
    else {
        panic!("a valve is a valve")
    };
    // GZ34, 17 V at 225 mA: 3.21e-3 A/V^1.5 (from memory).
    assert!((perveance - 3.21e-3).abs() < 1e-5, "{perveance}");
    assert_eq!(type_name, None);
    let from_table = device("circuit = 'full-wave', device = '5ar4'");
    assert_eq!(from_table, Device::Valve { perveance, type_name: Some("GZ34".to_owned()) });
}

#[test]
fn a_rectifier_s_mistakes_are_told() {
    let complaints = |stated| Supply { rectifier: stated, ..PLAIN }.complaints();
    assert_snapshot!(complaints(""), @r#"
f:5: [amplifier.rectifier]: circuit is missing; expected for example circuit = "bridge"
f:5: [amplifier.rectifier]: device is missing; expected for example device = "silicon"
"#);
    assert_snapshot!(complaints("circuit = 'full-wave', device = 'GZ33', standby = 'on'"), @r#"
f:5: circuit = 'full-wave': expected winding = "centre-tapped" in [amplifier.transformer] with it
f:5: device = 'GZ33': expected "silicon", "valve" with drop_v and at_ma, or a type of the table such as "GZ34"
f:5: standby = 'on': expected "none", "ht-ac", or "after:" with a node, such as "after:reservoir"
"#);
    assert_snapshot!(complaints("circuit = 'brigde', device = 'valve', on_ohm = 1, warm_up_s = -1"), @r#"
f:5: [amplifier.rectifier]: drop_v is missing; expected for example drop_v = 17
f:5: [amplifier.rectifier]: at_ma is missing; expected for example at_ma = 225
f:5: circuit = 'brigde': expected one of "bridge", "full-wave", "half-wave", "doubler"; did you mean "bridge"?
f:5: on_ohm = 1: belongs to device = "silicon"
f:5: warm_up_s = -1: expected a number from 0 to 600, such as 20
"#);
    assert_snapshot!(complaints("circuit = 'bridge', device = 'silicon', drop_v = 17, doubler_uf = [1, 1]"), @r#"
f:5: drop_v = 17: belongs to device = "valve"; a type of the table has its own
f:5: doubler_uf = [1, 1]: belongs to circuit = "doubler"
"#);
    assert_snapshot!(complaints("circuit = 'doubler', device = 'silicon', doubler_uf = [220]"), @r#"
f:5: doubler_uf = [220]: expected its two capacitors, such as [220, 220]
"#);
    assert_snapshot!(complaints("circuit = 'bridge', device = 'silicon', standby = 'after:screens'"), @r#"
f:5: standby = 'after:screens': the supply has no such node; there are reservoir
"#);
    let transformer = "wound_for_v = 220, winding = 'centre-tapped', secondary_v = 350, source_ohm = 38";
    assert_snapshot!(Supply { transformer, ..PLAIN }.complaints(), @r#"
f:5: circuit = 'bridge': expected "full-wave" with a centre-tapped winding; a bridge across both halves is winding = "single" with the voltage of both
"#);
}

#[test]
fn a_doubler_s_pair_stands_at_the_first_node() {
    let doubler = Supply {
        rectifier: "circuit = 'doubler', device = 'silicon', doubler_uf = [220, 100]",
        filter: "{ node = 'reservoir' }, { node = 'screens', series_ohm = 1000, capacitor_uf = 47 }",
        ..PLAIN
    };
    let circuit = doubler.circuit();
    assert_eq!(circuit.rectifier, RectifierCircuit::Doubler);
    assert_eq!(circuit.doubler_f, Some([220e-6, 100e-6]));
    assert_eq!(circuit.filter[0].capacitor, None);
    let choked = Supply { filter: "{ node = 'reservoir', choke_h = 5, choke_ohm = 100 }", ..doubler };
    assert_snapshot!(choked.complaints(), @r#"
f:6: choke_h = 5: the doubler's own two capacitors stand at the first node; put it into the next section
f:6: choke_ohm = 100: the doubler's own two capacitors stand at the first node; put it into the next section
"#);
}

#[test]
fn a_leading_choke_is_a_choke_input() {
    let filter = "{ node = 'reservoir', choke_h = 10, choke_ohm = 80, capacitor_uf = 47 }";
    let circuit = Supply { filter, ..PLAIN }.circuit();
    assert_eq!(circuit.filter[0].series, SeriesPart::Choke { henry: 10.0, ohm: 80.0 });
}

#[test]
fn a_filter_s_mistakes_are_told() {
    let complaints = |filter| Supply { filter, ..PLAIN }.complaints();
    assert_snapshot!(complaints(""), @r#"
f:6: filter = []: expected a list of tables: write [[amplifier.filter]] above each
"#);
    assert_snapshot!(complaints("{ node = 'reservoir' }, { capacitor_uf = 0 }"), @r#"
f:6: [[amplifier.filter]]: capacitor_uf is missing; expected for example capacitor_uf = 100
f:6: [[amplifier.filter]]: node is missing; expected for example node = "reservoir"
f:6: [[amplifier.filter]]: its series part is missing; expected series_ohm = 1000, or choke_h = 5.0 with choke_ohm = 120
f:6: capacitor_uf = 0: expected a number above 0 and at most 100000, such as 100
"#);
    assert_snapshot!(complaints("{ node = 'a', capacitor_uf = 1 }, { node = 'a', capacitor_uf = 1, series_ohm = 1 }"), @r#"
f:6: node = 'a': the [[amplifier.filter]] of line 6 has the same; expected another node
"#);
    assert_snapshot!(complaints("{ node = 'a', capacitor_uf = 1, choke_h = 5, series_ohm = 1, esr_ohm = -1 }"), @r#"
f:6: [[amplifier.filter]]: choke_ohm is missing; expected for example choke_ohm = 120
f:6: series_ohm = 1: a section has one series part; add the resistor to choke_ohm
f:6: esr_ohm = -1: expected a number from 0 to 1000, such as 0
"#);
    assert_snapshot!(complaints("{ node = 'a', capacitor_uf = 1, rated_v_each = 350, balance_kohm = 220 }"), @r#"
f:6: rated_v_each = 350: belongs to capacitors in series, such as series = 2
f:6: balance_kohm = 220: belongs to capacitors in series, such as series = 2
"#);
    assert_snapshot!(complaints("{ node = 'a', capacitor_uf = 1, series = 1, rated_v = 350 }"), @r#"
f:6: series = 1: expected a whole number from 2 to 12, such as 2
f:6: rated_v = 350: expected rated_v_each with capacitors in series
"#);
}

#[test]
fn idle_current_and_law_come_from_what_the_owner_knows() {
    let load = |more| Supply { more, ..PLAIN }.circuit().loads[0].clone();
    let stated =
        load("output = { count = 2, idle_ma_each = 50, at_v = 450, node = 'reservoir', bias = 'regulated' }");
    let expected = Load::Law { node: 0, idle_a: 0.1, full_a: None, at_v: 450.0, law: 4.5 };
    assert_eq!(stated, expected);
    // Without at_v the measured pair's rail is meant, if it was read at that node and at idle.
    let measured = load(
        "measured = { mains_v = 220, rail_v = 450, node = 'reservoir' }\n\
         output = { count = 2, idle_mv = 500, cathode_ohm = 10, node = 'reservoir', bias = 'cathode', law = 4.5 }",
    );
    assert_eq!(measured, expected);
}

#[test]
fn a_load_s_mistakes_are_told() {
    let complaints = |more| Supply { more, ..PLAIN }.complaints();
    assert_snapshot!(complaints("load = [{ node = 'screens', idle_ma = 5, at_v = 400 }, { node = 'reservoir' }]"), @r#"
f:7: node = 'screens': the supply has no such node; there are reservoir
f:7: [[amplifier.load]]: idle_ma is missing; expected for example idle_ma = 20
f:7: [[amplifier.load]]: at_v is missing; expected for example at_v = 450
"#);
    assert_snapshot!(complaints("load = [{ idle_ma = -5, at_v = 0, law = 20 }, { node = 'reservoir', bleeder_kohm = 220, idle_ma = 3 }]"), @r#"
f:7: [[amplifier.load]]: node is missing; expected for example node = "reservoir"
f:7: idle_ma = -5: expected a number from 0 to 20000, such as 20
f:7: at_v = 0: expected a number above 0 and at most 5000, such as 450
f:7: law = 20: expected a number from 0 to 10, such as 1.0
f:7: idle_ma = 3: a bleeder has none; write another [[amplifier.load]]
"#);
    assert_snapshot!(complaints("output = {}"), @r#"
f:7: [amplifier.output]: count is missing; expected for example count = 4
f:7: [amplifier.output]: the idle current is missing; expected idle_ma_each = 40, or idle_mv = 400 over cathode_ohm = 10
f:7: [amplifier.output]: node is missing; expected for example node = "reservoir"
f:7: [amplifier.output]: the rail at which that current was read is missing; expected for example at_v = 450
f:7: [amplifier.output]: bias is missing; expected for example bias = "cathode"
"#);
    assert_snapshot!(complaints("output = { count = 0, idle_ma_each = 5, idle_mv = 4, node = 'screens', at_v = 1, bias = 'grid', bias_from = 'x' }"), @r#"
f:7: count = 0: expected a whole number from 1 to 100, such as 4
f:7: idle_mv = 4: idle_ma_each states the idle current already; expected one of the two
f:7: bias = 'grid': expected one of "cathode", "winding", "regulated", for example "cathode"
f:7: bias_from = 'x': expected one of "own-winding", "ht-tap", "ht-capacitor", "none", "unknown", for example "own-winding"
"#);
    assert_snapshot!(complaints("measured = { mains_v = 220, rail_v = 450, node = 'screens' }"), @r#"
f:7: node = 'screens': the supply has no such node; there are reservoir
"#);
    let output = "output = { type = 'EL84', count = 2, idle_ma_each = 36, at_v = 300, node = 'a', bias = 'cathode' }\n\
                  limit = [{ node = 'b', max_v = 'valve' }]";
    let filter = "{ node = 'a', capacitor_uf = 9 }, { node = 'b', capacitor_uf = 9, series_ohm = 9 }";
    assert_snapshot!(Supply { filter, more: output, ..PLAIN }.complaints(), @r#"
f:8: max_v = 'valve': expected volts: the output valves' anodes are fed from a
"#);
    assert_snapshot!(complaints("[[amplifier.limit]]\nnode = 'screens'\nmax_v = 450\n[[amplifier.limit]]\nnode = 'reservoir'\nmax_v = 'valve'\n"), @r#"
f:8: node = 'screens': the supply has no such node; there are reservoir
f:12: max_v = 'valve': expected an [amplifier.output] with a type of the table, such as type = "KT66"; or the limit in volts
"#);
}

#[test]
fn a_channel_s_node_is_one_of_the_supply() {
    let more = "[[logger]]\nport = 'COM1'\n[[channel]]\nname = 'r'\nquantity = 'rail'\namplifier = 'hall'\nnode = 'reservior'\n";
    assert_snapshot!(Supply { more, ..PLAIN }.complaints(), @r#"
f:13: node = 'reservior': the supply has no such node; did you mean "reservoir"?
"#);
}

#[test]
fn a_heater_goes_by_its_label_until_it_is_measured() {
    let heater = |more| Supply { more, ..PLAIN }.circuit().heater.unwrap();
    let label = heater("heater = {}");
    assert_eq!((label.nominal_v, label.tolerance_pct, label.per_mains_v), (6.3, 10.0, 6.3 / 220.0));
    let measured =
        heater("heater = { nominal_v = 5.0, measured_v = 5.2, at_mains_v = 224, tolerance_pct = 5 }");
    assert_eq!((measured.nominal_v, measured.per_mains_v), (5.0, 5.2 / 224.0));
    let halved = Supply { more: "heater = { measured_v = 6.5, tolerance_pct = 0 }", ..PLAIN };
    assert_snapshot!(halved.complaints(), @r#"
f:7: [amplifier.heater]: at_mains_v is missing; expected for example at_mains_v = 224
f:7: tolerance_pct = 0: expected a number above 0 and at most 50, such as 10
"#);
}

#[test]
fn each_kind_of_dropper_is_read() {
    let dropper = |more| {
        let filter =
            "{ node = 'reservoir', capacitor_uf = 100 }, { node = 'b', series_ohm = 1, capacitor_uf = 9 }";
        Supply { filter, more, ..PLAIN }.circuit().dropper.unwrap()
    };
    assert_eq!(
        dropper("dropper = { kind = 'return-mosfet', zener_v = 36, threshold_v = 3.5, k_a_per_v2 = 2 }"),
        Dropper::ReturnMosfet { zener_v: 36.0, threshold_v: 3.5, k_a_per_v2: 2.0, half_width_v: 36.0 * 0.05 }
    );
    // V_GS read at one current: threshold + √(i/k) is that V_GS there, whatever k is.
    let Dropper::ReturnMosfet { zener_v, threshold_v, k_a_per_v2, .. } =
        dropper("dropper = { kind = 'return-mosfet', zener_v = [18, 18], vgs_v = 4.5, vgs_at_a = 0.2 }")
    else {
        panic!("a MOSFET is a MOSFET")
    };
    assert_eq!(zener_v, 36.0);
    assert!((threshold_v + (0.2 / k_a_per_v2).sqrt() - 4.5).abs() < 1e-12);
    // Nothing known of V_GS: 2 to 6 V, beside the zener's ±5 %.
    let Dropper::ReturnMosfet { half_width_v, .. } =
        dropper("dropper = { kind = 'return-mosfet', zener_v = 20 }")
    else {
        panic!("a MOSFET is a MOSFET")
    };
    assert!((half_width_v - 3.0).abs() < 1e-12);
    assert_eq!(
        dropper("dropper = { kind = 'return-zener', zener_v = [27, 27], zener_ohm = 20 }"),
        Dropper::ReturnZener { zener_v: 54.0, zener_ohm: 20.0 }
    );
    assert_eq!(
        dropper("dropper = { kind = 'return-resistor', resistor_ohm = 80 }"),
        Dropper::ReturnResistor(80.0)
    );
    assert_eq!(
        dropper("dropper = { kind = 'line-resistor', resistor_ohm = 80 }"),
        Dropper::LineResistor(80.0)
    );
}

#[test]
fn a_dropper_s_mistakes_are_told() {
    let complaints = |more| Supply { more, ..PLAIN }.complaints();
    assert_snapshot!(complaints("dropper = {}"), @r#"
f:7: [amplifier.dropper]: kind is missing; expected for example kind = "return-mosfet"
"#);
    assert_snapshot!(complaints("dropper = { kind = 'return-zener', vgs_v = 4, resistor_ohm = 3 }"), @r#"
f:7: [amplifier.dropper]: zener_v is missing; expected for example zener_v = [18, 18]
f:7: vgs_v = 4: a return-zener has none
f:7: resistor_ohm = 3: a return-zener has none
"#);
    assert_snapshot!(complaints("dropper = { kind = 'return-resistor', zener_v = 4, zener_ohm = 3 }"), @r#"
f:7: [amplifier.dropper]: resistor_ohm is missing; expected for example resistor_ohm = 100
f:7: zener_v = 4: a return-resistor has none
f:7: zener_ohm = 3: a return-resistor has none
"#);
    assert_snapshot!(complaints("dropper = { kind = 'line-resistor', resistor_ohm = 80 }"), @r#"
f:7: kind = 'line-resistor': expected a second [[amplifier.filter]]: it stands after the reservoir and feeds the next node
"#);
    assert_snapshot!(complaints("dropper = { kind = 'return-mosfet', zener_v = [18, -18], vgs_v = 4, threshold_v = 3 }"), @r#"
f:7: [amplifier.dropper]: k_a_per_v2 is missing; expected for example k_a_per_v2 = 1.0
f:7: zener_v = [18, -18]: expected a number above 0 and at most 500, such as [18, 18]
f:7: vgs_v = 4: threshold_v and k_a_per_v2 say it already
"#);
    assert_snapshot!(complaints("dropper = { kind = 'return-mosfet', zener_v = 18, vgs_v = 1, vgs_at_a = 4 }"), @r#"
f:7: vgs_v = 1: expected more than 2.0 V at that current
"#);
}

#[test]
fn half_of_the_full_way_is_not_enough() {
    let complaints = |amplifier: &str| {
        read(&format!(
            "site = {{ name = 'h', time_zone = 'Europe/London' }}\n[[amplifier]]\nname = 'hall'\n{amplifier}"
        ))
        .unwrap_err()
    };
    assert_snapshot!(complaints("[amplifier.transformer]\nwound_for_v = 220\nwinding = 'single'\nsecondary_v = 350\nsource_ohm = 38\n"), @r#"
f:2: [[amplifier]]: rectifier is missing; expected for example [amplifier.rectifier]
f:2: [[amplifier]]: filter is missing; expected for example [[amplifier.filter]]
"#);
    assert_snapshot!(complaints("[amplifier.heater]\nnominal_v = 6.3\n[[amplifier.load]]\nnode = 'r'\n[amplifier.dropper]\nkind = 'return-zener'\n"), @r#"
f:4: [amplifier.heater]: expected the supply the full way with it: [amplifier.transformer], [amplifier.rectifier], [[amplifier.filter]]
f:6: [[amplifier.load]]: expected the supply the full way with it: [amplifier.transformer], [amplifier.rectifier], [[amplifier.filter]]
f:8: [amplifier.dropper]: expected the supply the full way with it: [amplifier.transformer], [amplifier.rectifier], [[amplifier.filter]]
"#);
}

#[test]
fn an_amplifier_without_a_circuit_may_tell_of_its_output_valves() {
    let text = "site = { name = 'h', time_zone = 'Europe/London' }\n[[amplifier]]\nname = 'hall'\n\
                measured = { mains_v = 220, rail_v = 450, node = 'reservoir' }\n\
                output = { type = 'EL34', count = 4, idle_ma_each = 40, node = 'reservoir', bias = 'winding' }\n";
    let site = read(text).unwrap();
    let hall = &site.amplifiers[0];
    assert_eq!(hall.output.as_ref().unwrap().at_v, 450.0);
    assert!(hall.circuit.is_none() && hall.cold.is_none());
    let elsewhere = text.replace("node = 'reservoir', bias", "node = 'screens', at_v = 440, bias");
    assert_snapshot!(read(&elsewhere).unwrap_err(), @r#"
f:5: node = 'screens': nothing feeds or measures such a node; there are reservoir
"#);
}

#[test]
fn warm_up_without_the_owner_s_word_is_the_valves_less_the_rectifier_s() {
    let warm_up_s = |rectifier| {
        let supply = Supply {
            transformer: "wound_for_v = 220, winding = 'centre-tapped', secondary_v = 350, source_ohm = 400",
            rectifier,
            more: "output = { type = 'EL84', count = 2, idle_ma_each = 36, at_v = 300, node = 'reservoir', bias = 'cathode' }",
            ..PLAIN
        };
        supply.amplifier().cold.unwrap().warm_up_s
    };
    // Warm-up of EL84, GZ34 and 5Y3-GT by the tables: 15, 15 and 2 s (from memory).
    assert_eq!(warm_up_s("circuit = 'full-wave', device = 'silicon'"), 15.0);
    assert_eq!(warm_up_s("circuit = 'full-wave', device = 'GZ34'"), 0.0);
    assert_eq!(warm_up_s("circuit = 'full-wave', device = '5Y3-GT'"), 13.0);
    assert_eq!(warm_up_s("circuit = 'full-wave', device = '5Y3-GT', warm_up_s = 30"), 30.0);
}

#[test]
fn unlikely_values_are_warned_of_with_the_reason() {
    let load = "load = [{ node = 'reservoir', idle_ma = 150, at_v = 450 }]";
    assert_snapshot!(Supply { more: load, ..PLAIN }.warnings(), @"");
    let transformer = "wound_for_v = 220, winding = 'single', secondary_v = 350, source_ohm = 380";
    assert_snapshot!(Supply { transformer, more: load, ..PLAIN }.warnings(), @r#"
f:4: transformer = { wound_for_v = 220, winding = 'single', secon…: a source resistance of 380 Ω is more than a tenth of the load (3000 Ω at idle); is it that of one path, in ohms?
"#);
    let filter = "{ node = 'reservoir', choke_h = 2, choke_ohm = 80, capacitor_uf = 47 }";
    assert_snapshot!(Supply { filter, more: load, ..PLAIN }.warnings(), @r#"
f:6: choke_h = 2: too little current for a choke input: at 3000 Ω it needs 3.2 H, or the rail rises towards the peak
"#);
    let alone = "site = { name = 'h', time_zone = 'Europe/London' }\n[[amplifier]]\nname = 'hall'\n";
    assert_snapshot!(read(alone).unwrap().warnings[0], @r#"
f:2: [[amplifier]]: nothing says where its rails stand: it has no rail channel, no [amplifier.measured] and no circuit
"#);
}

/// The full example with a few of its lines left out, doubled, or with another value.
fn spoilt_example() -> impl Strategy<Value = String> {
    let value = prop_oneof![
        Just(None),
        Just(Some("0")),
        Just(Some("-1")),
        Just(Some("1e300")),
        Just(Some("nan")),
        Just(Some("\"\"")),
        Just(Some("[]")),
        Just(Some("{}")),
        Just(Some("\"valve\"")),
        Just(Some("true")),
    ];
    prop::collection::vec((any::<prop::sample::Index>(), value), 0..8).prop_map(|edits| {
        let mut lines: Vec<String> = FULL.lines().map(str::to_owned).collect();
        for (at, value) in edits {
            let i = at.index(lines.len());
            let key = lines[i].split(" = ").next().unwrap_or_default().to_owned();
            match value {
                Some(value) if lines[i].contains(" = ") => lines[i] = format!("{key} = {value}"),
                _ => drop(lines.remove(i)),
            }
        }
        lines.join("\n")
    })
}

proptest! {
    #[test]
    fn a_spoilt_supply_is_read_without_a_panic_and_what_is_read_is_finite(text in spoilt_example()) {
        let Ok(site) = read(&text) else { return Ok(()) };
        for circuit in site.amplifiers.iter().filter_map(|amplifier| amplifier.circuit.as_ref()) {
            let t = &circuit.transformer;
            for figure in [t.secondary_v, t.source_ohm] {
                prop_assert!(figure.value > 0.0 && figure.value.is_finite(), "{figure:?}");
                prop_assert!(figure.half_width >= 0.0 && figure.half_width.is_finite(), "{figure:?}");
            }
            prop_assert!(!circuit.filter.is_empty());
            for load in &circuit.loads {
                let (Load::Law { node, .. } | Load::Bleeder { node, .. }) = load;
                prop_assert!(*node < circuit.filter.len());
            }
        }
    }
}
