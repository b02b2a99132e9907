//! The reading thread: opens the port, reads it, and opens it again when it was lost.

use std::convert::Infallible;
use std::io::{self, Read};
use std::path::PathBuf;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

use tokio::sync::mpsc;

use super::Stop;
use super::opening::{Opener, back_off};
use crate::clock::Clock;
use crate::logger::{Decoder, FromLogger, LoggerEvent};

/// How much one read takes: what the kernel's line discipline holds.
const CHUNK: usize = 4096;

/// How soon a wait looks again at a clock that may be simulated.
const CLOCK_LOOK: Duration = Duration::from_millis(20);

/// How soon a full channel is tried again.
const FULL_LOOK: Duration = Duration::from_millis(1);

/// The thread is to end: a stop, or nobody listens any more.
#[derive(Debug)]
pub(super) struct Ended;

/// Where a thread says things; it waits while there is no room.
pub(super) struct Outlet {
    pub(super) logger: usize,
    pub(super) clock: Clock,
    pub(super) events: mpsc::Sender<FromLogger>,
    pub(super) stop: Arc<Stop>,
    /// Raised whenever the thread shows that it lives.
    pub(super) beat: Arc<AtomicU64>,
}

impl Outlet {
    /// Says what happened just now; fails when the thread is to end.
    pub(super) fn say(&self, what: LoggerEvent) -> Result<(), Ended> {
        self.send(FromLogger { logger: self.logger, received: self.clock.now(), what })
    }

    fn send(&self, mut event: FromLogger) -> Result<(), Ended> {
        loop {
            self.live();
            match self.events.try_send(event) {
                Ok(()) => return Ok(()),
                Err(mpsc::error::TrySendError::Closed(_)) => return Err(Ended),
                Err(mpsc::error::TrySendError::Full(back)) if !self.stop.wait(FULL_LOOK) => event = back,
                Err(mpsc::error::TrySendError::Full(_)) => return Err(Ended),
            }
        }
    }

    fn live(&self) {
        self.beat.fetch_add(1, Ordering::Relaxed);
    }

    /// Waits on the given clock; fails when the thread is to end.
    fn wait(&self, span: Duration) -> Result<(), Ended> {
        let until = self.clock.now().mono + span;
        while self.clock.now().mono < until {
            self.live();
            if self.stop.wait(CLOCK_LOOK) || self.events.is_closed() {
                return Err(Ended);
            }
        }
        Ok(())
    }
}

/// The state of the reading thread.
pub(super) struct Reader {
    port: PathBuf,
    baud: u32,
    decoder: Decoder,
    outlet: Outlet,
    opener: Arc<Opener>,
}

/// How a spell of reading ended.
struct Lost {
    why: String,
    /// Whether any byte had come.
    heard: bool,
}

impl Reader {
    pub(super) fn new(
        port: PathBuf,
        baud: u32,
        channels: &[String],
        outlet: Outlet,
        opener: Arc<Opener>,
    ) -> Self {
        let decoder = Decoder::new(outlet.logger, channels);
        Reader { port, baud, decoder, outlet, opener }
    }

    /// Reads until it is to end.
    pub(super) fn read(mut self) {
        let Err(Ended) = self.read_for_ever();
    }

    fn read_for_ever(&mut self) -> Result<Infallible, Ended> {
        let mut failures = 0;
        let mut said = None;
        loop {
            self.outlet.live();
            let why = match (self.opener)(&self.port, self.baud) {
                Ok(opened) => {
                    said = None;
                    self.say(LoggerEvent::Connected { port: opened.port })?;
                    let lost = self.read_until_lost(opened.source)?;
                    // A port that opens but never says a word is no better than one that doesn't open.
                    if lost.heard {
                        failures = 0;
                    }
                    lost.why
                }
                Err(why) => why,
            };
            // The same reason at each try is said once.
            if said.as_ref() != Some(&why) {
                self.say(LoggerEvent::Disconnected { why: why.clone() })?;
                said = Some(why);
            }
            self.outlet.wait(back_off(failures))?;
            failures = failures.saturating_add(1);
        }
    }

    fn read_until_lost(&mut self, mut source: Box<dyn Read + Send>) -> Result<Lost, Ended> {
        self.decoder.rejoin();
        let mut buffer = [0; CHUNK];
        let mut events = Vec::new();
        let mut heard = false;
        loop {
            self.outlet.live();
            let read = source.read(&mut buffer);
            if self.outlet.stop.is_stopped() || self.outlet.events.is_closed() {
                return Err(Ended);
            }
            match read {
                Ok(n @ 1..) => {
                    heard = true;
                    self.decoder.feed(&buffer[..n], self.outlet.clock.now(), &mut events);
                    for event in events.drain(..) {
                        self.outlet.send(event)?;
                    }
                }
                Ok(0) => return Ok(Lost { why: self.hung_up("end of data"), heard }),
                Err(error) => match error.kind() {
                    io::ErrorKind::TimedOut | io::ErrorKind::Interrupted | io::ErrorKind::WouldBlock => {}
                    _ => return Ok(Lost { why: self.hung_up(&error.to_string()), heard }),
                },
            }
        }
    }

    fn say(&self, what: LoggerEvent) -> Result<(), Ended> {
        self.outlet.say(what)
    }

    fn hung_up(&self, said: &str) -> String {
        format!(
            "{} was lost ({said}): if nobody unplugged the logger, look at its cable, hub and power",
            self.port.display()
        )
    }
}
