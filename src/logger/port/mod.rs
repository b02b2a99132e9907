//! One logger's serial port: the thread that reads it, and the one that watches over the reading.
//!
//! A read of a broken driver can hang for ever, time-out or not, and nothing can end such a thread. So a second
//! thread looks after the first one's heartbeat: it says when the reading hangs, and after a longer while leaves the
//! hung thread behind and starts another. That one has a chance once the adapter was plugged in anew, under another
//! device behind the same link; a driver that is merely slow gets the time to come back by itself.

mod opening;
mod reader;

use std::path::PathBuf;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, Condvar, Mutex};
use std::thread::{self, JoinHandle};
use std::time::Duration;
use std::{io, mem};

use tokio::sync::mpsc;

pub use self::opening::back_off;
use self::opening::{Opener, open_port};
use self::reader::{Outlet, Reader};
use super::LoggerEvent;
use crate::clock::Clock;
use crate::config::LoggerSettings;
use crate::quantity::Mono;

/// How often the reading thread's heartbeat is looked at.
const LOOK_EVERY: Duration = Duration::from_millis(200);

/// A read returns after a tenth of a second at the latest: one that is fifty times late hangs.
const HANGS_AFTER: Duration = Duration::from_secs(5);

/// When a hung thread is left behind and another one started.
const GIVE_UP_AFTER: Duration = Duration::from_secs(30);

/// A port that hangs each time must not cost a thread each time: with so many hung threads left behind, no other is
/// started until one of them ends.
const MOST_LEFT_BEHIND: usize = 4;

/// How long a stop waits for the reading thread.
const STOP_WITHIN: Duration = Duration::from_secs(2);

/// Starts to read the port of the logger with this index in [`crate::config::Site::loggers`].
///
/// The port is opened exclusively, tried again by [`back_off`] until it is there, and its path is resolved anew at
/// each try, so a link that points elsewhere afterwards is followed. While `events` is full the reading waits; what the
/// kernel's buffer can't hold meanwhile shows up as lost lines. The reading ends by [`PortHandle::stop`], or when the
/// receiver of `events` is gone.
///
/// `serialport` reports a hang-up before it hands out the last bytes, so the last line before an unplugging may be
/// missing.
///
/// # Errors
/// When no thread can be started.
pub fn spawn(
    index: usize,
    settings: &LoggerSettings,
    clock: Clock,
    events: mpsc::Sender<super::FromLogger>,
) -> io::Result<PortHandle> {
    spawn_with(index, settings, clock, events, Arc::new(open_port))
}

fn spawn_with(
    index: usize,
    settings: &LoggerSettings,
    clock: Clock,
    events: mpsc::Sender<super::FromLogger>,
    opener: Arc<Opener>,
) -> io::Result<PortHandle> {
    let stop = Arc::new(Stop::default());
    let keeper = Keeper {
        logger: index,
        name: settings.name.clone(),
        port: settings.port.clone(),
        baud: settings.baud,
        channels: settings.channels.iter().map(|c| c.name.clone()).collect(),
        clock,
        events,
        opener,
        stop: Arc::clone(&stop),
        left_behind: Vec::new(),
    };
    let thread =
        thread::Builder::new().name(format!("keep {}", settings.name)).spawn(move || keeper.keep())?;
    Ok(PortHandle { port: settings.port.clone(), stop, thread: Some(thread) })
}

/// A port that is being read. Dropping it ends the reading without waiting for its end.
#[derive(Debug)]
pub struct PortHandle {
    port: PathBuf,
    stop: Arc<Stop>,
    thread: Option<JoinHandle<Left>>,
}

/// A read that never returned.
#[derive(Debug, thiserror::Error)]
#[error(
    "a read of {port} has not returned, so its thread was left behind; it ends with the program. If that takes \
     long, unplug the adapter"
)]
pub struct StillHanging {
    /// The port, as configured.
    pub port: String,
}

/// How many reading threads were left behind.
type Left = usize;

