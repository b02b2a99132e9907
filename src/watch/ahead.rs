//! What the tide table says about rails with limits: how high each may come within the next hours, and when it passes
//! its setpoint.

use std::time::Duration;

use chrono::DateTime;
use chrono_tz::Tz;

use crate::alarm::AheadFigures;
use crate::mains::TideTable;
use crate::quantity::{Mono, Uncertain, Utc};

use super::rail::RailWatch;

/// How far ahead is looked. A household's evening is that long, and the table's band that narrow.
pub const LOOK_AHEAD: Duration = Duration::from_secs(6 * 3600);

/// A table that is older than this says nothing: a new one is made every ten minutes.
const STALE_AFTER: Duration = Duration::from_secs(30 * 60);

/// What the last tide table said.
#[derive(Debug, Default)]
pub(super) struct Ahead {
    rails: Vec<AheadFigures>,
    made: Option<Mono>,
}

impl Ahead {
    /// What `table` says of every rail that can be projected; with no table, of none.
    pub(super) fn new(rails: &[RailWatch], table: Option<&TideTable>, zone: Tz, now: Mono) -> Self {
        let rails = rails.iter().filter_map(|rail| of_rail(rail, table, zone)).collect();
        Ahead { rails, made: table.map(|_| now) }
    }

    /// The figures at `now`: without a value where the table is too old or there is none.
    pub(super) fn figures(&self, now: Mono) -> impl Iterator<Item = AheadFigures> + '_ {
        let fresh = self.made.is_some_and(|made| now.since(made) <= STALE_AFTER);
        self.rails.iter().map(move |rail| match fresh {
            true => rail.clone(),
            false => AheadFigures { rail: None, mains_v: None, note: String::new(), ..rail.clone() },
        })
    }
}

fn of_rail(rail: &RailWatch, table: Option<&TideTable>, zone: Tz) -> Option<AheadFigures> {
    let projection = rail.projection.as_ref()?;
    let nothing = AheadFigures {
        subject: rail.figures(None, |_| None).subject(),
        loading: rail.limit.loading,
        rail: None,
        mains_v: None,
        setpoint_v: projection.setpoint_v,
        limit_v: rail.limit.max_v,
        note: String::new(),
    };
    let Some(table) = table else { return Some(nothing) };
    let until = table.issued_at.0 + LOOK_AHEAD.as_millis() as i64;
    let coming = || table.steps.iter().filter(move |step| step.at.0 < until);
    let highest = coming().max_by(|a, b| a.high_v.total_cmp(&b.high_v))?;
    let first = coming().find(|step| projection.curve.rail_v(step.high_v) > projection.setpoint_v);
    let at = |at: Utc| {
        DateTime::from_timestamp_millis(at.0).unwrap_or_default().with_timezone(&zone).format("%H:%M")
    };
    let note = first.map_or(String::new(), |first| {
        format!("expected from about {}; the band is highest at about {}", at(first.at), at(highest.at))
    });
    Some(AheadFigures {
        rail: Some(projection.curve.project(Uncertain::new(highest.high_v, 0.0))),
        mains_v: Some(highest.high_v),
        note,
        ..nothing
    })
}

#[cfg(test)]
mod tests {
    use super::super::rail_watches;
    use super::super::tests::{hall_site, projectors};
    use super::*;
    use crate::mains::TideStep;

    /// 24 h from 2026-12-01T16:00Z; the band's upper edge rises by 1 V an hour from `high_v`.
    fn rising(high_v: f64) -> TideTable {
        let issued_at = Utc(1_796_140_800_000);
        let steps = (0..144)
            .map(|k| {
                let high_v = high_v + f64::from(k) / 6.0;
                TideStep {
                    at: Utc(issued_at.0 + 600_000 * i64::from(k)),
                    low_v: high_v - 6.0,
                    median_v: high_v - 3.0,
                    high_v,
                }
            })
            .collect();
        TideTable { issued_at, rows: 28, steps }
    }

    fn figures(table: Option<&TideTable>, age: Duration) -> AheadFigures {
        let site = hall_site();
        let rails = rail_watches(&site, &projectors(&site));
        let made = Mono(0) + Duration::from_secs(1_000);
        Ahead::new(&rails, table, site.time_zone, made).figures(made + age).next().unwrap()
    }

    #[test]
    fn the_first_interval_whose_upper_band_passes_the_setpoint_is_named_by_the_sites_clock() {
        let ahead = figures(Some(&rising(226.0)), Duration::ZERO);
        // 452 V at 220 V in proportion; six hours on the band's edge stands 35/6 V higher.
        let highest_v = 226.0 + 35.0 / 6.0;
        assert!((ahead.rail.unwrap().volts - 452.0 / 220.0 * highest_v).abs() < 1e-9, "{ahead:?}");
        let passes =
            (0..36).find(|k| 452.0 / 220.0 * (226.0 + f64::from(*k) / 6.0) > ahead.setpoint_v).unwrap();
        assert!(passes > 0, "it starts below its setpoint");
        // Lisbon is at UTC in winter.
        let expected = format!("expected from about {}:{}0;", 16 + passes / 6, passes % 6);
        assert!(ahead.note.starts_with(&expected), "{} {expected}", ahead.note);
    }

    #[test]
    fn beyond_the_next_hours_nothing_is_said_and_an_old_table_says_nothing() {
        let later = figures(Some(&rising(219.0)), Duration::ZERO);
        assert!(later.rail.unwrap().volts < later.setpoint_v && later.note.is_empty(), "{later:?}");
        let old = figures(Some(&rising(240.0)), STALE_AFTER + Duration::from_secs(1));
        assert_eq!((old.rail, old.note.as_str()), (None, ""));
        assert_eq!(figures(None, Duration::ZERO).rail, None);
    }
}
