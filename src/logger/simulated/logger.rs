//! The simulated logger itself: its thread, its port, and the hand that plays with it.

use std::io;
use std::path::PathBuf;
use std::sync::{Arc, Mutex, MutexGuard};
use std::thread::{self, JoinHandle};
use std::time::Duration;

use super::hall::Hall;
use super::lines::{Fault, LineMaker};
use super::pty::{Pty, Written, point_link, remove_link};
use crate::clock::Clock;
use crate::logger::stop::Stop;
use crate::quantity::{Millivolts, Mono, Utc};

/// How soon a full or unheard port is tried again, and a clock that may be moved by hand is looked at.
const LOOK: Duration = Duration::from_millis(1);

/// How long a live line waits for a reader that doesn't keep up, before the rest of it is let go.
const PATIENCE_LOOKS: u32 = 100;

/// A hall that the logger measures as time goes by.
#[derive(Clone, Debug)]
pub struct LiveHall {
    /// Which hall.
    pub hall: Hall,
    /// The hall's time when the logger starts.
    pub from: Utc,
    /// How much faster the hall's time runs than the clock: 60 shows an hour in a minute.
    pub speed: f64,
    /// From line to line, by the clock.
    pub period: Duration,
    /// The channel that shows the mains.
    pub mains_channel: String,
    /// The channel that shows the rail, if any does.
    pub rail_channel: Option<String>,
    /// Faults that come by themselves, in turn; none if empty.
    pub faults: Vec<Fault>,
    /// After how many lines the next one of them comes; 0 counts as 1.
    pub fault_every: u32,
}

impl LiveHall {
    /// The hall with this seed from `from` on, in its own time, one line a second with `mains` and `hall.reservoir`.
    pub fn new(hall: Hall, from: Utc) -> Self {
        LiveHall {
            hall,
            from,
            speed: 1.0,
            period: Duration::from_secs(1),
            mains_channel: "mains".to_owned(),
            rail_channel: Some("hall.reservoir".to_owned()),
            faults: Vec::new(),
            fault_every: 60,
        }
    }

    fn values(&self, since_start: Duration) -> Vec<(&str, Option<i32>)> {
        let hall_ms = since_start.as_secs_f64() * 1000.0 * self.speed;
        let state = self.hall.at(Utc(self.from.0.saturating_add(hall_ms as i64)));
        let millivolts = |volts| Millivolts::from_volts(volts).map(|mv| mv.0);
        let mains = (self.mains_channel.as_str(), millivolts(state.mains_v));
        let rail = self.rail_channel.as_deref().map(|name| (name, millivolts(state.rail_v)));
        std::iter::once(mains).chain(rail).collect()
    }
}

/// A logger on a pseudo-terminal. Like a real one it doesn't care whether anybody listens: lines that nobody hears are
/// gone. Dropping it unplugs it and removes its link.
#[derive(Debug)]
pub struct SimulatedLogger {
    shared: Arc<Shared>,
    thread: Option<JoinHandle<()>>,
}

#[derive(Debug)]
struct Shared {
    clock: Clock,
    start: Mono,
    link: Option<PathBuf>,
    stop: Stop,
    state: Mutex<State>,
}

#[derive(Debug)]
struct State {
    /// `None` while it is unplugged.
    pty: Option<Pty>,
    maker: LineMaker,
}

impl SimulatedLogger {
    /// Starts a logger that measures a hall. At `link`, if given, a symbolic link leads to its port.
    ///
    /// # Errors
    /// When no pseudo-terminal can be had, the link can't be made, or a channel's name can't stand in a tide line.
    pub fn start(live: LiveHall, link: Option<PathBuf>, clock: Clock) -> io::Result<Self> {
        let mut logger = Self::by_hand(live.hall.seed, link, clock)?;
        // A name that can't be written is refused here rather than at each line.
        LineMaker::new(0).next_line(0, &live.values(Duration::ZERO)).map_err(io::Error::other)?;
        let shared = Arc::clone(&logger.shared);
        let thread = thread::Builder::new().name("simulated logger".to_owned());
        logger.thread = Some(thread.spawn(move || shared.live(&live))?);
        Ok(logger)
    }

    /// A logger that says only what it is told to, by [`say`](Self::say) and [`send`](Self::send).
    ///
    /// # Errors
    /// When no pseudo-terminal can be had or the link can't be made.
    pub fn by_hand(seed: u64, link: Option<PathBuf>, clock: Clock) -> io::Result<Self> {
        let state = Mutex::new(State { pty: None, maker: LineMaker::new(seed) });
        let start = clock.now().mono;
        let shared = Arc::new(Shared { clock, start, link, stop: Stop::default(), state });
        let logger = SimulatedLogger { shared, thread: None };
        logger.plug_in()?;
        Ok(logger)
    }

