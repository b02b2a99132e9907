//! The household's day: mains and each rail by time of day, the highest quarter hours, time above the limits, and the
//! tide table.

mod charts;
mod html;
mod text;

use std::time::Duration;

use chrono_tz::Tz;
use serde::Serialize;

use super::time::LocalTime;
use crate::config::Site;
use crate::mains::{
    self, DayProfile, INTERVAL, Interval, NoForecast, Slot, TideTable, above_by_day, day_profile, turns,
};
use crate::quantity::{Uncertain, Utc};
use crate::supply::{Loading, Projector, RailCurve};
use crate::watch::rail_watches;

pub use html::profile_html;
pub use text::{profile_csv, profile_text};

/// How many of the highest quarter hours are named.
const HIGHEST: usize = 5;

/// An hour, for people: 144 lines are too many.
const HOUR: Duration = Duration::from_secs(3600);

/// The household's day and the hours to come.
#[derive(Clone, Debug, Serialize)]
pub struct Profile {
    /// From when on the record was looked at.
    pub from: LocalTime,
    /// Until before when.
    pub to: LocalTime,
    /// The site's zone; times of day are by its clocks.
    pub time_zone: String,
    /// 10-minute intervals that were found.
    pub intervals: usize,
    /// Mains by time of day, in slots of ten minutes.
    pub mains: DayLines,
    /// The highest quarter hours of the last seven days looked at.
    pub highest: Vec<Quarter>,
    /// Each rail that can be projected.
    pub rails: Vec<RailProfile>,
    /// Made from what was known then.
    pub as_of: LocalTime,
    /// Why there is no tide table, where there is none.
    pub no_tide: Option<String>,
    /// Each interval to come.
    pub tide: Vec<TideLine>,
    /// The expected highs and lows.
    pub turns: Vec<TurnLine>,
    #[serde(skip)]
    by_hour: DayProfile,
    #[serde(skip)]
    by_slot: DayProfile,
    #[serde(skip)]
    drawn: charts::Drawn,
}

/// A value by time of day, working days and weekends apart.
#[derive(Clone, Debug, Default, Serialize)]
pub struct DayLines {
    /// Monday to Friday.
    pub working: Vec<SlotLine>,
    /// Saturday and Sunday.
    pub weekend: Vec<SlotLine>,
}

/// One time of day.
#[derive(Clone, Debug, Serialize)]
pub struct SlotLine {
    /// Its start, `18:10`.
    pub at: String,
    /// Mean, V.
    pub mean_v: f64,
    /// 5th percentile (linear, type 7), V.
    pub low_v: f64,
    /// 95th, V.
    pub high_v: f64,
    /// How many intervals.
    pub count: usize,
}

/// A quarter of an hour.
#[derive(Clone, Debug, Serialize)]
pub struct Quarter {
    /// Its start.
    pub at: LocalTime,
    /// Its r.m.s. value, V.
    pub rms_v: f64,
}

/// One rail as mains would have had it stand: projected, whether the amplifier was on or not.
#[derive(Clone, Debug, Serialize)]
pub struct RailProfile {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node's name.
    pub node: String,
    /// The loading.
    pub loading: Loading,
    /// Expanded uncertainty (k = 2) of the projection itself at the mean mains, V.
    pub u_v: Option<f64>,
    /// The limit, V; absent where the rail has none.
    pub limit_v: Option<f64>,
    /// The limit less the guard band, V.
    pub setpoint_v: Option<f64>,
    /// By time of day, in slots of ten minutes.
    #[serde(flatten)]
    pub day: DayLines,
    /// Each day's time above limit and setpoint; empty where the rail has no limit.
    pub days: Vec<RailDay>,
    #[serde(skip)]
    by_slot: DayProfile,
}

/// One day of a rail with a limit.
#[derive(Clone, Debug, Serialize)]
pub struct RailDay {
    /// The date.
    pub date: chrono::NaiveDate,
    /// How much of it is recorded, h.
    pub recorded_h: f64,
    /// How long the rail would have stood above its limit, by 10-minute means, h.
    pub over_limit_h: f64,
    /// And above its setpoint, h.
    pub over_setpoint_h: f64,
}