impl PortHandle {
    /// Ends the reading and waits for its threads: about a tenth of a second, two seconds if a read hangs. It blocks,
    /// so async code calls it through `spawn_blocking`.
    ///
    /// # Errors
    /// When a thread hangs in a read and had to be left behind.
    pub fn stop(mut self) -> Result<(), StillHanging> {
        self.stop.stop();
        let thread = self.thread.take().expect("only stop takes the thread, and it takes self");
        match thread.join() {
            Ok(0) => Ok(()),
            Ok(_) => Err(StillHanging { port: self.port.display().to_string() }),
            Err(panic) => std::panic::resume_unwind(panic),
        }
    }
}

impl Drop for PortHandle {
    fn drop(&mut self) {
        self.stop.stop();
    }
}

/// Tells threads to end, and wakes them if they wait for it.
#[derive(Debug, Default)]
struct Stop {
    stopped: Mutex<bool>,
    bell: Condvar,
}

impl Stop {
    fn stop(&self) {
        *self.stopped.lock().unwrap_or_else(|poisoned| poisoned.into_inner()) = true;
        self.bell.notify_all();
    }

    fn is_stopped(&self) -> bool {
        self.wait(Duration::ZERO)
    }

    /// Waits up to `span` for the stop; whether it came.
    fn wait(&self, span: Duration) -> bool {
        let stopped = self.stopped.lock().unwrap_or_else(|poisoned| poisoned.into_inner());
        if *stopped || span.is_zero() {
            return *stopped;
        }
        let (stopped, _) = self
            .bell
            .wait_timeout_while(stopped, span, |stopped| !*stopped)
            .unwrap_or_else(|poisoned| poisoned.into_inner());
        *stopped
    }
}

/// The watching thread.
struct Keeper {
    logger: usize,
    name: String,
    port: PathBuf,
    baud: u32,
    channels: Vec<String>,
    clock: Clock,
    events: mpsc::Sender<super::FromLogger>,
    opener: Arc<Opener>,
    stop: Arc<Stop>,
    left_behind: Vec<Running>,
}

/// A reading thread.
struct Running {
    thread: JoinHandle<()>,
    stop: Arc<Stop>,
    beat: Arc<AtomicU64>,
}

enum Outcome {
    Ended,
    Hung,
}

impl Keeper {
    fn keep(mut self) -> Left {
        let outlet = self.outlet(Arc::clone(&self.stop), Arc::default());
        while !self.stop.is_stopped() {
            self.left_behind.retain(|running| !running.thread.is_finished());
            if self.left_behind.len() >= MOST_LEFT_BEHIND {
                self.stop.wait(LOOK_EVERY);
                continue;
            }
            let running = match self.start_reader() {
                Ok(running) => running,
                Err(error) => {
                    let why = format!("no thread can be started to read {}: {error}", self.port.display());
                    if outlet.say(LoggerEvent::Disconnected { why }).is_err() {
                        break;
                    }
                    self.stop.wait(GIVE_UP_AFTER);
                    continue;
                }
            };
            match self.watch(&running, &outlet) {
                Outcome::Ended => {
                    if let Err(panic) = running.thread.join() {
                        std::panic::resume_unwind(panic);
                    }
                    break;
                }
                Outcome::Hung => {
                    running.stop.stop();
                    self.left_behind.push(running);
                }
            }
        }
        self.left_behind.retain(|running| !running.thread.is_finished());
        self.left_behind.len()
    }

    fn start_reader(&self) -> io::Result<Running> {
        let stop = Arc::new(Stop::default());
        let beat = Arc::new(AtomicU64::new(0));
        let reader = Reader::new(
            self.port.clone(),
            self.baud,
            &self.channels,
            self.outlet(Arc::clone(&stop), Arc::clone(&beat)),
            Arc::clone(&self.opener),
        );
        let thread =
            thread::Builder::new().name(format!("read {}", self.name)).spawn(move || reader.read())?;
        Ok(Running { thread, stop, beat })
    }

    fn outlet(&self, stop: Arc<Stop>, beat: Arc<AtomicU64>) -> Outlet {
        Outlet { logger: self.logger, clock: self.clock.clone(), events: self.events.clone(), stop, beat }
    }

