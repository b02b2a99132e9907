//! `railtide demo`: the whole job with no hardware. A made-up hall with a week of history, a simulated logger on a
//! real pseudo-terminal, the daemon upon it, and a receiver of notices of its own.

mod phone;

use std::path::{Path, PathBuf};
use std::time::Duration;

use anyhow::Context;
use clap::Args;
use tokio::sync::mpsc;

use super::stop::Stop;
use crate::clock::Clock;
use crate::config::Site;
use crate::daemon;
use crate::logger::simulated::{Hall, LiveHall, SimulatedLogger};
use crate::quantity::{Millivolts, Uncertain, Utc};
use crate::reading::{Quality, Reading};
use crate::store::{ChannelSpec, OpenOptions, Store};

use phone::{Call, Phone};

/// The hall's evening runs this much faster than the clock.
const SPEED: f64 = 90.0;
/// The hall's local time when the demo begins: twenty-five minutes before its mains peaks.
const BEGINS_AT_H: f64 = 22.0 + 5.0 / 60.0;
const LINE_EVERY: Duration = Duration::from_millis(250);
const HISTORY: Duration = Duration::from_secs(7 * 86_400);
/// The demo says where things stand this often.
const SAY_EVERY: Duration = Duration::from_secs(5);
/// It ends after this long even if the evening didn't go as planned.
const AT_MOST: Duration = Duration::from_secs(150);

/// Arguments of `demo`.
#[derive(Debug, Args)]
pub(super) struct Demo {
    /// Where to lay config and database; without it, a new folder among the temporary files.
    #[arg(long, value_name = "FOLDER")]
    folder: Option<PathBuf>,
    /// Goes on until Ctrl-C instead of ending when the alarm has come and gone.
    #[arg(long)]
    stay: bool,
}

impl Demo {
    pub(super) fn run(self) -> anyhow::Result<()> {
        super::runtime()?.block_on(self.play())
    }

    async fn play(self) -> anyhow::Result<()> {
        let stop = Stop::listen()?;
        let clock = Clock::system();
        let folder = make_folder(self.folder)?;
        let (calls, mut notices) = mpsc::unbounded_channel();
        let phone = Phone::start(calls)?;
        let hall = hall(clock.now().utc);
        let mut live = LiveHall::new(hall.clone(), clock.now().utc);
        live.speed = SPEED;
        live.period = LINE_EVERY;
        let link = folder.join("logger");
        let _logger = SimulatedLogger::start(live, Some(link.clone()), clock.clone())?;

        let config = folder.join("railtide.toml");
        std::fs::write(&config, config_text(&link, &phone.url()))
            .with_context(|| format!("{} can't be written", config.display()))?;
        let site = super::site::load(Some(config.clone()))?;
        introduce(&folder, &config)?;
        let history = write_history(&site, &hall, clock.now().utc)?;
        super::print(&format!("A week of made-up history is in the record: {history} readings.\n\n"))?;

        let narrator = narrate(site.clone(), clock.clone(), self.stay, &mut notices);
        let (over_tx, over) = tokio::sync::oneshot::channel::<()>();
        let shutdown = async move {
            tokio::select! {
                () = stop.asked() => {}
                _ = over => {}
            }
        };
        let watched = daemon::run(&site, clock, shutdown);
        let told = async {
            let told = narrator.await;
            // The daemon may have been asked to stop already; then nobody waits for this.
            let _ = over_tx.send(());
            told
        };
        tokio::pin!(told);
        let mut daemon_ended = std::pin::pin!(watched);
        tokio::select! {
            ended = &mut daemon_ended => ended?,
            story = &mut told => {
                daemon_ended.await?;
                story?;
            }
        }
        look_further(&config)
    }
}

/// A hall whose clock stands shortly before its evening peak at `now`.
fn hall(now: Utc) -> Hall {
    let utc_s = now.0.rem_euclid(86_400_000) / 1000;
    Hall { ahead_of_utc_s: (BEGINS_AT_H * 3600.0) as i32 - utc_s as i32, ..Hall::new(7) }
}

fn make_folder(given: Option<PathBuf>) -> anyhow::Result<PathBuf> {
    let folder =
        given.unwrap_or_else(|| std::env::temp_dir().join(format!("railtide-demo-{}", std::process::id())));
    std::fs::create_dir_all(&folder)
        .with_context(|| format!("the folder {} can't be made", folder.display()))?;
    anyhow::ensure!(
        !folder.join("hall.db").exists(),
        "{} holds a demo already; name another with --folder, or remove it",
        folder.display()
    );
    Ok(folder)
}

fn config_text(port: &Path, webhook: &str) -> String {
    format!(
        r#"# The demo's made-up hall.
[site]
name = "made-up hall"
time_zone = "UTC"

[store]
path = "hall.db"
commit_every = "1 s"

[[logger]]
name = "simulated"
port = "{}"

[[channel]]
name = "mains"
quantity = "mains_rms"
sample_period_ms = {period}
accuracy_pct = 0.2
accuracy_v = 0.1

[[channel]]
name = "hall.reservoir"
quantity = "rail"
amplifier = "hall"
node = "reservoir"
sample_period_ms = {period}
accuracy_pct = 0.3
accuracy_v = 0.2

[[amplifier]]
name = "hall"
  [amplifier.measured]
  mains_v = 230
  rail_v = 472
  node = "reservoir"
  loading = "idle"
  meter_pct = 0.5
  [[amplifier.limit]]
  node = "reservoir"
  max_v = 500
  why = "what its first capacitor and its valves are rated for"

# The evening runs 90 times as fast as a real one, so the delays are shorter too.
[[alarm]]
condition = "rail-high"
on_delay = "3 s"
off_delay = "3 s"

[[receiver]]
name = "demo"
webhook = "{webhook}"
"#,
        port.display(),
        period = LINE_EVERY.as_millis(),
    )
}

