//! Finding and reading the config file, and opening the record that it names.

use std::path::{Path, PathBuf};

use anyhow::{Context, bail};
use etcetera::BaseStrategy;

use crate::alarm::CONDITIONS;
use crate::config::{Amplifier, Site, Surroundings};
use crate::store::{Store, StoreError};
use crate::supply::fit::RecordedFit;
use crate::supply::{Finding, Projector};
use crate::watch::{self, Projecting, RailWatch, part_watches, projecting, rail_watches, valid_fit};

/// Reads the config: the given file, or the first that exists of those that `--help` names.
pub(super) fn load(given: Option<PathBuf>) -> anyhow::Result<Site> {
    let file = match given {
        Some(file) => file,
        None => find()?,
    };
    let bytes = std::fs::read(&file).with_context(|| {
        format!("the config file {} can't be read; name another with --config", file.display())
    })?;
    let conditions: Vec<&str> = CONDITIONS.iter().map(|c| c.name).collect();
    let surroundings = Surroundings { conditions: &conditions, default_store: default_store() };
    Site::parse_bytes(&bytes, &file, &surroundings)
        .map_err(|complaints| anyhow::anyhow!("the config has mistakes, and nothing was done:\n{complaints}"))
}

/// Where the record is when `[store]` names no path: the user's data folder.
fn default_store() -> PathBuf {
    etcetera::choose_base_strategy()
        .map_or_else(|_| PathBuf::from("railtide.db"), |user| user.data_dir().join("railtide/railtide.db"))
}

/// Makes the folder of the record if the config left its place to us; a place of the owner's choice is the owner's
/// to make, since a missing disk must not be papered over.
pub(super) fn make_default_folder(site: &Site) -> anyhow::Result<()> {
    let default = default_store();
    match default.parent() {
        Some(folder) if site.store.path == default && !folder.as_os_str().is_empty() => {
            std::fs::create_dir_all(folder)
                .with_context(|| format!("the folder {} can't be made", folder.display()))
        }
        _ => Ok(()),
    }
}

/// The record of a site, to read from; a sentence that helps where there's none yet.
pub(super) fn open_record(site: &Site) -> anyhow::Result<Store> {
    Ok(Store::open_read_only(&site.store.path)?)
}

/// The amplifier called `name`, or a sentence that names those there are.
pub(super) fn amplifier<'s>(site: &'s Site, name: &str) -> anyhow::Result<&'s Amplifier> {
    site.amplifier(name).with_context(|| {
        let there: Vec<&str> = site.amplifiers.iter().map(|a| a.name.as_str()).collect();
        match there.is_empty() {
            true => "the config has no [[amplifier]]; add one".to_owned(),
            false => format!("the config has no amplifier {name}; there are {}", there.join(", ")),
        }
    })
}

/// The newest fit of `amplifier` that still holds. A site without a record has none.
pub(super) fn fit(site: &Site, amplifier: &Amplifier) -> anyhow::Result<Option<RecordedFit>> {
    let store = match Store::open_read_only(&site.store.path) {
        Ok(store) => store,
        Err(StoreError::Missing { .. } | StoreError::NoFolder { .. }) => return Ok(None),
        Err(other) => return Err(other.into()),
    };
    Ok(valid_fit(amplifier, &store.fits(&amplifier.name)?, site.time_zone).cloned())
}

/// What each amplifier's rails are projected by.
pub(super) fn projections(site: &Site) -> anyhow::Result<Vec<Projecting>> {
    let of = |amplifier| Ok(projecting(amplifier, fit(site, amplifier)?.as_ref()));
    site.amplifiers.iter().map(of).collect()
}

/// What is to be said of each amplifier's supply as it stands.
pub(super) fn findings(site: &Site, projectors: &[Option<Projector>]) -> Vec<Vec<Finding>> {
    let parts = part_watches(site, projectors);
    site.amplifiers
        .iter()
        .zip(projectors)
        .zip(&parts)
        .map(|((amplifier, projector), parts)| {
            watch::findings(amplifier, projector.as_ref(), parts, site.declared_v)
        })
        .collect()
}

/// Every limit of the site with its projection.
pub(super) fn rails(site: &Site) -> anyhow::Result<Vec<RailWatch>> {
    let projectors: Vec<_> = projections(site)?.into_iter().map(|projecting| projecting.projector).collect();
    Ok(rail_watches(site, &projectors))
}

fn find() -> anyhow::Result<PathBuf> {
    let mut places = vec![PathBuf::from("railtide.toml")];
    if let Ok(user) = etcetera::choose_base_strategy() {
        places.push(user.config_dir().join("railtide/railtide.toml"));
    }
    places.push(Path::new("/etc/railtide/railtide.toml").to_owned());
    match places.iter().find(|place| place.exists()) {
        Some(place) => Ok(place.clone()),
        None => {
            let looked: Vec<_> = places.iter().map(|p| p.display().to_string()).collect();
            bail!(
                "no config file: looked for {}; name one with --config, or copy config/railtide.example.toml",
                looked.join(", ")
            )
        }
    }
}