    /// Looks after one reading thread until it ends, is to end, or hangs for too long.
    fn watch(&self, running: &Running, outlet: &Outlet) -> Outcome {
        let mut watchdog = Watchdog::new(self.clock.now().mono);
        while !self.stop.wait(LOOK_EVERY) {
            if running.thread.is_finished() {
                return Outcome::Ended;
            }
            match watchdog.look(running.beat.load(Ordering::Relaxed), self.clock.now().mono) {
                Pulse::Beats => {}
                // Where saying fails, the next look ends this, too.
                Pulse::Hangs => drop(outlet.say(LoggerEvent::ReadHangs)),
                Pulse::GivenUp => {
                    let why = format!(
                        "the driver of {} doesn't answer: unplug the adapter and plug it in again, into another \
                         socket if that doesn't help",
                        self.port.display()
                    );
                    drop(outlet.say(LoggerEvent::Disconnected { why }));
                    return Outcome::Hung;
                }
            }
        }
        running.stop.stop();
        const STEP: Duration = Duration::from_millis(5);
        for _ in 0..STOP_WITHIN.as_millis() / STEP.as_millis() {
            if running.thread.is_finished() {
                return Outcome::Ended;
            }
            thread::sleep(STEP);
        }
        Outcome::Hung
    }
}

/// What the heartbeat says.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Pulse {
    Beats,
    /// It has stood still for [`HANGS_AFTER`]; said once.
    Hangs,
    /// It has stood still for [`GIVE_UP_AFTER`].
    GivenUp,
}

/// Judges a heartbeat, a count that a living thread raises several times a second. Only what was seen at two looks
/// counts, so a clock that jumps between them accuses nobody.
#[derive(Clone, Copy, Debug)]
struct Watchdog {
    beat: u64,
    since: Mono,
    said: bool,
}

impl Watchdog {
    fn new(now: Mono) -> Self {
        Watchdog { beat: 0, since: now, said: false }
    }

    fn look(&mut self, beat: u64, now: Mono) -> Pulse {
        if beat != self.beat {
            *self = Watchdog { beat, since: now, said: false };
        }
        let still = now.since(self.since);
        if still >= GIVE_UP_AFTER {
            Pulse::GivenUp
        } else if still >= HANGS_AFTER && !mem::replace(&mut self.said, true) {
            Pulse::Hangs
        } else {
            Pulse::Beats
        }
    }
}

#[cfg(test)]
mod tests {
    use std::io::Read;
    use std::path::Path;

    use super::opening::Opened;
    use super::*;
    use crate::clock::SimulatedClock;
    use crate::logger::{FromLogger, write_line};
    use crate::quantity::Utc;

    #[test]
    fn a_heart_that_stands_still_is_said_once_and_given_up_later() {
        let mut watchdog = Watchdog::new(Mono(0));
        let looks = [(1, 100), (1, 5_099), (1, 5_100), (1, 5_300), (2, 6_000), (2, 11_000), (2, 36_000)];
        let pulses: Vec<_> = looks.iter().map(|&(beat, ms)| watchdog.look(beat, Mono(ms))).collect();
        use Pulse::{Beats, GivenUp, Hangs};
        assert_eq!(pulses, [Beats, Beats, Hangs, Beats, Beats, Hangs, GivenUp]);
    }

    /// A port that says one line and then hangs in its read until it is let go.
    #[derive(Clone, Default)]
    struct Hanging {
        let_go: Arc<Stop>,
        opened: Arc<AtomicU64>,
        hanging: Arc<AtomicU64>,
    }

    impl Hanging {
        fn opener(&self) -> Arc<Opener> {
            let port = self.clone();
            Arc::new(move |_: &Path, _: u32| {
                port.opened.fetch_add(1, Ordering::Relaxed);
                let mut bytes = Vec::new();
                write_line(&mut bytes, 1, 10, []).expect("a short line");
                let source = HangingSource { port: port.clone(), bytes };
                Ok(Opened { port: "hanging".to_owned(), source: Box::new(source) })
            })
        }

