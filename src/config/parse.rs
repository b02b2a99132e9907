//! From the text of a config file to a [`Site`], or to every complaint about it.

use std::path::{Path, PathBuf};
use std::str::FromStr;
use std::time::Duration;

use chrono_tz::{TZ_VARIANTS, Tz};
use toml::de::DeTable;

use super::circuit::SiteMains;
use super::complaint::{Complaints, Notes, Span};
use super::nearest::nearest;
use super::site::{Site, StoreSettings};
use super::table::{Bounds, Keys, Table};
use super::{amplifier, logger, notices, references};
use crate::supply::MainsWave;

/// What the reader of a config file has to be told, since it looks at nothing but the text.
#[derive(Clone, Debug)]
pub struct Surroundings<'a> {
    /// Names of the table of conditions, which `[[alarm]]` may override.
    pub conditions: &'a [&'a str],
    /// The database file where `[store]` names none.
    pub default_store: PathBuf,
}

impl Site {
    /// Reads a config file's content, which should be UTF-8.
    ///
    /// # Errors
    /// Every mistake of the file; if it isn't UTF-8, where it stops being so.
    pub fn parse_bytes(
        bytes: &[u8],
        file: &Path,
        surroundings: &Surroundings<'_>,
    ) -> Result<Site, Complaints> {
        match std::str::from_utf8(bytes) {
            Ok(text) => Site::parse(text, file, surroundings),
            Err(error) => {
                let good = String::from_utf8_lossy(&bytes[..error.valid_up_to()]);
                let notes = Notes::new(file, &good);
                let end = Span { start: good.len(), end: good.len() };
                notes.complain(end, "a byte that is no UTF-8; save the file as UTF-8 text");
                Err(notes.finish().expect_err("a complaint has just been made"))
            }
        }
    }

    /// Reads the text of a config file. `file` is what complaints call it, and relative paths are meant from its
    /// folder.
    ///
    /// # Errors
    /// Every mistake of the file, in the order of its lines.
    pub fn parse(text: &str, file: &Path, surroundings: &Surroundings<'_>) -> Result<Site, Complaints> {
        let notes = Notes::new(file, text);
        let site = match DeTable::parse(text) {
            Ok(tree) => read(&notes, tree.get_ref(), file, surroundings),
            Err(error) => {
                let at = error.span().unwrap_or(0..0);
                notes.complain_of(at.into(), "", format!("no valid TOML: {}", error.message()));
                None
            }
        };
        let warnings = notes.finish()?;
        let site = site.expect("whatever is not read has been complained about");
        Ok(Site { warnings, ..site })
    }
}

const ROOT: Keys = &[
    ("site", "[site]"),
    ("store", "[store]"),
    ("logger", "[[logger]]"),
    ("channel", "[[channel]]"),
    ("amplifier", "[[amplifier]]"),
    ("alarm", "[[alarm]]"),
    ("receiver", "[[receiver]]"),
];

const SITE: Keys = &[
    ("name", "\"village hall\""),
    ("time_zone", "\"Europe/London\""),
    ("frequency_hz", "50"),
    ("declared_v", "230"),
    ("guard_band", "1.0"),
    ("wave", "{ third_pct = 1.0, fifth_pct = -3.0 }"),
];

const STORE: Keys =
    &[("path", "\"railtide.db\""), ("commit_every", "\"10 s\""), ("keep_readings", "\"400 days\"")];

const WAVE: Keys = &[
    ("third_pct", "1.0"),
    ("fifth_pct", "-3.0"),
    ("seventh_pct", "0.5"),
    ("ninth_pct", "0.2"),
    ("eleventh_pct", "0.3"),
    ("thirteenth_pct", "0.2"),
    ("crest_factor", "1.36"),
];

fn read<'a>(
    notes: &'a Notes<'a>,
    tree: &'a DeTable<'a>,
    file: &Path,
    surroundings: &Surroundings<'_>,
) -> Option<Site> {
    let folder = file.parent().unwrap_or(Path::new(""));
    let root = Table::open(notes, tree, Span { start: 0, end: 0 }, "the top level", ROOT);

    let site = read_site(root);
    let store = read_store(root, folder, surroundings);
    let loggers = logger::read_loggers(root);
    let channels = logger::read_channels(root);
    let amplifiers = amplifier::read_amplifiers(root, &site.mains);
    let alarms = notices::read_alarms(root, surroundings.conditions);
    let receivers = notices::read_receivers(root, folder);
    references::check(&loggers, &channels, &amplifiers);

    Some(Site {
        file: file.to_owned(),
        name: site.name?,
        time_zone: site.time_zone?,
        frequency_hz: site.mains.frequency_hz,
        declared_v: site.declared_v,
        wave: site.mains.wave,
        store,
        loggers: logger::with_channels(loggers, channels)?,
        amplifiers: amplifiers.into_iter().map(|read| read.amplifier).collect::<Option<_>>()?,
        alarms: alarms?,
        receivers: receivers?,
        guard_band: site.guard_band,
        warnings: Vec::new(),
    })
}

/// What `[site]` says, with defaults where it is silent; name and zone are `None` once complained about.
struct ReadSite {
    name: Option<String>,
    time_zone: Option<Tz>,
    declared_v: f64,
    guard_band: f64,
    mains: SiteMains,
}

