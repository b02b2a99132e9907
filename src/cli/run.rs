//! `railtide run`: the daemon.

use std::path::PathBuf;

use super::stop::Stop;
use crate::clock::Clock;
use crate::daemon;

pub(super) fn run(config: Option<PathBuf>) -> anyhow::Result<()> {
    super::start_logging();
    super::runtime()?.block_on(async {
        let stop = Stop::listen()?;
        let site = super::site::load(config)?;
        for warning in &site.warnings {
            tracing::warn!("{warning}");
        }
        super::site::make_default_folder(&site)?;
        daemon::run(&site, Clock::system(), stop.asked()).await?;
        Ok(())
    })
}
