//! The one table of conditions: a row each. Adding a condition touches this file alone (and `figures.rs`, where it
//! judges something that nobody looked at before).

use std::time::Duration;

use super::{AheadFigures, Facts, Figures, PartFigures, Priority, RailFigures, Side};
use crate::supply::Loading;

/// One row: what is watched for, and how.
pub struct Condition {
    /// Its name, in the config, the record and every listing.
    pub name: &'static str,
    /// One line that says what it means.
    pub meaning: &'static str,
    /// How urgent.
    pub priority: Priority,
    /// Which side of the setpoint is the bad one.
    pub side: Side,
    /// How far back beyond the setpoint it must go, in `unit`.
    pub deadband: f64,
    /// Unit of value, setpoint and deadband.
    pub unit: &'static str,
    /// How long it must hold before it is raised.
    pub on_delay: Duration,
    /// How long it must be away before it is cleared.
    pub off_delay: Duration,
    /// What to do, as to a person.
    pub advice: &'static str,
    /// Where its setpoint can be changed in the config.
    pub set_in: &'static str,
    /// Judges every subject that the condition applies to.
    pub judge: fn(&Figures) -> Vec<Judged>,
}

/// One subject of one condition, judged.
#[derive(Clone, Debug, PartialEq)]
pub struct Judged {
    /// What it is about.
    pub subject: String,
    /// The figure; `None` while nobody knows it.
    pub value: Option<f64>,
    /// What it is judged against.
    pub setpoint: f64,
    /// Whether the condition has no meaning now (the amplifier is proved to be off).
    pub suppressed: bool,
    /// The figures to remember with a transition.
    pub facts: Facts,
}

const fn seconds(s: u64) -> Duration {
    Duration::from_secs(s)
}

