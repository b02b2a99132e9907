//! A week of evidence: what the mains did, whether the supply rules were kept, and how long each rail would have stood
//! over its limit. One result, said as text, JSON, HTML and as a workbook.

mod html;
mod text;
mod workbook;

use std::time::Duration;

use chrono::NaiveDate;
use chrono_tz::Tz;
use serde::Serialize;

use super::chart::BandPoint;
use super::findings::finding_sentence;
use super::time::LocalTime;
use crate::config::{Channel, Site};
use crate::mains::{
    Distribution, Event, EventLimits, INTERVAL, Interval, Sample, Spell, SupplyRule, civil_days, events,
    excursions,
};
use crate::quantity::Utc;
use crate::supply::{Basis, Finding, RailCurve};
use crate::watch::RailWatch;

pub use html::week_html;
pub use text::week_text;
pub use workbook::week_workbook;

/// An excursion ends when the rail is this much under its setpoint again, V: the deadband of rail-high.
const DEADBAND_V: f64 = 4.0;

/// What was recorded in the stretch of time.
#[derive(Clone, Debug)]
pub struct MainsRecord<'a> {
    /// The mains channel, where the config names one.
    pub channel: Option<&'a Channel>,
    /// How long one reading stands for.
    pub sample_period: Duration,
    /// Its sound readings, in order of time, V.
    pub samples: &'a [Sample],
    /// Its 10-minute intervals.
    pub intervals: &'a [Interval],
}

/// The whole result. As JSON it is what `railtide week --format json` prints.
#[derive(Clone, Debug, Serialize)]
pub struct Week<'a> {
    /// The site's name.
    pub site: &'a str,
    /// From when.
    pub from: LocalTime,
    /// Until when.
    pub to: LocalTime,
    /// The site's zone.
    pub time_zone: Tz,
    /// What the supplier says it delivers, V.
    pub declared_v: f64,
    /// How much was recorded.
    pub intervals: Counts,
    /// Percentiles of the valid intervals; absent where there is none.
    pub percentiles: Option<Percentiles>,
    /// The lowest reading, V.
    pub min_v: Option<f64>,
    /// The highest reading, V.
    pub max_v: Option<f64>,
    /// Each clause of each rule.
    pub rules: Vec<RuleLine>,
    /// Each local day.
    pub days: Vec<Day>,
    /// Each limit on a rail that can be projected.
    pub amplifiers: Vec<RailLine>,
    /// Dips, swells and interruptions.
    pub events: Vec<EventLine>,
    /// What is wrong with a supply as it stands, whatever the mains does.
    pub findings: Vec<FindingLine>,
    /// What measured it.
    pub instrument: String,
    #[serde(skip)]
    points: Vec<BandPoint>,
    #[serde(skip)]
    all_intervals: &'a [Interval],
    #[serde(skip)]
    curves: Vec<Option<RailCurve>>,
}

/// How many 10-minute intervals there are.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
pub struct Counts {
    /// That the stretch holds.
    pub expected: usize,
    /// That were recorded and aren't flagged.
    pub valid: usize,
    /// That were recorded but are flagged: doubtful or partly missing.
    pub flagged: usize,
}

/// Percentiles of the 10-minute r.m.s. values by linear interpolation (type 7), V.
#[derive(Clone, Copy, Debug, PartialEq, Serialize)]
pub struct Percentiles {
    /// 1 %.
    pub p1_v: f64,
    /// 5 %.
    pub p5_v: f64,
    /// The median.
    pub p50_v: f64,
    /// 95 %.
    pub p95_v: f64,
    /// 99 %.
    pub p99_v: f64,
}

