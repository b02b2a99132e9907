//! `railtide alarm`: the list, and what a person does about an alarm.

use std::path::PathBuf;
use std::time::{Duration, Instant};

use anyhow::{Context, bail};
use clap::{Args, Subcommand};

use super::Format;
use crate::alarm::{AlarmKey, Request, RequestAction};
use crate::clock::Clock;
use crate::config::Site;
use crate::daemon;
use crate::report::{AlarmList, alarms_text};
use crate::store::{Lock, Store, StoreError};
use crate::watch::Answer;

/// How long a command waits for the running daemon's answer.
const ANSWER_WITHIN: Duration = Duration::from_secs(5);
const LOOK_EVERY: Duration = Duration::from_millis(50);

/// Arguments of `alarm`.
#[derive(Debug, Args)]
pub(super) struct Alarm {
    #[command(subcommand)]
    action: Option<Action>,
}

#[derive(Debug, Subcommand)]
enum Action {
    /// Lists the alarms that are not normal (what `railtide alarm` alone does).
    List {
        /// Lists normal ones too.
        #[arg(long)]
        all: bool,
        /// How to print.
        #[arg(long, value_enum, default_value_t)]
        format: Format,
    },
    /// Acknowledges an alarm: somebody has seen it.
    #[command(visible_alias = "ack")]
    Acknowledge {
        /// `condition:subject` as the list names it, or the condition alone where it has one alarm.
        alarm: String,
    },
}

impl Alarm {
    pub(super) fn run(self, config: Option<PathBuf>) -> anyhow::Result<()> {
        let site = super::site::load(config)?;
        match self.action.unwrap_or(Action::List { all: false, format: Format::Text }) {
            Action::List { all, format } => list(&site, all, format),
            Action::Acknowledge { alarm } => {
                let key = find(&site, &alarm)?;
                let by = std::env::var("USER").unwrap_or_else(|_| "somebody at the command line".to_owned());
                let answer = ask(&site, &Request { by, action: RequestAction::Acknowledge { key } })?;
                if !answer.done {
                    bail!("{}", answer.text);
                }
                super::print(&(answer.text + "\n"))
            }
        }
    }
}

fn list(site: &Site, all: bool, format: Format) -> anyhow::Result<()> {
    let store = super::site::open_record(site)?;
    let now = Clock::system().now().utc;
    let list = AlarmList::new(&store.alarms()?, all, site.time_zone, now);
    match format {
        Format::Json => super::print_json(&list),
        Format::Text => {
            let mut text = String::new();
            alarms_text(&list, now, &mut text)?;
            super::print(&text)
        }
    }
}

/// The alarm that `word` names: in full, or by its condition where only one of them isn't normal.
fn find(site: &Site, word: &str) -> anyhow::Result<AlarmKey> {
    let alarms = super::site::open_record(site)?.alarms()?;
    if let Some(exact) = alarms.iter().find(|a| a.key.to_string() == word) {
        return Ok(exact.key.clone());
    }
    let mut of_condition =
        alarms.iter().filter(|a| a.key.condition == word && a.state != crate::alarm::State::Normal);
    match (of_condition.next(), of_condition.next()) {
        (Some(only), None) => Ok(only.key.clone()),
        (Some(_), Some(_)) => {
            bail!("several alarms are of condition {word}; name one as `railtide alarm` lists it")
        }
        (None, _) => bail!("there is no alarm {word}; `railtide alarm list --all` names those there are"),
    }
}

/// Asks the running daemon; with none running, takes the lock and does it here.
fn ask(site: &Site, request: &Request) -> anyhow::Result<Answer> {
    match Lock::take(&site.store.path) {
        Ok(lock) => Ok(daemon::apply_alone(site, &lock, Clock::system(), request)?),
        Err(StoreError::InUse { .. }) => ask_daemon(site, request),
        Err(other) => Err(other.into()),
    }
}

fn ask_daemon(site: &Site, request: &Request) -> anyhow::Result<Answer> {
    let mut store = Store::open_beside(&site.store.path)?;
    let id = store.put_request(request, Clock::system().now().utc)?;
    let asked = Instant::now();
    while asked.elapsed() < ANSWER_WITHIN {
        if let Some(answer) = store.answer(id)? {
            return Ok(Answer { done: answer.ok, text: answer.said });
        }
        std::thread::sleep(LOOK_EVERY);
    }
    // The daemon may have done it in the meantime; if not, it must not do it after we said that it wasn't done.
    if store.withdraw_request(id)? {
        bail!("the daemon has not answered within 5 s, and nothing was done; look at its log");
    }
    let answer = store.answer(id)?.context("the request is gone from the record")?;
    Ok(Answer { done: answer.ok, text: answer.said })
}