/// One interval to come.
#[derive(Clone, Debug, Serialize)]
pub struct TideLine {
    /// Its start.
    pub at: LocalTime,
    /// 5 % quantile, V.
    pub low_v: f64,
    /// 50 %, V.
    pub median_v: f64,
    /// 95 %, V.
    pub high_v: f64,
}

/// An expected high or low and the rails it gives.
#[derive(Clone, Debug, Serialize)]
pub struct TurnLine {
    /// The start of its interval.
    pub at: LocalTime,
    /// `high` or `low`.
    pub kind: &'static str,
    /// The median, V.
    pub mains_v: f64,
    /// 5 % quantile, V.
    pub low_v: f64,
    /// 95 %, V.
    pub high_v: f64,
    /// The rail that each gives.
    pub rails: Vec<TurnRail>,
}

/// A rail at a turn.
#[derive(Clone, Debug, Serialize)]
pub struct TurnRail {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node's name.
    pub node: String,
    /// The loading.
    pub loading: Loading,
    /// At the median, V.
    pub rail_v: f64,
    /// At the 5 % quantile of mains, V.
    pub low_v: f64,
    /// At its 95 %, V.
    pub high_v: f64,
    /// Expanded uncertainty (k = 2) of the projection itself, V: on top of the band.
    pub u_v: f64,
}

/// What a profile is made of.
#[derive(Clone, Copy, Debug)]
pub struct Known<'a> {
    /// From when on.
    pub from: Utc,
    /// Until before when.
    pub to: Utc,
    /// The 10-minute intervals of the 24 hours before `as_of`, in order, to be drawn before what is expected.
    pub before: &'a [Interval],
    /// The 10-minute intervals of mains in between, in order.
    pub intervals: &'a [Interval],
    /// The quarter hours of the last week in between.
    pub quarters: &'a [Interval],
    /// Of which moment the tide table is.
    pub as_of: Utc,
    /// The tide table, or why there is none.
    pub tide: &'a Result<TideTable, NoForecast>,
}

#[derive(Clone, Debug)]
struct Rail {
    amplifier: String,
    node: String,
    loading: Loading,
    curve: RailCurve,
    /// Limit and setpoint, V.
    limit: Option<(f64, f64)>,
}

impl Profile {
    /// Of one site; `projectors` holds one for each amplifier.
    pub fn new(site: &Site, projectors: &[Option<Projector>], known: &Known<'_>) -> Self {
        let zone = site.time_zone;
        let rails = rails(site, projectors);
        let samples = || known.intervals.iter().map(|i| (i.start, i.rms_v));
        let (tide, no_tide) = match known.tide {
            Ok(table) => (table.steps.as_slice(), None),
            Err(why) => (&[][..], Some(why.to_string())),
        };
        let turns = turns(tide).into_iter().map(|turn| {
            let step = turn.step;
            TurnLine {
                at: LocalTime::of(step.at, zone),
                kind: turn.kind.word(),
                mains_v: step.median_v,
                low_v: step.low_v,
                high_v: step.high_v,
                rails: rails.iter().map(|rail| rail.at_turn(&step)).collect(),
            }
        });
        let line = |step: &mains::TideStep| TideLine {
            at: LocalTime::of(step.at, zone),
            low_v: step.low_v,
            median_v: step.median_v,
            high_v: step.high_v,
        };
        let quarter = |i: &Interval| Quarter { at: LocalTime::of(i.start, zone), rms_v: i.rms_v };
        let rail_profiles = rails.iter().map(|rail| rail.profile(known, zone)).collect();
        let turns = turns.collect();
        let mains_day = day_profile(samples(), zone, INTERVAL);
        Profile {
            from: LocalTime::of(known.from, zone),
            to: LocalTime::of(known.to, zone),
            time_zone: zone.name().to_owned(),
            intervals: known.intervals.len(),
            mains: mains_day.clone().into(),
            highest: mains::highest(known.quarters, HIGHEST).iter().map(quarter).collect(),
            as_of: LocalTime::of(known.as_of, zone),
            no_tide,
            tide: tide.iter().map(line).collect(),
            turns,
            rails: rail_profiles,
            by_hour: day_profile(samples(), zone, HOUR),
            by_slot: mains_day,
            drawn: charts::Drawn::new(known, zone, rails),
        }
    }
}

