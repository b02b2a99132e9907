//! One site, watched live: takes readings and ticks, judges plausibility, projects the rails, walks all alarms, and
//! says what must be kept and told.
//!
//! Pure: the daemon, the demo, a year's replay and a test at a desk all drive the same [`Watch`]. It decides in
//! memory; whoever drives it commits what it [`Decided`] before telling anybody.

mod ahead;
mod channel;
mod faults;
mod findings;
mod ledger;
mod parts;
mod projecting;
mod rail;

pub use ahead::LOOK_AHEAD;
pub use channel::{fresh_for, is_plausible, uncertain};
pub use findings::findings;
pub use parts::{CapacitorWatch, PartWatch};
pub use projecting::{Projecting, projecting, valid_fit};
pub use rail::{Projection, RailWatch, mains_channel, part_watches, rail_watches};

use std::time::Duration;

use crate::alarm::{
    AlarmKey, AlarmRecord, Event, Figures, JournalEntry, LoggerFigures, Notice, Request, RequestAction,
    RoomFigures, State,
};
use crate::config::Site;
use crate::mains::TideTable;
use crate::quantity::{Moment, Mono};
use crate::reading::{ChannelId, Reading, Stamp};
use crate::supply::Projector;

use ahead::Ahead;
use channel::WatchedChannel;
use ledger::Ledger;

/// What the record remembers of an earlier run.
#[derive(Clone, Debug, Default)]
pub struct Restored {
    /// Every alarm as it stood.
    pub alarms: Vec<AlarmRecord>,
    /// The next journal number.
    pub next_seq: u64,
    /// The next notice's number.
    pub next_notice_id: u64,
    /// The database's own random id: part of every notice's idempotency key.
    pub database_id: String,
}

/// What a step brought about, to be committed in one transaction.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Decided {
    /// Readings, judged.
    pub readings: Vec<Reading>,
    /// Alarms that changed, as they stand now.
    pub alarms: Vec<AlarmRecord>,
    /// What happened to them.
    pub journal: Vec<JournalEntry>,
    /// Whom to tell, after the commit.
    pub notices: Vec<Notice>,
}

/// What a person's request came to.
#[derive(Clone, Debug, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
pub struct Answer {
    /// Whether it was done.
    pub done: bool,
    /// One sentence for the person.
    pub text: String,
}

/// One site's live state.
#[derive(Debug)]
pub struct Watch {
    mains_channel: Option<usize>,
    loggers: Vec<WatchedLogger>,
    channels: Vec<WatchedChannel>,
    rails: Vec<RailWatch>,
    parts: Vec<PartWatch>,
    room: Option<RoomFigures>,
    ahead: Ahead,
    zone: chrono_tz::Tz,
    ledger: Ledger,
}

#[derive(Debug)]
struct WatchedLogger {
    name: String,
    first_channel: usize,
    sample_period: Duration,
    last_line: Mono,
    disconnected: Option<String>,
}

impl Watch {
    /// Starts watching at `now`. `ids` holds the record's number of every channel, in the order of
    /// [`Site::channels`]; `projectors` one for each amplifier.
    pub fn new(
        site: &Site,
        ids: &[ChannelId],
        projectors: &[Option<Projector>],
        restored: Restored,
        now: Moment,
    ) -> Self {
        let channels = site
            .channels()
            .zip(ids)
            .map(|((_, channel), id)| WatchedChannel::new(*id, channel.clone(), site.declared_v))
            .collect();
        let mut first_channel = 0;
        let loggers = site
            .loggers
            .iter()
            .map(|logger| {
                let shortest = logger.channels.iter().map(|c| c.sample_period).min();
                let watched = WatchedLogger {
                    name: logger.name.clone(),
                    first_channel,
                    sample_period: shortest.unwrap_or(Duration::from_secs(1)),
                    last_line: now.mono,
                    disconnected: None,
                };
                first_channel += logger.channels.len();
                watched
            })
            .collect();
        let rails = rail_watches(site, projectors);
        Watch {
            mains_channel: mains_channel(site),
            loggers,
            channels,
            ahead: Ahead::new(&rails, None, site.time_zone, now.mono),
            zone: site.time_zone,
            rails,
            parts: part_watches(site, projectors),
            room: None,
            ledger: Ledger::new(site, restored),
        }
    }