/// Every condition, in the order in which they are listed.
pub const CONDITIONS: &[Condition] = &[
    Condition {
        name: "rail-high",
        meaning: "a rail, measured or projected from mains, is over its setpoint (the limit less the guard band)",
        priority: Priority::High,
        side: Side::Over,
        deadband: 4.0,
        unit: "V",
        on_delay: seconds(10),
        off_delay: seconds(30),
        advice: "Switch the amplifier off now if it is on, and leave it off until the mains has come down. Its \
                 capacitors stay charged after that: nobody opens it without training.",
        set_in: "[[amplifier.limit]] max_v, [site] guard_band",
        judge: rail_high,
    },
    Condition {
        name: "dissipation-high",
        meaning: "the output valves dissipate more at idle than their sheet allows, by the projected rail and the \
                  law of their bias",
        priority: Priority::Medium,
        side: Side::Over,
        deadband: 0.5,
        unit: "W",
        on_delay: seconds(60),
        off_delay: seconds(60),
        advice: "Switch the amplifier off until the mains has come down, and have the idle current measured and set \
                 again by somebody trained.",
        set_in: "[amplifier.output] type, idle_ma_each, bias",
        judge: |figures| parts(&figures.dissipations, "W", Loading::Idle.word()),
    },
    Condition {
        name: "unloaded-high",
        meaning: "if the amplifier were switched on cold now, its rail would pass what a capacitor bears before the \
                  valves draw",
        priority: Priority::Medium,
        side: Side::Over,
        deadband: 4.0,
        unit: "V",
        on_delay: seconds(60),
        off_delay: seconds(60),
        advice: "Do not switch the amplifier on, nor to standby, until the mains has come down.",
        set_in: "[[amplifier.filter]] rated_v, [amplifier.rectifier] standby",
        judge: |figures| parts(&figures.unloaded, "V", Loading::Unloaded.word()),
    },
    Condition {
        name: "heater-high",
        meaning: "the heaters' voltage, projected from mains, is over its tolerance",
        priority: Priority::Medium,
        side: Side::Over,
        deadband: 0.05,
        unit: "V",
        on_delay: seconds(600),
        off_delay: seconds(60),
        advice: "Valves last less long like this. If it comes back, another primary tap or a bucking winding cures \
                 rail and heaters together; a dropper in the rail does nothing for the heaters.",
        set_in: "[amplifier.heater] nominal_v, tolerance_pct",
        judge: |figures| parts(&figures.heaters, "V", ""),
    },
    Condition {
        name: "heater-low",
        meaning: "the heaters' voltage, projected from mains, is under its tolerance",
        priority: Priority::Low,
        side: Side::Under,
        deadband: 0.05,
        unit: "V",
        on_delay: seconds(600),
        off_delay: seconds(60),
        advice: "Low emission, and with full B+ possible cathode damage: switch off until the mains has recovered.",
        set_in: "[amplifier.heater] nominal_v, tolerance_pct",
        judge: |figures| parts(&figures.heaters_low, "V", ""),
    },
    Condition {
        name: "core-high",
        meaning: "the transformer's core is driven more than 6 % over what it was wound for",
        priority: Priority::Low,
        side: Side::Over,
        deadband: 0.005,
        unit: "times what it was wound for",
        on_delay: seconds(600),
        off_delay: seconds(60),
        advice: "The transformer runs hotter and draws more magnetising current. No dropper in the rail helps the \
                 core: another primary tap or a bucking winding does.",
        set_in: "[amplifier.transformer] wound_for_v, wound_for_hz",
        judge: |figures| parts(&figures.cores, "times what it was wound for", ""),
    },
    Condition {
        name: "apart",
        meaning: "a measured rail lies outside what its projection allows, from full to idle, by more than both \
                  uncertainties",
        priority: Priority::Medium,
        side: Side::Over,
        deadband: 2.0,
        unit: "V",
        on_delay: seconds(600),
        off_delay: seconds(60),
        advice: "Something in the supply has changed (a valve, the rectifier, a fitted dropper), or the config no \
                 longer describes it. Switch off and have it measured by somebody trained.",
        set_in: "[amplifier.transformer] and the rest of the supply, or `railtide fit`",
        judge: |figures| parts(&figures.apart, "V", ""),
    },
    Condition {
        name: "rail-ahead",
        meaning: "by the tide table a rail may pass its setpoint within the next six hours: the upper edge of its 90 % \
                  band does",
        priority: Priority::Low,
        side: Side::Over,
        deadband: 2.0,
        unit: "V",
        on_delay: seconds(0),
        off_delay: seconds(1_800),
        advice: "Switch off before then, and leave it off until the mains has come down. A tap is changed only \
                 unplugged, discharged and by someone qualified, and never for one evening, since it starves the \
                 amplifier at low mains.",
        set_in: "[[amplifier.limit]] max_v, [site] guard_band",
        judge: |figures| figures.ahead.iter().map(judge_ahead).collect(),
    },
    Condition {
        name: "logger-silent",
        meaning: "no good line has come from a logger for too long: nothing is being watched",
        priority: Priority::Medium,
        side: Side::Over,
        deadband: 0.0,
        unit: "s",
        on_delay: seconds(0),
        off_delay: seconds(0),
        advice: "Look at the logger's cable, its lamp and its supply. Until it speaks again nothing watches the \
                 rails: take them as high.",
        set_in: "[[channel]] sample_period_ms (ten periods, at least 15 s)",
        judge: logger_silent,
    },
    Condition {
        name: "store-full",
        meaning: "the disk of the record will be full within a week at the record's own growth",
        priority: Priority::Medium,
        side: Side::Under,
        deadband: 1.0,
        unit: "days",
        on_delay: seconds(600),
        off_delay: seconds(600),
        advice: "Free some space on the record's disk, give [store] path a larger one, or let old readings go with \
                 [store] keep_readings. When it is full alarms still go out, but readings are lost.",
        set_in: "[store] keep_readings",
        judge: store_full,
    },
];

