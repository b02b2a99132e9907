//! The changed supply solved again, against what holds for any correct solver (handbook section 5).

use super::*;
use crate::mains::Distribution;
use crate::supply::{
    Capacitor, Circuit, Device, Doubtful, Dropper, Heater, Load, Loading, MainsWave, RectifierCircuit,
    Section, SeriesPart, SolveOptions, Transformer, Winding,
};

/// A bridge on 350 V, 38 Ω and 100 µF, with `load_a` that doesn't follow the rail.
fn bridge(load_a: f64) -> Circuit {
    let capacitor = Capacitor { farad: 100e-6, rated_v: None, esr_ohm: 0.0, in_series: 1, balance_ohm: None };
    Circuit {
        amplifier: "hall".to_owned(),
        frequency_hz: 50.0,
        wave: MainsWave::default(),
        transformer: Transformer {
            wound_for_v: 230.0,
            wound_for_hz: 50.0,
            taps_v: vec![230.0, 250.0],
            secondary_v: Doubtful { value: 350.0, half_width: 0.0 },
            winding: Winding::Single,
            source_ohm: Doubtful { value: 38.0, half_width: 0.0 },
            leakage_h: 0.0,
        },
        rectifier: RectifierCircuit::Bridge,
        device: Device::Silicon { forward_v: 0.0, on_ohm: 0.0 },
        doubler_f: None,
        filter: vec![Section {
            node: "reservoir".to_owned(),
            series: SeriesPart::None,
            capacitor: Some(capacitor),
        }],
        loads: vec![Load::Law { node: 0, idle_a: load_a, full_a: None, at_v: 450.0, law: 0.0 }],
        dropper: None,
        heater: Some(Heater { nominal_v: 6.3, tolerance_pct: 10.0, per_mains_v: 6.3 / 230.0 }),
    }
}

fn bound(setpoint_v: f64) -> Bound {
    Bound { node: 0, loading: Loading::Idle, setpoint_v, min_v: Some(400.0) }
}

/// Every tenth of a volt from 225 to 253 V.
fn mains() -> Vec<f64> {
    (0..=280).map(|i| 225.0 + f64::from(i) / 10.0).collect()
}

fn outcome(change: Option<&Change>) -> Outcome {
    let plain = bridge(0.15);
    let circuit = change.map_or(plain.clone(), |c| c.apply(&plain, true).unwrap());
    let mains = Distribution::new(mains());
    Outcome::of(&circuit, change, &bound(470.0), &mains, &SolveOptions::default()).unwrap().unwrap()
}

fn zener(zener_v: f64) -> Change {
    Change::Dropper(Dropper::ReturnZener { zener_v, zener_ohm: 0.0 })
}

#[test]
fn a_constant_drop_lowers_the_rail_by_itself_and_takes_its_volts_times_the_mean_current() {
    // Handbook section 5, exact facts 1 and 3; oracle O26: 40 V at 150 mA are 6.0 W.
    let (before, after) = (outcome(None), outcome(Some(&zener(40.0))));
    for mains_v in [225.0, 240.0, 253.0] {
        let drop = before.rail_v(mains_v) - after.rail_v(mains_v);
        assert!((drop - 40.0).abs() < 0.01, "{drop} V at {mains_v} V");
    }
    let (mean, worst) = (after.mean_loss_w.unwrap(), after.worst_loss_w.unwrap());
    assert!((mean - 6.0).abs() < 0.01 && (worst - 6.0).abs() < 0.01, "{mean} W, {worst} W");
    assert_eq!(before.mean_loss_w, None);
}

#[test]
fn a_resistor_in_the_pulses_takes_more_than_its_drop_times_the_mean_current() {
    // Handbook section 5, exact fact 3: R·(F·I)² with F between 1.5 and 3.4 at these sources (table of the large capacitor).
    let ohm = 60.0;
    let after = outcome(Some(&Change::Dropper(Dropper::ReturnResistor(ohm))));
    let form = (after.worst_loss_w.unwrap() / ohm).sqrt() / 0.15;
    assert!((1.5..3.4).contains(&form), "F = {form}");
}

#[test]
fn tap_and_bucking_move_rail_and_heaters() {
    // Handbook oracle O37: 230 V to 250 V at 253 V mains, heaters 6.93 V become 6.376 V; 12 V on 230 leave 0.9478.
    let plain = outcome(None);
    let tap = outcome(Some(&Change::Tap(250.0)));
    assert!((plain.heater_v.unwrap().1 - 6.93).abs() < 1e-3);
    assert!((tap.heater_v.unwrap().1 - 6.376).abs() < 1e-3);
    // The e.m.f. at 250 V on the new tap is that at 230 V on the old one.
    assert!((tap.rail_v(250.0) - plain.rail_v(230.0)).abs() < 0.3);
    let bucking = Change::Bucking(Bucking { secondary_v: 12.0, nominal_v: 230.0 });
    let bucked = outcome(Some(&bucking));
    assert!((bucked.heater_v.unwrap().1 - 6.93 * 0.9478).abs() < 1e-3);
}

#[test]
fn a_larger_drop_never_raises_the_rail() {
    let rails: Vec<f64> =
        [0.0, 10.0, 20.0, 40.0, 80.0].into_iter().map(|v| outcome(Some(&zener(v))).rail_v(240.0)).collect();
    assert!(rails.windows(2).all(|pair| pair[1] < pair[0]), "{rails:?}");
}