        fn wait_until_hanging(&self, times: u64) {
            while self.hanging.load(Ordering::Acquire) < times {
                thread::sleep(Duration::from_millis(1));
            }
        }
    }

    struct HangingSource {
        port: Hanging,
        bytes: Vec<u8>,
    }

    impl Read for HangingSource {
        fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
            if self.bytes.is_empty() {
                self.port.hanging.fetch_add(1, Ordering::Release);
                while !self.port.let_go.wait(Duration::from_secs(3_600)) {}
            }
            let n = self.bytes.len();
            buffer[..n].copy_from_slice(&self.bytes);
            self.bytes.clear();
            Ok(n)
        }
    }

    fn settings() -> LoggerSettings {
        LoggerSettings {
            name: "bench".to_owned(),
            port: PathBuf::from("/dev/never-opened"),
            baud: 115_200,
            channels: Vec::new(),
        }
    }

    /// Moves the clock until the next event is there.
    fn next_later(events: &mut mpsc::Receiver<FromLogger>, hand: &SimulatedClock) -> LoggerEvent {
        loop {
            match events.try_recv() {
                Ok(event) => return event.what,
                Err(mpsc::error::TryRecvError::Empty) => {
                    thread::sleep(Duration::from_millis(2));
                    hand.advance(Duration::from_millis(50));
                }
                Err(mpsc::error::TryRecvError::Disconnected) => panic!("the reading ended early"),
            }
        }
    }

    fn next(events: &mut mpsc::Receiver<FromLogger>) -> LoggerEvent {
        events.blocking_recv().expect("the reading goes on").what
    }

    #[test]
    fn a_read_that_never_returns_is_noticed_and_left_behind_for_another_one() {
        let port = Hanging::default();
        let (clock, hand) = Clock::simulated(Utc(0));
        let (sender, mut events) = mpsc::channel(64);
        let handle = spawn_with(3, &settings(), clock, sender, port.opener()).unwrap();
        for times in 1..=2 {
            assert_eq!(next(&mut events), LoggerEvent::Connected { port: "hanging".to_owned() });
            assert!(matches!(next(&mut events), LoggerEvent::Sample(_)));
            port.wait_until_hanging(times);
            assert_eq!(next_later(&mut events, &hand), LoggerEvent::ReadHangs);
            let LoggerEvent::Disconnected { why } = next_later(&mut events, &hand) else {
                panic!("a port that was given up is disconnected");
            };
            assert!(why.contains("unplug"), "{why}");
        }
        let stopped = handle.stop();
        assert_eq!(stopped.unwrap_err().port, "/dev/never-opened");
        port.let_go.stop();
    }

    #[test]
    fn no_more_threads_are_left_behind_than_allowed() {
        let port = Hanging::default();
        let (clock, hand) = Clock::simulated(Utc(0));
        let (sender, mut events) = mpsc::channel(64);
        let handle = spawn_with(0, &settings(), clock, sender, port.opener()).unwrap();
        for times in 1..=MOST_LEFT_BEHIND as u64 {
            assert!(matches!(next(&mut events), LoggerEvent::Connected { .. }));
            assert!(matches!(next(&mut events), LoggerEvent::Sample(_)));
            port.wait_until_hanging(times);
            assert_eq!(next_later(&mut events, &hand), LoggerEvent::ReadHangs);
            assert!(matches!(next_later(&mut events, &hand), LoggerEvent::Disconnected { .. }));
        }
        // All are hung now: further minutes bring no other try.
        for _ in 0..100 {
            thread::sleep(Duration::from_millis(5));
            hand.advance(Duration::from_secs(60));
        }
        assert_eq!(port.opened.load(Ordering::Relaxed), MOST_LEFT_BEHIND as u64);
        assert!(events.try_recv().is_err());
        // Once they return, the port is tried again.
        port.let_go.stop();
        assert!(matches!(next(&mut events), LoggerEvent::Connected { .. }));
        handle.stop().unwrap();
    }
}
