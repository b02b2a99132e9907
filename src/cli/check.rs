//! `railtide check`: what the config was understood to mean.

use std::path::PathBuf;

use clap::Args;

use crate::report::understood_text;

/// Arguments of `check`.
#[derive(Debug, Args)]
pub(super) struct Check {}

impl Check {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let mut text = String::new();
        understood_text(&site, &super::site::rails(&site)?, &mut text)?;
        for warning in &site.warnings {
            text += &format!("Unlikely: {warning}\n");
        }
        super::print(&text)
    }
}
