//! `railtide curve AMP`: mains to rails for each loading.

use std::io;
use std::path::PathBuf;

use anyhow::{Context, bail};
use clap::{Args, ValueEnum};

use crate::config::{Amplifier, Site};
use crate::report::{CurveReport, curve_csv, curve_svg, curve_text};
use crate::supply::{Basis, Grid, Loading, Projector, SolveOptions};

/// Mains that the solver is asked about at most, V.
const MAINS_V: std::ops::RangeInclusive<f64> = 20.0..=600.0;
const MOST_POINTS: usize = 2_000;
const USUAL_STEP_V: f64 = 5.0;

/// Arguments of `curve`.
#[derive(Debug, Args)]
pub(super) struct Curve {
    /// The amplifier's name.
    amplifier: String,
    /// From this mains, V; without it, a tenth under the declared voltage.
    #[arg(long, value_name = "VOLTS")]
    from: Option<f64>,
    /// To this mains, V; the same as --from gives one point. Without it, a tenth over the declared voltage.
    #[arg(long, value_name = "VOLTS")]
    to: Option<f64>,
    /// Mains from point to point, V; 5 without it.
    #[arg(long, value_name = "VOLTS")]
    step: Option<f64>,
    /// Only this loading: unloaded, idle or full.
    #[arg(long, value_parser = loading)]
    loading: Option<Loading>,
    /// The node that a chart shows; the first without it.
    #[arg(long, value_name = "NODE")]
    node: Option<String>,
    /// How to print.
    #[arg(long, value_enum, default_value_t)]
    format: CurveFormat,
}

#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, ValueEnum)]
enum CurveFormat {
    /// Tables for people.
    #[default]
    Text,
    /// For programs: SI units in the keys.
    Json,
    /// One row a node.
    Csv,
    /// A small chart.
    Svg,
}

/// A loading by its word.
pub(super) fn loading(word: &str) -> Result<Loading, String> {
    Loading::from_word(word).ok_or_else(|| "expected unloaded, idle or full".to_owned())
}

impl Curve {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let amplifier = super::site::amplifier(&site, &self.amplifier)?;
        let Some(stated) = &amplifier.circuit else {
            bail!(
                "the config states no circuit of {}, and a measured pair alone gives no curve; state its supply the \
                 full way ([amplifier.transformer], [amplifier.rectifier], [[amplifier.filter]])",
                amplifier.name
            );
        };
        let mains_v = self.mains(&site)?;
        let loadings: Vec<Loading> = match self.loading {
            Some(loading) => vec![loading],
            None => Loading::ALL.into_iter().filter(|loading| stated.knows(*loading)).collect(),
        };
        let fit = super::site::fit(&site, amplifier)?;
        let (grid, options) = (Grid::about(stated.transformer.wound_for_v), SolveOptions::default());
        let (circuit, projector) = match &fit {
            Some(made) => (made.fit.applied(stated), Projector::from_fit(stated, &made.fit, grid, &options)?),
            None => (stated.clone(), Projector::from_circuit(stated, grid, &options)?),
        };
        let report = CurveReport::solve(&circuit, &projector, &mains_v, &loadings)?;
        self.print(&report, amplifier, projector.basis())
    }

    fn print(&self, report: &CurveReport, amplifier: &Amplifier, basis: Basis) -> anyhow::Result<()> {
        match self.format {
            CurveFormat::Json => super::print_json(report),
            CurveFormat::Csv => Ok(curve_csv(report, io::stdout().lock())?),
            CurveFormat::Text => {
                let source = match basis {
                    Basis::Fit => "Solved from its circuit, fitted to the record.",
                    _ => "Solved from its circuit as the config states it.",
                };
                let mut text = String::new();
                curve_text(report, source, &mut text)?;
                super::print(&text)
            }
            CurveFormat::Svg => {
                let circuit = amplifier.circuit.as_ref().context("a curve comes from a circuit")?;
                let node = match &self.node {
                    Some(name) if circuit.node(name).is_none() => {
                        let there: Vec<_> = circuit.filter.iter().map(|s| s.node.as_str()).collect();
                        bail!("{} has no node {name}; there are {}", amplifier.name, there.join(", "))
                    }
                    Some(name) => name,
                    None => &circuit.filter[0].node,
                };
                let mut text = String::new();
                curve_svg(report, node, &mut text)?;
                super::print(&text)
            }
        }
    }

    /// The mains voltages that are asked for, rising.
    fn mains(&self, site: &Site) -> anyhow::Result<Vec<f64>> {
        let from = self.from.unwrap_or(USUAL_STEP_V * (0.9 * site.declared_v / USUAL_STEP_V).floor());
        let to = self.to.unwrap_or_else(|| {
            (USUAL_STEP_V * (1.1 * site.declared_v / USUAL_STEP_V - 1e-9).ceil()).max(from)
        });
        let step = self.step.unwrap_or(USUAL_STEP_V);
        for (name, volts) in [("--from", from), ("--to", to)] {
            if !MAINS_V.contains(&volts) {
                bail!("{name} {volts}: expected mains volts from {} to {}", MAINS_V.start(), MAINS_V.end());
            }
        }
        if to < from {
            bail!("--to {to} is less than --from {from}; give the lower mains first");
        }
        if !(step.is_finite() && step > 0.0) {
            bail!("--step {step}: expected volts above 0");
        }
        // A hair over, so that 215 to 250 by 0.1 holds 250.
        let steps = ((to - from) / step + 1e-9).floor();
        if steps >= MOST_POINTS as f64 {
            bail!("--step {step} makes {} points; expected at most {MOST_POINTS}", steps + 1.0);
        }
        let mut mains: Vec<f64> = (0..=steps as usize).map(|i| from + i as f64 * step).collect();
        if mains.last().is_some_and(|last| to - last > 1e-6) {
            mains.push(to);
        }
        Ok(mains)
    }
}
