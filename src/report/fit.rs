//! What a fit says: as text for people, as JSON for programs.

use std::fmt;

use chrono_tz::Tz;
use serde::Serialize;

use super::time::LocalTime;
use crate::supply::fit::{Fit, PairsSeen, Parameter, RecordedFit, Second};

/// A fit for other programs: the keys are part of the tool's interface.
#[derive(Clone, Debug, Serialize)]
pub struct FitReport {
    /// The amplifier's name.
    pub amplifier: String,
    /// The node whose rail was recorded.
    pub node: String,
    /// The first pair.
    pub from: LocalTime,
    /// The end of the last pair.
    pub to: LocalTime,
    /// When it was made.
    pub made_at: LocalTime,
    /// An entry of the service log before which nothing was taken.
    pub not_before: Option<LocalTime>,
    /// What the record holds.
    pub pairs: PairsSeen,
    /// Lowest mains among the pairs that count, V.
    pub mains_min_v: f64,
    /// Highest, V.
    pub mains_max_v: f64,
    /// The secondary's open-circuit e.m.f.
    pub secondary: Volts,
    /// The source resistance, where that was the second parameter.
    pub source: Option<Ohms>,
    /// The idle current, where that was the second parameter.
    pub idle: Option<Amperes>,
    /// Whether the record can tell the two parameters apart.
    pub told_apart: bool,
    /// Spread of one pair about the fitted model, V.
    pub residual_v: f64,
    /// Independent pairs that the record is worth.
    pub independent_pairs: f64,
    /// Whether it was kept.
    pub kept: bool,
    /// Whether the rails are projected by it from now on.
    pub used: bool,
}

macro_rules! parameter_in {
    ($name:ident, $unit:literal, $nameplate:literal, $nameplate_u:literal, $fitted:literal, $fitted_u:literal) => {
        #[doc = concat!("A parameter in ", $unit, ".")]
        #[derive(Clone, Copy, Debug, Serialize)]
        pub struct $name {
            /// As the config states it.
            #[serde(rename = $nameplate)]
            pub nameplate: f64,
            /// Expanded uncertainty (k = 2) of that.
            #[serde(rename = $nameplate_u)]
            pub nameplate_u: f64,
            /// As fitted.
            #[serde(rename = $fitted)]
            pub fitted: f64,
            /// Expanded uncertainty (k = 2) of that.
            #[serde(rename = $fitted_u)]
            pub fitted_u: f64,
        }

        impl From<Parameter> for $name {
            fn from(p: Parameter) -> Self {
                let Parameter { nameplate, nameplate_u, fitted, fitted_u } = p;
                $name { nameplate, nameplate_u, fitted, fitted_u }
            }
        }
    };
}

parameter_in!(Volts, "volts r.m.s.", "nameplate_v", "nameplate_u_v", "fitted_v", "fitted_u_v");
parameter_in!(Ohms, "ohms", "nameplate_ohm", "nameplate_u_ohm", "fitted_ohm", "fitted_u_ohm");
parameter_in!(Amperes, "amperes", "nameplate_a", "nameplate_u_a", "fitted_a", "fitted_u_a");

impl FitReport {
    /// The report of a fit. `not_before`: where the service log cut the record.
    pub fn new(
        recorded: &RecordedFit,
        time_zone: Tz,
        not_before: Option<LocalTime>,
        kept: bool,
        used: bool,
    ) -> Self {
        let fit: &Fit = &recorded.fit;
        let second = |which: Second| (fit.second == which).then_some(fit.second_value);
        FitReport {
            amplifier: fit.amplifier.clone(),
            node: fit.node.clone(),
            from: LocalTime::of(recorded.from, time_zone),
            to: LocalTime::of(recorded.to, time_zone),
            made_at: LocalTime::of(recorded.made_at, time_zone),
            not_before,
            pairs: fit.seen,
            mains_min_v: fit.mains_v[0],
            mains_max_v: fit.mains_v[1],
            secondary: fit.secondary_v.into(),
            source: second(Second::SourceResistance).map(Ohms::from),
            idle: second(Second::IdleCurrent).map(Amperes::from),
            told_apart: fit.told_apart,
            residual_v: fit.residual_v,
            independent_pairs: fit.independent_pairs,
            kept,
            used,
        }
    }
}

/// Says a fit in plain sentences.
pub fn fit_text(report: &FitReport, out: &mut impl fmt::Write) -> fmt::Result {
    let PairsSeen { all, off, warming_up, unloaded, idle, loaded, outliers } = report.pairs;
    writeln!(
        out,
        "The supply of the {}, fitted to {all} pairs of mains and \"{}\" from {} to {}.",
        report.amplifier,
        report.node,
        report.from.people(),
        report.to.people()
    )?;
    if let Some(cut) = report.not_before {
        writeln!(out, "Nothing before {} was taken: the service log has an entry there.", cut.people())?;
    }
    writeln!(
        out,
        "  seen       unloaded {unloaded}, idle {idle}, loaded {loaded}, warming up or switching {warming_up}, off {off}; \
         {outliers} outliers"
    )?;
    writeln!(out, "  mains      {:.1} to {:.1} V", report.mains_min_v, report.mains_max_v)?;
    let s = report.secondary;
    writeln!(
        out,
        "  secondary  {:.1} V ± {:.1} V  (config: {:.1} V ± {:.1} V)",
        s.fitted, s.fitted_u, s.nameplate, s.nameplate_u
    )?;
    if let Some(o) = report.source {
        writeln!(
            out,
            "  source     {:.1} Ω ± {:.1} Ω  (config: {:.1} Ω ± {:.1} Ω)",
            o.fitted, o.fitted_u, o.nameplate, o.nameplate_u
        )?;
    }
    if let Some(a) = report.idle {
        let [fitted, u, nameplate, nameplate_u] =
            [a.fitted, a.fitted_u, a.nameplate, a.nameplate_u].map(|a| 1e3 * a);
        writeln!(
            out,
            "  idle       {fitted:.1} mA ± {u:.1} mA  (config: {nameplate:.1} mA ± {nameplate_u:.1} mA)"
        )?;
    }
    writeln!(
        out,
        "  residuals  {:.2} V (one pair, robust); worth {:.0} independent pairs",
        report.residual_v, report.independent_pairs
    )?;
    let second = if report.source.is_some() { Second::SourceResistance } else { Second::IdleCurrent }.words();
    if report.told_apart {
        writeln!(out, "The record tells secondary and {second} apart.")?;
    } else {
        writeln!(
            out,
            "The record cannot tell secondary and {second} apart: the config's {second} stands, and the secondary alone \
             was fitted. A record with both standby and idle would tell them."
        )?;
    }
    writeln!(
        out,
        "{}",
        match (report.kept, report.used) {
            (true, true) =>
                "It is kept, and the rails are projected by it from now on (by a running daemon from its next start).",
            (true, false) => "It is kept, but not used: the service log has a later entry.",
            (false, _) => "It is not kept.",
        }
    )
}
