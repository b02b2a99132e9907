//! `railtide run`: the daemon.

use std::path::PathBuf;

use crate::clock::Clock;
use crate::daemon;

pub(super) fn run(config: Option<PathBuf>) -> anyhow::Result<()> {
    super::start_logging();
    let site = super::site::load(config)?;
    for warning in &site.warnings {
        tracing::warn!("{warning}");
    }
    super::runtime()?.block_on(daemon::run(&site, Clock::system(), super::stop::asked_to_stop()))?;
    Ok(())
}