/// One clause of one rule.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct RuleLine {
    /// The rule's name.
    pub rule: String,
    /// What is asked.
    pub statistic: &'static str,
    /// The lower limit, V.
    pub low_v: Option<f64>,
    /// The upper limit, V.
    pub high_v: Option<f64>,
    /// The share within, %.
    pub share_pct: Option<f64>,
    /// The share that must be within, %.
    pub required_pct: Option<f64>,
    /// `None`: not enough data.
    pub held: Option<bool>,
    #[serde(skip)]
    words: &'static str,
    #[serde(skip)]
    source: String,
    #[serde(skip)]
    outside: usize,
    #[serde(skip)]
    judged: usize,
}

/// One local day.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Day {
    /// Its date.
    pub date: NaiveDate,
    /// Its intervals.
    pub intervals: Counts,
    /// The lowest interval's lowest reading, V.
    pub min_v: Option<f64>,
    /// The r.m.s. over the day, V.
    pub rms_v: Option<f64>,
    /// The highest interval's highest reading, V.
    pub max_v: Option<f64>,
    #[serde(skip)]
    from: Utc,
    #[serde(skip)]
    to: Utc,
}

/// One limit on one rail over the stretch: where the rail would have stood, had the amplifier been on throughout.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct RailLine {
    /// The amplifier's name.
    pub name: String,
    /// The node's name.
    pub node: String,
    /// The loading that the limit is judged at.
    pub loading: &'static str,
    /// The limit, V.
    pub limit_v: f64,
    /// The alarm's setpoint, V.
    pub setpoint_v: f64,
    /// Hours over the limit.
    pub over_limit_h: f64,
    /// Hours over the setpoint.
    pub over_setpoint_h: f64,
    /// The highest that the rail would have stood, V.
    pub highest_rail_v: Option<f64>,
    /// Its expanded uncertainty (k = 2), V.
    pub highest_rail_u_v: Option<f64>,
    /// When that was.
    pub at: Option<LocalTime>,
    /// How much lower the rail must be for all of the stretch to stay under its setpoint, V; 0 where it did.
    pub reduction_v: Option<f64>,
    /// What the projection rests on.
    pub basis: Basis,
    /// Stretches over the setpoint.
    pub excursions: Vec<ExcursionLine>,
    #[serde(skip)]
    why: String,
}

/// One stretch of a rail over its setpoint.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ExcursionLine {
    /// From when.
    pub from: LocalTime,
    /// For how long, s.
    pub length_s: f64,
    /// The highest rail, V.
    pub highest_v: f64,
}

/// Something wrong with a supply as it stands.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct FindingLine {
    /// The amplifier's name.
    pub amplifier: String,
    /// One sentence.
    pub text: String,
}

/// A dip, swell or interruption, after the method of IEC 61000-4-30 from what was recorded.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct EventLine {
    /// Which of the three.
    pub kind: &'static str,
    /// From when.
    pub from: LocalTime,
    /// For how long, s.
    pub length_s: f64,
    /// The lowest or highest reading of it, V.
    pub extreme_v: f64,
}