    /// Takes one good line: the raw volts of some of a logger's channels, by their index within it.
    pub fn sample(&mut self, logger: usize, stamp: Stamp, values: &[(usize, f64)], now: Moment) -> Decided {
        let mut decided = Decided::default();
        let watched = &mut self.loggers[logger];
        watched.last_line = now.mono;
        watched.disconnected = None;
        let first = watched.first_channel;
        for &(index, raw_v) in values {
            decided.readings.extend(self.channels[first + index].take(raw_v, stamp, now.mono));
        }
        self.judge(now, &mut decided);
        decided
    }

    /// Learns that a logger's port is not open, and why.
    pub fn disconnected(&mut self, logger: usize, why: String) {
        self.loggers[logger].disconnected = Some(why);
    }

    /// Learns how much room there is for the record.
    pub fn set_room(&mut self, room: RoomFigures) {
        self.room = Some(room);
    }

    /// Learns what the tide table says, at an interval's end; `None` where there can be none. It's judged from the
    /// next tick on.
    pub fn forecast(&mut self, table: Option<&TideTable>, now: Mono) {
        self.ahead = Ahead::new(&self.rails, table, self.zone, now);
    }

    /// Lets time pass: delays run out, figures grow old, silence is noticed.
    pub fn tick(&mut self, now: Moment) -> Decided {
        let mut decided = Decided::default();
        self.judge(now, &mut decided);
        decided
    }

    /// Does what a person asks for.
    pub fn request(&mut self, request: &Request, now: Moment) -> (Decided, Answer) {
        let mut decided = Decided::default();
        let result = match &request.action {
            RequestAction::Acknowledge { key } => self.acknowledge(key, &request.by, now, &mut decided),
        };
        let answer = match result {
            Ok(text) => Answer { done: true, text },
            Err(text) => Answer { done: false, text },
        };
        (decided, answer)
    }

    /// The present figures of everything that is watched.
    pub fn figures(&self, now: Mono) -> Figures {
        let mains = self.mains_channel.and_then(|i| self.channels[i].fresh(now));
        let fresh = |i: usize| self.channels[i].fresh(now);
        let mut figures = Figures {
            mains,
            loggers: self
                .loggers
                .iter()
                .map(|logger| LoggerFigures {
                    name: logger.name.clone(),
                    silent_for: now.since(logger.last_line),
                    sample_period: logger.sample_period,
                    disconnected: logger.disconnected.clone(),
                })
                .collect(),
            rails: self.rails.iter().map(|rail| rail.figures(mains, fresh)).collect(),
            room: self.room,
            ahead: self.ahead.figures(now).collect(),
            ..Figures::default()
        };
        for part in &self.parts {
            part.add_figures(mains, fresh, &mut figures);
        }
        figures
    }

    /// Every alarm as it stands.
    pub fn alarms(&self) -> impl Iterator<Item = &AlarmRecord> {
        self.ledger.records()
    }

    fn judge(&mut self, now: Moment, decided: &mut Decided) {
        let figures = self.figures(now.mono);
        self.ledger.judge(&figures, now, decided);
    }

    fn acknowledge(
        &mut self,
        key: &AlarmKey,
        by: &str,
        now: Moment,
        decided: &mut Decided,
    ) -> Result<String, String> {
        let state = self.ledger.apply(key, Event::Acknowledge, by, now, decided)?;
        Ok(match state {
            State::Normal => format!("{key} is acknowledged; it had returned already and is normal now."),
            _ => format!("{key} is acknowledged; it stays active until its condition goes away."),
        })
    }
}

#[cfg(test)]
mod tests;