/// Every limit that can be projected, then every other node that can be, at idle.
fn rails(site: &Site, projectors: &[Option<Projector>]) -> Vec<Rail> {
    let mut rails: Vec<Rail> = rail_watches(site, projectors)
        .into_iter()
        .filter_map(|watch| {
            let projection = watch.projection?;
            Some(Rail {
                amplifier: watch.amplifier,
                node: watch.limit.node,
                loading: watch.limit.loading,
                curve: projection.curve,
                limit: Some((watch.moment_limit_v, projection.setpoint_v)),
            })
        })
        .collect();
    for (amplifier, projector) in site.amplifiers.iter().zip(projectors) {
        let curves = projector.iter().flat_map(|p| p.curves()).filter(|c| c.loading == Loading::Idle);
        for curve in curves {
            if !rails.iter().any(|r| r.amplifier == amplifier.name && r.node == curve.node) {
                rails.push(Rail {
                    amplifier: amplifier.name.clone(),
                    node: curve.node.clone(),
                    loading: curve.loading,
                    curve: curve.curve.clone(),
                    limit: None,
                });
            }
        }
    }
    rails
}

impl Rail {
    fn at_turn(&self, step: &mains::TideStep) -> TurnRail {
        let middle = self.curve.project(Uncertain::new(step.median_v, 0.0));
        TurnRail {
            amplifier: self.amplifier.clone(),
            node: self.node.clone(),
            loading: self.loading,
            rail_v: middle.volts,
            low_v: self.curve.rail_v(step.low_v),
            high_v: self.curve.rail_v(step.high_v),
            u_v: middle.u,
        }
    }

    fn profile(&self, known: &Known<'_>, zone: Tz) -> RailProfile {
        let samples = || known.intervals.iter().map(|i| (i.start, self.curve.rail_v(i.rms_v)));
        let mean_v = known.intervals.iter().map(|i| i.rms_v).sum::<f64>() / known.intervals.len() as f64;
        let days = self.limit.map_or_else(Vec::new, |(limit_v, setpoint_v)| {
            let above = |level_v| above_by_day(samples(), INTERVAL, level_v, known.from, known.to, zone);
            let hours = |d: Duration| d.as_secs_f64() / 3600.0;
            let pairs = above(limit_v).into_iter().zip(above(setpoint_v));
            pairs
                .map(|(limit, setpoint)| RailDay {
                    date: limit.day.date,
                    recorded_h: hours(limit.recorded),
                    over_limit_h: hours(limit.above),
                    over_setpoint_h: hours(setpoint.above),
                })
                .collect()
        });
        let by_slot = day_profile(samples(), zone, INTERVAL);
        RailProfile {
            amplifier: self.amplifier.clone(),
            node: self.node.clone(),
            loading: self.loading,
            u_v: mean_v.is_finite().then(|| self.curve.project(Uncertain::new(mean_v, 0.0)).u),
            limit_v: self.limit.map(|l| l.0),
            setpoint_v: self.limit.map(|l| l.1),
            day: by_slot.clone().into(),
            days,
            by_slot,
        }
    }
}

impl From<DayProfile> for DayLines {
    fn from(day: DayProfile) -> Self {
        let lines = |slots: Vec<Slot>| slots.into_iter().map(SlotLine::from).collect();
        DayLines { working: lines(day.working), weekend: lines(day.weekend) }
    }
}

impl From<Slot> for SlotLine {
    fn from(slot: Slot) -> Self {
        SlotLine {
            at: clock(slot.minute),
            mean_v: slot.mean_v,
            low_v: slot.low_v,
            high_v: slot.high_v,
            count: slot.count,
        }
    }
}

/// Minutes after midnight as a clock shows them.
fn clock(minute: u32) -> String {
    format!("{:02}:{:02}", minute / 60, minute % 60)
}

#[cfg(test)]
mod tests;
