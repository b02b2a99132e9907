//! One limit on one rail: the projection it's judged by, its setpoints, and the mains at which they are reached.

use crate::alarm::RailFigures;
use crate::config::{Amplifier, Channel, Limit, Rating, Site};
use crate::quantity::{Uncertain, rectangular_u};
use crate::supply::{Basis, Projector, RailCurve};

use super::channel::uncertain;
use super::parts::PartWatch;

/// A design-centre figure already allows for mains 10 % over nominal (from memory; handbook of rating systems), so
/// at any one moment the rail may stand that much over it.
const DESIGN_CENTRE_ALLOWS: f64 = 1.10;

/// A limit and all that can be known about it beforehand.
#[derive(Clone, Debug)]
pub struct RailWatch {
    /// The amplifier's name.
    pub amplifier: String,
    /// The limit, as the config states it.
    pub limit: Limit,
    /// The most that the rail may be at any one moment, V: the limit, less strict where its rating system allows.
    pub moment_limit_v: f64,
    /// The projection; `None` where nothing is known of this node and loading.
    pub projection: Option<Projection>,
    /// The index of the channel that measures this rail, and the setpoint for what it shows, V.
    pub measured: Option<(usize, f64)>,
    /// Indices of all rail channels of the amplifier: any of them proves it on or off.
    pub proof: Vec<usize>,
}

/// A projected rail's curve and what follows from it.
#[derive(Clone, Debug)]
pub struct Projection {
    /// Where the curve comes from.
    pub basis: Basis,
    /// Mains → rail.
    pub curve: RailCurve,
    /// `moment_limit_v` less the guard band, V.
    pub setpoint_v: f64,
    /// The mains at which the limit is reached, V.
    pub limit_at_mains_v: Option<f64>,
    /// The mains at which the setpoint is reached, V.
    pub setpoint_at_mains_v: Option<f64>,
}

/// Every limit of the site, in the config's order. `projectors` holds one for each amplifier, `None` where its
/// supply isn't described; channel indices count over the whole site, logger by logger.
pub fn rail_watches(site: &Site, projectors: &[Option<Projector>]) -> Vec<RailWatch> {
    let channels: Vec<&Channel> = site.channels().map(|(_, channel)| channel).collect();
    let mains = mains_channel(site).map(|i| channels[i]);
    site.amplifiers
        .iter()
        .zip(projectors)
        .flat_map(|(amplifier, projector)| {
            amplifier.limits.iter().map(move |limit| (amplifier, projector.as_ref(), limit))
        })
        .map(|(amplifier, projector, limit)| {
            rail_watch(amplifier, projector, limit, &channels, mains, site.guard_band)
        })
        .collect()
}

/// The parts of every amplifier, in the config's order.
pub fn part_watches(site: &Site, projectors: &[Option<Projector>]) -> Vec<PartWatch> {
    let channels: Vec<&Channel> = site.channels().map(|(_, channel)| channel).collect();
    site.amplifiers
        .iter()
        .zip(projectors)
        .map(|(amplifier, projector)| {
            let rails = rails_of(amplifier, &channels);
            PartWatch::new(amplifier, projector.as_ref(), &rails, site.declared_v, site.guard_band)
        })
        .collect()
}

/// (channel index, node) of every channel that measures a rail of `amplifier`.
fn rails_of<'c>(amplifier: &Amplifier, channels: &[&'c Channel]) -> Vec<(usize, &'c str)> {
    channels
        .iter()
        .enumerate()
        .filter_map(|(i, channel)| Some((i, channel.rail.as_ref()?)))
        .filter(|(_, rail)| rail.amplifier == amplifier.name)
        .map(|(i, rail)| (i, rail.node.as_str()))
        .collect()
}

/// The index, over the whole site, of the channel that the projections follow: the first mains channel.
pub fn mains_channel(site: &Site) -> Option<usize> {
    site.channels().position(|(_, c)| c.rail.is_none())
}