/// The condition called `name`.
pub fn condition(name: &str) -> Option<&'static Condition> {
    CONDITIONS.iter().find(|c| c.name == name)
}

/// Measured and projected are both judged; the one that stands worse against its own setpoint speaks.
fn rail_high(figures: &Figures) -> Vec<Judged> {
    let mains_v = figures.mains.map(|m| m.volts);
    figures.rails.iter().filter_map(|rail| judge_rail(rail, mains_v)).collect()
}

fn judge_rail(rail: &RailFigures, mains_v: Option<f64>) -> Option<Judged> {
    let projected = rail.projected_setpoint_v.map(|setpoint| ("projected", rail.projected, setpoint));
    let measured = rail.measured_setpoint_v.map(|setpoint| ("measured", rail.measured, setpoint));
    let excess = |&(_, value, setpoint): &(&str, Option<crate::quantity::Uncertain>, f64)| {
        value.map_or(f64::NEG_INFINITY, |v| v.volts - setpoint)
    };
    let (source, value, setpoint) =
        [projected, measured].into_iter().flatten().max_by(|a, b| excess(a).total_cmp(&excess(b)))?;
    Some(Judged {
        subject: rail.subject(),
        value: value.map(|v| v.volts),
        setpoint,
        suppressed: rail.proved_on == Some(false),
        facts: Facts {
            value: value.map(|v| v.volts),
            value_u: value.map(|v| v.u),
            setpoint: Some(setpoint),
            limit: Some(rail.limit_v),
            unit: "V".to_owned(),
            mains_v,
            source: source.to_owned(),
            loading: if source == "projected" { rail.loading.word().to_owned() } else { String::new() },
            proved_on: rail.proved_on,
            note: String::new(),
        },
    })
}

/// An amplifier that is off now may be meant for tonight, so nothing suppresses this.
fn judge_ahead(ahead: &AheadFigures) -> Judged {
    Judged {
        subject: ahead.subject.clone(),
        value: ahead.rail.map(|rail| rail.volts),
        setpoint: ahead.setpoint_v,
        suppressed: false,
        facts: Facts {
            value: ahead.rail.map(|rail| rail.volts),
            value_u: ahead.rail.map(|rail| rail.u),
            setpoint: Some(ahead.setpoint_v),
            limit: Some(ahead.limit_v),
            unit: "V".to_owned(),
            mains_v: ahead.mains_v,
            source: "forecast".to_owned(),
            loading: ahead.loading.word().to_owned(),
            proved_on: None,
            note: ahead.note.clone(),
        },
    }
}

/// Judges the figures of parts as they stand.
fn parts(parts: &[PartFigures], unit: &str, loading: &str) -> Vec<Judged> {
    parts
        .iter()
        .map(|part| Judged {
            subject: part.subject.clone(),
            value: part.value,
            setpoint: part.setpoint,
            suppressed: part.suppressed,
            facts: Facts {
                value: part.value,
                value_u: part.u,
                setpoint: Some(part.setpoint),
                limit: part.limit,
                unit: unit.to_owned(),
                source: "projected".to_owned(),
                loading: loading.to_owned(),
                note: part.note.clone(),
                ..Facts::default()
            },
        })
        .collect()
}

fn logger_silent(figures: &Figures) -> Vec<Judged> {
    figures
        .loggers
        .iter()
        .map(|logger| {
            let silent_s = logger.silent_for.as_secs_f64();
            let setpoint_s = (10.0 * logger.sample_period.as_secs_f64()).max(15.0);
            Judged {
                subject: logger.name.clone(),
                value: Some(silent_s),
                setpoint: setpoint_s,
                suppressed: false,
                facts: Facts {
                    value: Some(silent_s),
                    setpoint: Some(setpoint_s),
                    unit: "s".to_owned(),
                    note: logger.disconnected.clone().unwrap_or_default(),
                    ..Facts::default()
                },
            }
        })
        .collect()
}

