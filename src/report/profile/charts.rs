//! The profile's drawings.

use chrono_tz::Tz;

use super::{Known, Profile, Rail, RailProfile};
use crate::mains::{INTERVAL, TideStep};
use crate::quantity::Utc;
use crate::report::chart::{BandPoint, RailScale, TwoScale, day_band_svg};

/// What the drawing of the tide needs beside the figures.
#[derive(Clone, Debug)]
pub(super) struct Drawn {
    zone: Tz,
    from: Utc,
    to: Utc,
    recorded: Vec<BandPoint>,
    expected: Vec<BandPoint>,
    /// The rail on the right: the first with a limit.
    rail: Option<Rail>,
}

impl Drawn {
    pub(super) fn new(known: &Known<'_>, zone: Tz, rails: Vec<Rail>) -> Self {
        const DAY_MS: i64 = 86_400_000;
        let half = INTERVAL.as_millis() as i64 / 2;
        let expected: Vec<BandPoint> = known
            .tide
            .iter()
            .flat_map(|table| &table.steps)
            .map(|step: &TideStep| BandPoint {
                at: Utc(step.at.0 + half),
                low_v: step.low_v,
                mid_v: step.median_v,
                high_v: step.high_v,
            })
            .collect();
        Drawn {
            zone,
            from: Utc(known.as_of.0 - DAY_MS),
            to: expected.last().map_or(known.as_of, |last| Utc(last.at.0 + half)),
            recorded: known.before.iter().map(BandPoint::from).collect(),
            expected,
            rail: rails.into_iter().find(|rail| rail.limit.is_some()),
        }
    }
}

impl Profile {
    /// The last 24 hours (10-minute values with the lowest and highest reading) and the tide table's band, as SVG; on
    /// the right the first rail with a limit.
    pub fn tide_svg(&self) -> String {
        let drawn = &self.drawn;
        let name = drawn.rail.as_ref().map(|r| format!("{}.{}, {}", r.amplifier, r.node, r.loading.word()));
        let rail = drawn.rail.as_ref().zip(name.as_deref()).and_then(|(rail, name)| {
            let (limit_v, setpoint_v) = rail.limit?;
            Some(RailScale { name, curve: &rail.curve, limit_v, setpoint_v: Some(setpoint_v) })
        });
        TwoScale {
            id: "tide",
            title: "Mains: the last 24 hours, and what is expected (dashed)",
            zone: drawn.zone,
            from: drawn.from,
            to: drawn.to,
            recorded: &drawn.recorded,
            expected: &drawn.expected,
            rail,
            mains_v: None,
            height: 260.0,
        }
        .svg()
    }

    /// Mains by time of day, as SVG.
    pub fn day_svg(&self) -> String {
        day_band_svg("day", "Mains by time of day", &self.by_slot.working, &self.by_slot.weekend)
    }
}

impl RailProfile {
    /// The rail by time of day, as SVG; `id` unique on its page.
    pub(super) fn day_svg(&self, id: &str) -> String {
        let title = format!("{}.{}, {}", self.amplifier, self.node, self.loading.word());
        day_band_svg(id, &title, &self.by_slot.working, &self.by_slot.weekend)
    }
}