fn read_site(root: Table<'_>) -> ReadSite {
    let table = root.table("site", "[site]", SITE);
    if !root.key("site").is_present() {
        let says = "[site] is missing; expected it with at least a name and a time_zone";
        root.notes().complain_of(root.header(), "", says);
    }
    let number = |key, bounds, usual| table.and_then(|t| t.key(key).number(bounds)).unwrap_or(usual);
    ReadSite {
        name: table.and_then(|t| t.need("name").text()).map(|name| name.value),
        time_zone: table.and_then(read_time_zone),
        declared_v: number("declared_v", Bounds::Within(80.0, 480.0), 230.0),
        guard_band: number("guard_band", Bounds::Within(0.0, 5.0), 1.0),
        mains: SiteMains {
            frequency_hz: number("frequency_hz", Bounds::Within(40.0, 70.0), 50.0),
            wave: table.map(read_wave).unwrap_or_default(),
        },
    }
}

fn read_store(root: Table<'_>, folder: &Path, surroundings: &Surroundings<'_>) -> StoreSettings {
    let table = root.table("store", "[store]", STORE);
    let path = table.and_then(|t| t.key("path").text());
    let shortest = Duration::from_millis(100);
    let longest = Duration::from_secs(600);
    let commit_every = table.and_then(|t| t.key("commit_every").duration(shortest, longest));
    let keep = table.map(|t| t.key("keep_readings")).filter(|entry| entry.peek() != Some("for ever"));
    // An hour must be closed before it's let go; a century stands for any longer time.
    let (least, most) = (Duration::from_secs(7200), Duration::from_secs(100 * 366 * 86_400));
    StoreSettings {
        keep_readings: keep.and_then(|entry| entry.duration(least, most)),
        path: path.map_or_else(|| surroundings.default_store.clone(), |path| folder.join(path.value)),
        commit_every: commit_every.unwrap_or(Duration::from_secs(10)),
    }
}

fn read_time_zone(site: Table<'_>) -> Option<Tz> {
    let entry = site.need("time_zone");
    let name = entry.text()?.value;
    if let Ok(zone) = Tz::from_str(&name) {
        return Some(zone);
    }
    let near = nearest(&name, TZ_VARIANTS.iter().map(|zone| zone.name())).unwrap_or("Europe/London");
    entry.refuse(&format!("no time zone of the IANA list; expected for example \"{near}\""))
}

fn read_wave(site: Table<'_>) -> MainsWave {
    let Some(table) = site.key("wave").inline(WAVE) else { return MainsWave::default() };
    let orders = [
        (3, "third_pct"),
        (5, "fifth_pct"),
        (7, "seventh_pct"),
        (9, "ninth_pct"),
        (11, "eleventh_pct"),
        (13, "thirteenth_pct"),
    ];
    let harmonics: Vec<_> = orders
        .into_iter()
        .filter_map(|(order, key)| Some((order, table.key(key).number(Bounds::Within(-20.0, 20.0))? / 100.0)))
        .collect();
    let crest = table.key("crest_factor");
    if !crest.is_present() {
        return MainsWave { harmonics, known: true };
    }
    if !harmonics.is_empty() {
        table.refuse(&["crest_factor"], "the harmonics say it already; give either them or crest_factor");
    }
    let harmonics = crest.number(Bounds::Within(1.335, 1.5)).map(harmonics_of_crest).unwrap_or_default();
    MainsWave { harmonics, known: true }
}

/// Third and fifth harmonic that give the crest factor: +a and −a in sine phase, the usual flat top (for a below
/// 1/34 the crest stays in the middle of the half-wave: f″ = −1 + 34a there).
///
/// crest = √2·(1 − 2a)/√(1 + 2a²), so with q = crest²/2: (4 − 2q)·a² − 4a + (1 − q) = 0; the lesser root.
fn harmonics_of_crest(crest: f64) -> Vec<(u32, f64)> {
    let q = crest * crest / 2.0;
    let a = (4.0 - (16.0 - 4.0 * (4.0 - 2.0 * q) * (1.0 - q)).sqrt()) / (2.0 * (4.0 - 2.0 * q));
    vec![(3, a), (5, -a)]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_crest_factor_becomes_harmonics_that_have_it() {
        // Handbook section 10, computed: h3 +1 %, h5 −1 % has crest factor 1.3858; +2 %, −2 % has 1.3571.
        for (crest, share) in [(1.3858, 0.01), (1.3571, 0.02), (std::f64::consts::SQRT_2, 0.0)] {
            let harmonics = harmonics_of_crest(crest);
            assert!((harmonics[0].1 - share).abs() < 3e-5, "{crest}: {harmonics:?}");
            assert!((harmonics[0].1 + harmonics[1].1).abs() < 1e-12);
        }
        let peak = |t: f64, waves: &[(u32, f64)]| {
            t.sin() + waves.iter().map(|(n, a)| a * (f64::from(*n) * t).sin()).sum::<f64>()
        };
        for crest in [1.335, 1.36, 1.4, 1.5] {
            let waves = harmonics_of_crest(crest);
            let rms = ((1.0 + waves.iter().map(|(_, a)| a * a).sum::<f64>()) / 2.0).sqrt();
            let highest =
                (0..=1800).map(|i| peak(f64::from(i) * 0.1f64.to_radians(), &waves)).fold(0.0, f64::max);
            assert!((highest / rms - crest).abs() < 1e-4, "{crest}: {}", highest / rms);
        }
    }
}
