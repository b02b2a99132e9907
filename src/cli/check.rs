//! `railtide check`: what the config was understood to mean.

use std::path::PathBuf;

use clap::Args;

use crate::report::{Understood, understood_text};
use crate::watch::rail_watches;

/// Arguments of `check`.
#[derive(Debug, Args)]
pub(super) struct Check {}

impl Check {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let projections = super::site::projections(&site)?;
        let projectors: Vec<_> = projections.iter().map(|p| p.projector.clone()).collect();
        let findings = super::site::findings(&site, &projectors);
        let rails = rail_watches(&site, &projectors);
        let understood =
            Understood { site: &site, projections: &projections, rails: &rails, findings: &findings };
        let mut text = String::new();
        understood_text(understood, &mut text)?;
        for warning in &site.warnings {
            text += &format!("Unlikely: {warning}\n");
        }
        super::print(&text)
    }
}