impl<'a> Week<'a> {
    /// What `record` says of the time from `from` until before `to`. `findings` holds those of each amplifier, in the
    /// config's order.
    pub fn new(
        site: &'a Site,
        from: Utc,
        to: Utc,
        record: &MainsRecord<'a>,
        rails: &[RailWatch],
        findings: &[Vec<Finding>],
    ) -> Self {
        let local = |at| LocalTime::of(at, site.time_zone);
        let valid = || record.intervals.iter().filter(|i| !i.flagged);
        let distribution = Distribution::new(valid().map(|i| i.rms_v));
        let percentile = |pct| distribution.percentile(pct);
        let percentiles = (|| {
            Some(Percentiles {
                p1_v: percentile(1.0)?,
                p5_v: percentile(5.0)?,
                p50_v: percentile(50.0)?,
                p95_v: percentile(95.0)?,
                p99_v: percentile(99.0)?,
            })
        })();
        let volts = || {
            record
                .samples
                .iter()
                .map(|(_, v)| *v)
                .chain(record.intervals.iter().flat_map(|i| [i.min_v, i.max_v]))
        };
        let found = events(
            record.samples.iter().copied(),
            record.sample_period,
            &EventLimits::usual(site.declared_v),
        );
        let judged = rails.iter().filter_map(|rail| rail_line(rail, record, site.time_zone));
        let (amplifiers, curves) = judged.unzip();
        Week {
            site: &site.name,
            from: local(from),
            to: local(to),
            time_zone: site.time_zone,
            declared_v: site.declared_v,
            intervals: counts(record.intervals, from, to),
            percentiles,
            min_v: volts().min_by(f64::total_cmp),
            max_v: volts().max_by(f64::total_cmp),
            rules: site
                .supply_rules
                .iter()
                .flat_map(|rule| rule_lines(rule, site.declared_v, from, to, record))
                .collect(),
            days: civil_days(from, to, site.time_zone)
                .into_iter()
                .map(|day| day_line(day.date, day.start.max(from), day.end.min(to), record.intervals))
                .collect(),
            amplifiers,
            events: found.iter().map(|event| event_line(event, site.time_zone)).collect(),
            findings: site
                .amplifiers
                .iter()
                .zip(findings)
                .flat_map(|(amplifier, found)| found.iter().map(move |finding| (amplifier, finding)))
                .filter(|(_, finding)| finding.is_wrong())
                .map(|(amplifier, finding)| FindingLine {
                    amplifier: amplifier.name.clone(),
                    text: finding_sentence(finding),
                })
                .collect(),
            instrument: instrument(record),
            points: record.intervals.iter().map(BandPoint::from).collect(),
            all_intervals: record.intervals,
            curves,
        }
    }

    /// Whether anything was recorded.
    pub fn is_empty(&self) -> bool {
        self.all_intervals.is_empty()
    }
}

fn counts(intervals: &[Interval], from: Utc, to: Utc) -> Counts {
    let step = INTERVAL.as_millis() as i64;
    let first = -(-from.0).div_euclid(step);
    let last = -(-to.0).div_euclid(step);
    let within = || intervals.iter().filter(|i| (from..to).contains(&i.start));
    Counts {
        expected: (last - first).max(0) as usize,
        valid: within().filter(|i| !i.flagged).count(),
        flagged: within().filter(|i| i.flagged).count(),
    }
}

fn rule_lines(
    rule: &SupplyRule,
    declared_v: f64,
    from: Utc,
    to: Utc,
    record: &MainsRecord<'_>,
) -> Vec<RuleLine> {
    rule.judge(declared_v, from, to, record.intervals)
        .iter()
        .map(|clause| RuleLine {
            rule: rule.name.clone(),
            statistic: clause.statistic.word(),
            low_v: clause.low_v,
            high_v: clause.high_v,
            share_pct: clause.share_pct(),
            required_pct: clause.required_pct(),
            held: clause.verdict.held(),
            words: clause.verdict.words(),
            source: rule.source.clone(),
            outside: clause.outside,
            judged: clause.judged,
        })
        .collect()
}

fn day_line(date: NaiveDate, from: Utc, to: Utc, intervals: &[Interval]) -> Day {
    let of_day = || intervals.iter().filter(|i| (from..to).contains(&i.start));
    // Weighted by how much each stands for.
    let (squares, weight) =
        of_day().fold((0.0, 0.0), |(s, w), i| (s + i.rms_v * i.rms_v * i.covered, w + i.covered));
    Day {
        date,
        intervals: counts(intervals, from, to),
        min_v: of_day().map(|i| i.min_v).min_by(f64::total_cmp),
        rms_v: (weight > 0.0).then(|| (squares / weight).sqrt()),
        max_v: of_day().map(|i| i.max_v).max_by(f64::total_cmp),
        from,
        to,
    }
}