/// One reading a second of each channel up to `now`, as the hall would have shown it; how many.
fn write_history(site: &Site, hall: &Hall, now: Utc) -> anyhow::Result<usize> {
    let mut store = Store::open(&site.store.path, &OpenOptions::default())?;
    let specs: Vec<ChannelSpec> = daemon::channel_specs(site);
    let ids = store.register_channels(&specs)?;
    let first_s = (now - HISTORY).0 / 1000;
    let last_s = now.0 / 1000 - 1;
    let mut count = 0;
    // A day at a time, as an import brings it: each reading stands for its own second, whatever the live logger's pace.
    for start_s in (first_s..=last_s).step_by(86_400) {
        let mut of_day = vec![Vec::new(); ids.len()];
        for s in start_s..=last_s.min(start_s + 86_399) {
            let at = Utc(s * 1000);
            let state = hall.at(at);
            for (i, volts) in [state.mains_v, state.rail_v].into_iter().enumerate() {
                let Some(value) = Millivolts::from_volts(volts) else { continue };
                of_day[i].push(Reading { channel: ids[i], at, value, quality: Quality::Good });
            }
        }
        for (channel, readings) in ids.iter().zip(of_day) {
            count += readings.len();
            store.merge_recording(*channel, 1000, readings)?;
        }
    }
    Ok(count)
}

fn introduce(folder: &Path, config: &Path) -> anyhow::Result<()> {
    super::print(&format!(
        "railtide watches the mains and warns before an amplifier's rail passes its limit.\n\
         It warns; it is no protective device.\n\n\
         This is a demo: a made-up hall with one valve amplifier. A simulated logger writes its lines to a real\n\
         pseudo-terminal, the daemon reads them, and the hall's evening runs 90 times as fast as a real one.\n\
         Its mains peaks in about 20 s. Everything is in {}\n\
         (config: {}).\n\n",
        folder.display(),
        config.display(),
    ))
}

/// Tells what happens until the alarm has come and gone.
async fn narrate(
    site: Site,
    clock: Clock,
    stay: bool,
    notices: &mut mpsc::UnboundedReceiver<Call>,
) -> anyhow::Result<()> {
    let ends_at = clock.now().mono + AT_MOST;
    let mut say_at = clock.now().mono + Duration::from_secs(2);
    let mut over = false;
    loop {
        tokio::select! {
            () = clock.sleep_until(say_at) => {
                super::print(&standing_line(&site, clock.now().utc)?)?;
                say_at = say_at + SAY_EVERY;
            }
            Some(call) = notices.recv() => {
                super::print(&format!("\n--- a notice has arrived at the demo's receiver ---\n{}\n---\n\n", call.text))?;
                over |= call.kind == "returned";
            }
        }
        if (over || clock.now().mono >= ends_at) && !stay {
            return Ok(());
        }
    }
}

/// One line: mains, what the rail measures and is projected to be, and how that stands to the setpoint.
fn standing_line(site: &Site, now: Utc) -> anyhow::Result<String> {
    let store = super::site::open_record(site)?;
    let standing = super::now::standing(site, &store, now)?;
    let figure = |v: Option<f64>, u: Option<f64>| {
        v.zip(u).map_or("unknown".to_owned(), |(v, u)| Uncertain::new(v, u).to_string())
    };
    let mains = standing.channels.first().map_or(String::new(), |c| figure(c.value_v, c.value_u_v));
    let Some(rail) = standing.rails.first() else { return Ok(format!("mains {mains}\n")) };
    let against = match (rail.headroom_v, rail.projected_setpoint_v) {
        (Some(headroom), Some(setpoint)) if headroom >= 0.0 => {
            format!("{headroom:.0} V under the setpoint of {setpoint:.0} V")
        }
        (Some(headroom), Some(setpoint)) => {
            format!("{:.0} V OVER the setpoint of {setpoint:.0} V", -headroom)
        }
        _ => String::new(),
    };
    Ok(format!(
        "mains {mains}   rail {} measured, {} projected: {against}\n",
        figure(rail.measured_v, rail.measured_u_v),
        figure(rail.projected_v, rail.projected_u_v),
    ))
}

fn look_further(config: &Path) -> anyhow::Result<()> {
    let program = std::env::current_exe().map_or_else(|_| "railtide".to_owned(), |p| p.display().to_string());
    let config = config.display();
    super::print(&format!(
        "\nThe demo is over; its record stays. To look further:\n  \
         {program} now --config {config}\n  \
         {program} alarm --config {config}\n  \
         {program} alarm ack rail-high --config {config}\n  \
         {program} check --config {config}\n  \
         {program} week --last \"7 days\" --config {config}\n  \
         {program} profile --config {config}\n\
         With a real logger: README.md, \"The first night with a real logger\".\n"
    ))
}