#[test]
fn the_share_through_the_curve_is_the_share_reading_by_reading() {
    let after = outcome(Some(&zener(20.0)));
    let all = mains();
    let count = |keep: &dyn Fn(f64) -> bool| {
        100.0 * all.iter().filter(|v| keep(after.rail_v(**v))).count() as f64 / all.len() as f64
    };
    let under = count(&|rail| rail <= 470.0);
    assert!((0.0..100.0).contains(&under) && under > 0.0, "the bound lies within: {under} %");
    assert!((after.share_under_setpoint_pct - under).abs() < 1e-9, "{under}");
    assert!((after.share_above_min_pct - count(&|rail| rail >= 400.0)).abs() < 1e-9);
}

#[test]
fn what_does_not_fit_is_refused_with_its_reason() {
    let plain = bridge(0.15);
    assert_eq!(zener(40.0).apply(&plain, false), Err(Unfit::MovesBias));
    // After the reservoir a resistor leaves the return alone.
    assert!(Change::Dropper(Dropper::LineResistor(100.0)).apply(&plain, false).is_ok());
    let doubler = Circuit { rectifier: RectifierCircuit::Doubler, ..plain.clone() };
    assert_eq!(zener(40.0).apply(&doubler, true), Err(Unfit::Doubler));
    assert_eq!(Change::Tap(240.0).apply(&plain, true), Err(Unfit::NoTap("240".to_owned())));
    let valve = Device::Valve { perveance: 7e-4, type_name: None };
    assert_eq!(Change::Rectifier(valve).apply(&plain, true), Err(Unfit::NoValve));
    let fitted = zener(40.0).apply(&plain, true).unwrap();
    assert_eq!(zener(10.0).apply(&fitted, true), Err(Unfit::DropperFitted));
}

/// What is proposed for `circuit` under `bounds`, best first, each with whether it keeps them.
fn proposed(circuit: &Circuit, bounds: &[Bound], bias_stays: bool) -> Vec<(Way, bool)> {
    let mains = Distribution::new(mains());
    let task = Task { circuit, bounds, mains: &mains, declared_v: 230.0, bias_stays };
    task.proposals().unwrap().into_iter().map(|p| (p.way, p.meets)).collect()
}

#[test]
fn ways_are_ranked_by_reach_and_a_tap_comes_first() {
    let circuit = bridge(0.15);
    let without_tap = {
        let mut circuit = circuit.clone();
        circuit.transformer.taps_v = vec![230.0];
        circuit.heater = None;
        circuit.transformer.wound_for_hz = 45.0;
        circuit
    };
    let all = proposed(&circuit, &[bound(475.0)], true);
    assert_eq!(all[0], (Way::Tap, true), "{all:?}");
    assert_eq!(all.len(), 5);
    let all = proposed(&without_tap, &[bound(475.0)], true);
    assert_eq!(all[0], (Way::ReturnMosfet, true), "the core has room, so the return comes first: {all:?}");
    // The heaters stand at 253/230 of 6.3 V, 10.0 %, and the core 10 % over: the primary side comes first.
    let no_room = Circuit {
        transformer: Transformer { wound_for_hz: 50.0, ..without_tap.transformer.clone() },
        ..without_tap
    };
    let all = proposed(&no_room, &[bound(475.0)], true);
    assert_eq!(all[0], (Way::Bucking, true), "{all:?}");
}

#[test]
fn no_return_part_is_proposed_where_it_would_move_the_bias() {
    let all = proposed(&bridge(0.15), &[bound(475.0)], false);
    let ways: Vec<Way> = all.iter().map(|p| p.0).collect();
    assert_eq!(ways, [Way::Tap, Way::Bucking]);
}

#[test]
fn a_bound_that_starves_at_the_low_end_is_met_by_none() {
    let narrow = Bound { min_v: Some(449.0), ..bound(450.0) };
    let all = proposed(&bridge(0.15), &[narrow], true);
    assert!(!all.is_empty() && all.iter().all(|(_, meets)| !meets), "{all:?}");
}

#[test]
fn a_rail_within_its_bounds_needs_nothing_and_nothing_is_said_of_no_mains() {
    let circuit = bridge(0.15);
    let recorded = Distribution::new(mains());
    let nothing = Distribution::new([]);
    let task = |mains, bounds| Task { circuit: &circuit, bounds, mains, declared_v: 230.0, bias_stays: true };
    let (high, low) = ([bound(600.0)], [bound(475.0)]);
    assert!(task(&recorded, &high).none_needed().unwrap());
    assert!(!task(&recorded, &low).none_needed().unwrap());
    assert!(!task(&nothing, &high).none_needed().unwrap());
    assert!(task(&nothing, &low).proposals().unwrap().is_empty());
}

#[test]
fn a_proposal_keeps_its_bound_at_both_ends_of_its_tolerance() {
    let circuit = bridge(0.15);
    let recorded = Distribution::new(mains());
    let bounds = [bound(475.0)];
    let task =
        Task { circuit: &circuit, bounds: &bounds, mains: &recorded, declared_v: 230.0, bias_stays: true };
    let met: Vec<Proposal> = task.proposals().unwrap().into_iter().filter(|p| p.meets).collect();
    assert!(met.len() >= 3);
    for proposal in met {
        let (weak, strong) = (&proposal.at_weakest[0], &proposal.at_strongest[0]);
        assert!(weak.rail_v(253.0) <= 475.0 + 1e-6, "{:?}", proposal.weakest);
        assert!(strong.rail_v(225.0) >= 400.0 - 1e-6, "{:?}", proposal.strongest);
        assert!(strong.rail_v(253.0) <= weak.rail_v(253.0) + 1e-6);
    }
}