/// A rail over the stretch, read through its curve; `None` where its loading is unknown.
fn rail_line(rail: &RailWatch, record: &MainsRecord<'_>, zone: Tz) -> Option<(RailLine, Option<RailCurve>)> {
    let projection = rail.projection.as_ref()?;
    let curve = &projection.curve;
    let highest = record.samples.iter().copied().max_by(|a, b| a.1.total_cmp(&b.1));
    let projected =
        highest.map(|(_, mains_v)| {
            curve.project(record.channel.map_or(crate::quantity::Uncertain::new(mains_v, 0.0), |c| {
                crate::watch::uncertain(c, mains_v)
            }))
        });
    let hours_over = |rail_v: f64| {
        let over = record.samples.iter().filter(|(_, mains_v)| curve.rail_v(*mains_v) > rail_v).count();
        over as f64 * record.sample_period.as_secs_f64() / 3600.0
    };
    let rails = record.samples.iter().map(|(at, mains_v)| (*at, curve.rail_v(*mains_v)));
    let spells = excursions(rails, record.sample_period, projection.setpoint_v, DEADBAND_V);
    let line = RailLine {
        name: rail.amplifier.clone(),
        node: rail.limit.node.clone(),
        loading: rail.limit.loading.word(),
        limit_v: rail.moment_limit_v,
        setpoint_v: projection.setpoint_v,
        over_limit_h: hours_over(rail.moment_limit_v),
        over_setpoint_h: hours_over(projection.setpoint_v),
        highest_rail_v: projected.map(|rail| rail.volts),
        highest_rail_u_v: projected.map(|rail| rail.u),
        at: highest.map(|(at, _)| LocalTime::of(at, zone)),
        reduction_v: projected.map(|rail| (rail.volts - projection.setpoint_v).max(0.0)),
        basis: projection.basis,
        excursions: spells.iter().map(|spell| excursion_line(spell, zone)).collect(),
        why: rail.limit.why.clone(),
    };
    Some((line, Some(curve.clone())))
}

fn excursion_line(spell: &Spell, zone: Tz) -> ExcursionLine {
    ExcursionLine {
        from: LocalTime::of(spell.start, zone),
        length_s: spell.length().as_secs_f64(),
        highest_v: spell.extreme_v,
    }
}

fn event_line(event: &Event, zone: Tz) -> EventLine {
    EventLine {
        kind: event.kind.word(),
        from: LocalTime::of(event.spell.start, zone),
        length_s: event.spell.length().as_secs_f64(),
        extreme_v: event.spell.extreme_v,
    }
}

fn instrument(record: &MainsRecord<'_>) -> String {
    let period = match record.sample_period.as_millis() {
        ms if ms % 1000 == 0 => super::time::span(record.sample_period),
        ms => format!("{ms} ms"),
    };
    match record.channel {
        Some(channel) => format!(
            "channel \"{}\", one r.m.s. reading every {period}, accuracy ±({} % + {} V) by the config",
            channel.name, channel.accuracy_pct, channel.accuracy_v
        ),
        None => format!("an imported recording, one r.m.s. reading every {period}, its accuracy not stated"),
    }
}

/// The same words for the basis everywhere.
fn basis_words(basis: Basis) -> &'static str {
    match basis {
        Basis::MeasuredPair => "in proportion from one measured pair",
        Basis::Model => "solved from the supply's circuit",
        Basis::Fit => "solved from the supply's circuit, fitted to recorded pairs",
    }
}

/// How the figures were made, and what they aren't.
const METHOD: &str = "10-minute r.m.s. values after the method of IEC 61000-4-30, from readings that are no half-cycle \
values: no class of that standard is claimed. Percentiles by linear interpolation (type 7) over valid intervals. Rails are \
projected: where each would have stood, had its amplifier been on all the time.";

const CAUTIONS: &str = "railtide warns; it is no protective device. Mains and the rails of a valve amplifier kill, and \
capacitors stay charged after the plug is pulled. Work inside an amplifier is for people trained and authorised for it; \
local codes and licensed practice come first.";