    /// Where it is to be found: its link, or without one its device, which changes when it is plugged in anew.
    /// `None` while it is unplugged and has no link.
    pub fn port(&self) -> Option<PathBuf> {
        self.shared.link.clone().or_else(|| self.device())
    }

    /// The pseudo-terminal's path; `None` while it is unplugged.
    pub fn device(&self) -> Option<PathBuf> {
        self.shared.lock().pty.as_ref().map(|pty| pty.device().to_owned())
    }

    /// Asks for a fault; it befalls the next line.
    pub fn inject(&self, fault: Fault) {
        self.shared.lock().maker.ask_for(fault);
    }

    /// Says one line with these values in millivolts (`None`: no value now), as [`send`](Self::send) does.
    ///
    /// # Errors
    /// When it is unplugged, or the line can't be written: see [`crate::logger::Unwritable`].
    pub fn say(&self, values: &[(&str, Option<i32>)]) -> io::Result<()> {
        let line = self.shared.next_line(self.shared.since_start(), values)?;
        self.send(&line)
    }

    /// Sends any bytes, and waits until somebody has opened the port and all of them are taken.
    ///
    /// # Errors
    /// When it is unplugged.
    pub fn send(&self, bytes: &[u8]) -> io::Result<()> {
        let mut rest = bytes;
        while !rest.is_empty() {
            match self.shared.write(rest)? {
                Written::Bytes(n) => rest = &rest[n..],
                Written::Full | Written::Unheard => thread::sleep(LOOK),
            }
        }
        Ok(())
    }

    /// Pulls the plug: the link goes, and the other end hangs up.
    pub fn unplug(&self) {
        // In this order: once the device is gone its path may become somebody else's, and the link would lead there.
        self.remove_link();
        self.shared.lock().pty = None;
    }

    /// Plugs it in (anew), under another device if the old one is still held by a reader; the link is pointed there.
    /// A live logger's numbers go on; ask for [`Fault::Restart`] if they shouldn't.
    ///
    /// # Errors
    /// When no pseudo-terminal can be had or the link can't be made.
    pub fn plug_in(&self) -> io::Result<()> {
        let pty = Pty::open()?;
        if let Some(link) = &self.shared.link {
            point_link(link, pty.device())?;
        }
        self.shared.lock().pty = Some(pty);
        Ok(())
    }

    fn remove_link(&self) {
        if let (Some(link), Some(device)) = (&self.shared.link, self.device()) {
            remove_link(link, &device);
        }
    }
}

impl Drop for SimulatedLogger {
    fn drop(&mut self) {
        self.shared.stop.stop();
        if let Some(thread) = self.thread.take() {
            // Its panic has been reported by its own thread.
            let _ = thread.join();
        }
        self.remove_link();
    }
}

impl Shared {
    /// Says a line each period until it is stopped. Lines that fell due together, after the clock jumped, are said
    /// together, each with its own time.
    fn live(&self, live: &LiveHall) {
        let mut faults = live.faults.iter().cycle();
        for n in 0u32.. {
            let due = live.period.saturating_mul(n);
            if self.wait_until(due) {
                return;
            }
            if n > 0 && n.is_multiple_of(live.fault_every.max(1)) {
                faults.next().into_iter().for_each(|&fault| self.lock().maker.ask_for(fault));
            }
            // Names were tried at the start, and while it is unplugged nothing is to be done.
            if let Ok(line) = self.next_line(due, &live.values(due)) {
                let _ = self.offer(&line);
            }
        }
    }

    /// Writes a line as far as a reader takes it in time.
    fn offer(&self, line: &[u8]) -> io::Result<()> {
        let mut rest = line;
        for _ in 0..PATIENCE_LOOKS {
            match self.write(rest)? {
                Written::Bytes(n) => rest = &rest[n..],
                Written::Unheard => return Ok(()),
                Written::Full if self.stop.wait(LOOK) => return Ok(()),
                Written::Full => {}
            }
            if rest.is_empty() {
                return Ok(());
            }
        }
        Ok(())
    }

    /// Waits until `due` after the start; whether it is to stop instead.
    fn wait_until(&self, due: Duration) -> bool {
        let due = self.start + due;
        loop {
            let left = due.since(self.clock.now().mono);
            if left.is_zero() {
                return self.stop.is_stopped();
            }
            let look = match &self.clock {
                Clock::System(_) => left,
                Clock::Simulated(_) => LOOK,
            };
            if self.stop.wait(look) {
                return true;
            }
        }
    }

    fn next_line(&self, at: Duration, values: &[(&str, Option<i32>)]) -> io::Result<Vec<u8>> {
        self.lock().maker.next_line(at.as_millis() as u64, values).map_err(io::Error::other)
    }

    fn write(&self, bytes: &[u8]) -> io::Result<Written> {
        let unplugged = || io::Error::new(io::ErrorKind::NotConnected, "the simulated logger is unplugged");
        self.lock().pty.as_mut().ok_or_else(unplugged)?.write(bytes)
    }