/// A week: time enough to find another card.
const FULL_WITHIN_DAYS: f64 = 7.0;

fn store_full(figures: &Figures) -> Vec<Judged> {
    let Some(room) = figures.room else { return Vec::new() };
    let days = room.days_left();
    vec![Judged {
        subject: String::new(),
        value: Some(days),
        setpoint: FULL_WITHIN_DAYS,
        suppressed: false,
        facts: Facts {
            value: Some(days),
            setpoint: Some(FULL_WITHIN_DAYS),
            unit: "days".to_owned(),
            note: format!("{:.0} MB are free", room.free_bytes as f64 / 1e6),
            ..Facts::default()
        },
    }]
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::Uncertain;
    use crate::supply::Basis;

    fn rail(projected: Option<f64>, measured: Option<f64>) -> Figures {
        let rail = RailFigures {
            amplifier: "hall".into(),
            node: "reservoir".into(),
            loading: Loading::Idle,
            limit_v: 480.0,
            why: String::new(),
            basis: Some(Basis::MeasuredPair),
            projected: projected.map(|v| Uncertain::new(v, 6.0)),
            projected_setpoint_v: Some(474.0),
            measured: measured.map(|v| Uncertain::new(v, 2.0)),
            measured_setpoint_v: Some(478.0),
            proved_on: measured.map(|v| v > 100.0),
        };
        Figures { mains: Some(Uncertain::new(230.0, 1.0)), rails: vec![rail], ..Figures::default() }
    }

    #[test]
    fn the_worse_of_measured_and_projected_speaks() {
        let judge = |figures: Figures| {
            let judged = rail_high(&figures).remove(0);
            (judged.facts.source, judged.value, judged.setpoint)
        };
        assert_eq!(judge(rail(Some(475.0), Some(470.0))), ("projected".into(), Some(475.0), 474.0));
        assert_eq!(judge(rail(Some(470.0), Some(479.0))), ("measured".into(), Some(479.0), 478.0));
        assert_eq!(judge(rail(None, Some(471.0))), ("measured".into(), Some(471.0), 478.0));
    }

    #[test]
    fn a_rail_that_nobody_knows_has_no_value_and_an_amplifier_proved_off_is_suppressed() {
        assert_eq!(rail_high(&rail(None, None))[0].value, None);
        assert!(rail_high(&rail(Some(490.0), Some(0.3)))[0].suppressed);
        assert!(!rail_high(&rail(Some(490.0), None))[0].suppressed);
    }

    #[test]
    fn the_disk_is_told_days_before_it_is_full_by_the_records_own_growth() {
        let days = |free_bytes, bytes_per_day| {
            let room = super::super::RoomFigures { free_bytes, bytes_per_day };
            store_full(&Figures { room: Some(room), ..Figures::default() })[0].value.unwrap()
        };
        // Two channels at a reading a second: about 0.35 MB a day.
        assert!((days(320_000_000, Some(350_000.0)) - 857.0).abs() < 1.0);
        assert!(days(21_000_000, Some(350_000.0)) < FULL_WITHIN_DAYS);
        assert_eq!(days(5_000_000, Some(350_000.0)), 0.0);
        assert!(days(1_000_000_000, None) > FULL_WITHIN_DAYS, "a young record on a roomy disk alarms nobody");
        assert!(days(100_000_000, None) < FULL_WITHIN_DAYS);
        assert!(store_full(&Figures::default()).is_empty(), "nobody has looked yet");
    }

    #[test]
    fn every_row_of_the_table_is_complete_and_named_once() {
        for (i, c) in CONDITIONS.iter().enumerate() {
            assert!(!c.advice.is_empty() && !c.meaning.is_empty() && !c.set_in.is_empty(), "{}", c.name);
            assert!(CONDITIONS[i + 1..].iter().all(|other| other.name != c.name), "{} twice", c.name);
            assert!(c.deadband >= 0.0, "{}", c.name);
        }
    }
}
