//! `railtide now`: where mains and rails stand.

use std::path::PathBuf;

use clap::Args;
use serde::Serialize;

use super::Format;
use crate::clock::Clock;
use crate::config::Site;
use crate::quantity::Utc;
use crate::report::{AlarmLine, AlarmList, Standing, alarms_text, standing_text};
use crate::store::Store;

/// Arguments of `now`.
#[derive(Debug, Args)]
pub(super) struct Now {
    /// How to print.
    #[arg(long, value_enum, default_value_t)]
    format: Format,
}

#[derive(Serialize)]
struct NowJson {
    #[serde(flatten)]
    standing: Standing,
    alarms: Vec<AlarmLine>,
}

impl Now {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        let store = super::site::open_record(&site)?;
        let now = Clock::system().now().utc;
        let standing = standing(&site, &store, now)?;
        let alarms = AlarmList::new(&store.alarms()?, false, site.time_zone, now);
        match self.format {
            Format::Json => super::print_json(&NowJson { standing, alarms: alarms.alarms }),
            Format::Text => {
                let mut text = String::new();
                standing_text(&standing, now, &mut text)?;
                alarms_text(&alarms, now, &mut text)?;
                super::print(&text)
            }
        }
    }
}

/// Where things stand at `now`, by the record.
pub(super) fn standing(site: &Site, store: &Store, now: Utc) -> anyhow::Result<Standing> {
    let stored = store.channels()?;
    let latest = site
        .channels()
        .map(|(_, channel)| match stored.iter().find(|s| s.name == channel.name) {
            Some(known) => store.latest_reading(known.id),
            None => Ok(None),
        })
        .collect::<Result<Vec<_>, _>>()?;
    Ok(Standing::new(site, &super::site::rails(site)?, &latest, now))
}