    fn since_start(&self) -> Duration {
        self.clock.now().mono.since(self.start)
    }

    fn lock(&self) -> MutexGuard<'_, State> {
        // The state is consistent between statements, so a panic elsewhere doesn't spoil it.
        self.state.lock().unwrap_or_else(|poisoned| poisoned.into_inner())
    }
}

#[cfg(test)]
mod tests {
    use std::fs::File;
    use std::io::{BufRead, BufReader, Read};
    use std::path::Path;

    use super::*;

    fn open(path: &Path) -> File {
        use std::os::unix::fs::OpenOptionsExt;
        let noctty = nix::fcntl::OFlag::O_NOCTTY.bits();
        File::options().read(true).write(true).custom_flags(noctty).open(path).unwrap()
    }

    #[test]
    fn a_plain_reader_gets_the_bytes_unchanged() {
        let clock = Clock::simulated(Utc(0)).0;
        let logger = SimulatedLogger::by_hand(1, None, clock).unwrap();
        let mut port = open(&logger.port().unwrap());
        let bytes: Vec<u8> = (0..=255).collect();
        logger.send(&bytes).unwrap();
        let mut got = [0; 256];
        port.read_exact(&mut got).unwrap();
        assert_eq!(got[..], bytes);
        // Opened a second time it is as it was.
        drop(port);
        let mut port = open(&logger.port().unwrap());
        logger.send(b"\r\n@\x03\x04").unwrap();
        let mut got = [0; 5];
        port.read_exact(&mut got).unwrap();
        assert_eq!(&got, b"\r\n@\x03\x04");
    }

    #[test]
    fn live_lines_follow_the_clock_and_the_hall_and_repeat_by_seed() {
        let scene = || {
            let (clock, hand) = Clock::simulated(Utc(0));
            let live = LiveHall { speed: 60.0, ..LiveHall::new(Hall::new(5), Utc(1_000_000_000)) };
            let logger = SimulatedLogger::start(live, None, clock).unwrap();
            let port = open(&logger.port().unwrap());
            hand.advance(Duration::from_secs(4));
            let lines: Vec<String> = BufReader::new(port).lines().map(Result::unwrap).take(3).collect();
            (logger, lines)
        };
        let (_first, lines) = scene();
        // The first line may have gone before the port was open; the numbers tell.
        for line in &lines {
            let parsed = crate::logger::TideLine::parse(line.as_bytes()).unwrap();
            assert_eq!(parsed.logger_ms, 1000 * u64::from(parsed.sequence));
            let hall = Hall::new(5).at(Utc(1_000_000_000 + 60 * parsed.logger_ms as i64));
            let mains = format!(" mains={:.0} ", hall.mains_v * 1000.0);
            assert!(line.contains(&mains), "{line} should hold {mains}");
        }
        let (_second, again) = scene();
        let common: Vec<_> = lines.iter().filter(|line| again.contains(line)).collect();
        assert!(common.len() >= 2, "{lines:?} {again:?}");
    }

    #[test]
    fn the_link_follows_the_plug_and_goes_with_the_logger() {
        let folder = tempfile::tempdir().unwrap();
        let link = folder.path().join("logger");
        let clock = Clock::simulated(Utc(0)).0;
        let logger = SimulatedLogger::by_hand(1, Some(link.clone()), clock).unwrap();
        assert_eq!(std::fs::read_link(&link).unwrap(), logger.device().unwrap());
        let held = open(&link);
        let before = logger.device().unwrap();
        logger.unplug();
        assert!(link.symlink_metadata().is_err());
        assert_eq!(logger.say(&[("mains", Some(1))]).unwrap_err().kind(), io::ErrorKind::NotConnected);
        logger.plug_in().unwrap();
        assert_ne!(logger.device().unwrap(), before);
        assert_eq!(std::fs::read_link(&link).unwrap(), logger.device().unwrap());
        drop(held);
        drop(logger);
        assert!(link.symlink_metadata().is_err());
    }

    #[test]
    fn a_file_in_the_links_place_is_left_alone() {
        let file = tempfile::NamedTempFile::new().unwrap();
        let clock = Clock::simulated(Utc(0)).0;
        let refused = SimulatedLogger::by_hand(1, Some(file.path().to_owned()), clock).unwrap_err();
        assert!(refused.to_string().contains("is no link"), "{refused}");
        assert!(file.path().exists());
    }

    #[test]
    fn a_name_that_no_tide_line_can_hold_is_refused_at_the_start() {
        let live = LiveHall { mains_channel: "a b".to_owned(), ..LiveHall::new(Hall::new(1), Utc(0)) };
        let refused = SimulatedLogger::start(live, None, Clock::system()).unwrap_err();
        assert!(refused.to_string().contains("\"a b\""), "{refused}");
    }
}