fn rail_watch(
    amplifier: &Amplifier,
    projector: Option<&Projector>,
    limit: &Limit,
    channels: &[&Channel],
    mains: Option<&Channel>,
    guard_band: f64,
) -> RailWatch {
    let moment_limit_v = match limit.rating {
        Rating::DesignCentre => limit.max_v * DESIGN_CENTRE_ALLOWS,
        // A design-maximum figure is treated as the stricter of the two.
        Rating::Absolute | Rating::DesignMaximum => limit.max_v,
    };
    let projection = projector.and_then(|projector| {
        let curve = projector.curve(&limit.node, limit.loading)?.clone();
        let limit_at_mains_v = curve.mains_for(moment_limit_v);
        let at_limit = limit_at_mains_v.map(|mains_v| {
            let mains_u = mains.map_or(0.0, |c| rectangular_u(c.half_width_v(mains_v)));
            curve.project(Uncertain::new(mains_v, mains_u)).u
        });
        let setpoint_v = moment_limit_v - guard_band * at_limit.unwrap_or(0.0);
        let setpoint_at_mains_v = curve.mains_for(setpoint_v);
        Some(Projection {
            basis: projector.basis(),
            curve,
            setpoint_v,
            limit_at_mains_v,
            setpoint_at_mains_v,
        })
    });
    let rails = rails_of(amplifier, channels);
    let measured = rails
        .iter()
        .find(|(_, node)| *node == limit.node)
        .map(|&(i, _)| (i, moment_limit_v - guard_band * uncertain(channels[i], moment_limit_v).u));
    let proof = rails.iter().map(|&(i, _)| i).collect();
    RailWatch {
        amplifier: amplifier.name.clone(),
        limit: limit.clone(),
        moment_limit_v,
        projection,
        measured,
        proof,
    }
}

impl RailWatch {
    /// The figures of one moment. `fresh` gives a channel's present value by its index, `None` while it's too old.
    pub fn figures(
        &self,
        mains: Option<Uncertain>,
        fresh: impl Fn(usize) -> Option<Uncertain>,
    ) -> RailFigures {
        let proved_on = self
            .proof
            .iter()
            .filter_map(|&i| fresh(i))
            .map(|rail| self.proves_on(rail))
            .reduce(|a, b| a || b);
        RailFigures {
            amplifier: self.amplifier.clone(),
            node: self.limit.node.clone(),
            loading: self.limit.loading,
            limit_v: self.limit.max_v,
            why: self.limit.why.clone(),
            basis: self.projection.as_ref().map(|p| p.basis),
            projected: self.projection.as_ref().zip(mains).map(|(p, mains)| p.curve.project(mains)),
            projected_setpoint_v: self.projection.as_ref().map(|p| p.setpoint_v),
            measured: self.measured.and_then(|(i, _)| fresh(i)),
            measured_setpoint_v: self.measured.map(|(_, setpoint_v)| setpoint_v),
            proved_on,
        }
    }

    /// A supply that is switched off falls towards nothing; one that is on never stands below a third of its limit.
    fn proves_on(&self, rail: Uncertain) -> bool {
        rail.volts > self.moment_limit_v / 3.0
    }
}

#[cfg(test)]
mod tests {
    use super::super::tests::{hall_site, projectors};
    use super::*;

    #[test]
    fn the_setpoint_lies_below_the_limit_by_the_projections_own_uncertainty_there() {
        let site = hall_site();
        let watch = &rail_watches(&site, &projectors(&site))[0];
        let projection = watch.projection.as_ref().unwrap();
        let mains_v = projection.limit_at_mains_v.unwrap();
        // 452 V at 220 V in proportion: 480 V is reached at 233.63 V.
        assert!((mains_v - 220.0 * 480.0 / 452.0).abs() < 1e-9);
        let mains = uncertain(site.channels().next().unwrap().1, mains_v);
        let u = projection.curve.project(mains).u;
        assert!((projection.setpoint_v - (480.0 - u)).abs() < 1e-9);
        assert!(projection.setpoint_at_mains_v.unwrap() < mains_v);
    }

    #[test]
    fn a_design_centre_limit_allows_at_any_moment_what_it_already_allows_for() {
        let mut site = hall_site();
        site.amplifiers[0].limits[0].rating = Rating::DesignCentre;
        let watch = &rail_watches(&site, &projectors(&site))[0];
        assert!((watch.moment_limit_v - 528.0).abs() < 1e-9);
    }

    #[test]
    fn a_rail_channel_proves_the_amplifier_on_or_off() {
        let site = hall_site();
        let watch = &rail_watches(&site, &projectors(&site))[0];
        let with =
            |rail: Option<f64>| watch.figures(None, |_| rail.map(|v| Uncertain::new(v, 1.0))).proved_on;
        assert_eq!((with(Some(455.0)), with(Some(12.0)), with(None)), (Some(true), Some(false), None));
    }
}
