//! A bench for whole-program tests: a folder with a config, a pseudo-terminal that plays the logger, the built binary.
#![allow(
    dead_code,
    unreachable_pub,
    clippy::print_stderr,
    reason = "each test program uses its own part of the bench"
)]

pub mod peers;
pub mod receiver;

use std::fmt::Write as _;
use std::fs::File;
use std::io::Write as _;
use std::os::fd::OwnedFd;
use std::os::unix::fs::OpenOptionsExt as _;
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::time::{Duration, Instant};

use nix::fcntl::OFlag;

/// A state is waited for at most this long; generous, since timing never fails a test, only a state that never comes.
pub const PATIENCE: Duration = Duration::from_secs(60);

/// The pseudo-terminal's near end: what a logger's firmware would write to.
pub struct Line {
    near: File,
    /// Held open so that the near end never sees a hang-up while nobody reads.
    _far: File,
    device: PathBuf,
    seq: u32,
    started: Instant,
}

impl Line {
    pub fn new() -> Self {
        // Close-on-exec from the first moment: a child that inherited the near end would keep the line plugged in.
        // Non-blocking, since a daemon that doesn't read must fail a test, not hang it.
        let flags = OFlag::O_RDWR | OFlag::O_NOCTTY | OFlag::O_CLOEXEC | OFlag::O_NONBLOCK;
        let near = nix::pty::posix_openpt(flags).expect("a pseudo-terminal");
        nix::pty::grantpt(&near).expect("granted");
        nix::pty::unlockpt(&near).expect("unlocked");
        let device = PathBuf::from(nix::pty::ptsname_r(&near).expect("a named far end"));
        let far = std::fs::OpenOptions::new()
            .read(true)
            .write(true)
            .custom_flags(OFlag::O_NOCTTY.bits())
            .open(&device)
            .expect("its far end");
        let mut raw = nix::sys::termios::tcgetattr(&far).expect("its settings");
        nix::sys::termios::cfmakeraw(&mut raw);
        nix::sys::termios::tcsetattr(&far, nix::sys::termios::SetArg::TCSANOW, &raw).expect("raw");
        Line { near: File::from(OwnedFd::from(near)), _far: far, device, seq: 0, started: Instant::now() }
    }

    /// The device that the daemon opens.
    pub fn device(&self) -> PathBuf {
        self.device.clone()
    }

    /// Sends one good line with the logger's own milliseconds.
    pub fn send(&mut self, values: &[(&str, i64)]) {
        let ms = self.started.elapsed().as_millis() as u64;
        self.send_at(ms, values);
    }

    pub fn send_at(&mut self, ms: u64, values: &[(&str, i64)]) {
        self.seq += 1;
        let line = tide_line(self.seq, ms, values);
        self.raw(line.as_bytes());
    }

    /// Sends bytes as they are.
    pub fn raw(&mut self, bytes: &[u8]) {
        let mut rest = bytes;
        wait_for("the pseudo-terminal takes bytes", || {
            match self.near.write(rest) {
                Ok(written) => rest = &rest[written..],
                Err(full) if full.kind() == std::io::ErrorKind::WouldBlock => {}
                Err(error) => panic!("the pseudo-terminal: {error}"),
            }
            rest.is_empty().then_some(())
        });
    }
}

/// A receiver of notices for tests that have no runtime of their own.
pub struct Phone {
    runtime: tokio::runtime::Runtime,
    receiver: receiver::TestReceiver,
}

impl Phone {
    pub fn start() -> Self {
        let runtime =
            tokio::runtime::Builder::new_multi_thread().worker_threads(1).enable_all().build().unwrap();
        let receiver = runtime.block_on(receiver::TestReceiver::start(receiver::Mode::Ok));
        Phone { runtime, receiver }
    }

    pub fn answer(&mut self, mode: receiver::Mode) {
        self.runtime.block_on(self.receiver.set(mode));
    }

    pub fn url(&self) -> String {
        self.receiver.url()
    }

    /// The notices that it took, in the order in which they came.
    pub fn notices(&self) -> Vec<serde_json::Value> {
        self.receiver
            .requests()
            .iter()
            .filter(|request| request.taken)
            .map(receiver::Recorded::json)
            .collect()
    }
}

/// A tide line made here from its description, independently of the program's own printer.
pub fn tide_line(seq: u32, ms: u64, values: &[(&str, i64)]) -> String {
    let mut body = format!("{seq} {ms}");
    for (channel, millivolts) in values {
        write!(body, " {channel}={millivolts}").unwrap();
    }
    format!("@{body}*{:04X}\n", crc_ccitt_false(body.as_bytes()))
}

/// CRC-16/CCITT-FALSE (IBM-3740): polynomial 0x1021, start 0xFFFF, bit by bit.
pub fn crc_ccitt_false(bytes: &[u8]) -> u16 {
    bytes.iter().fold(0xFFFF, |crc, byte| {
        (0..8).fold(crc ^ (u16::from(*byte) << 8), |crc, _| {
            if crc & 0x8000 == 0 { crc << 1 } else { (crc << 1) ^ 0x1021 }
        })
    })
}

/// A folder of its own with a config, and commands run in it.
pub struct Bench {
    pub folder: tempfile::TempDir,
}

impl Drop for Bench {
    fn drop(&mut self) {
        if std::thread::panicking() {
            eprintln!("the daemon's log:\n{}", self.log());
        }
    }
}

impl Bench {
    /// A hall: mains and its amplifier's reservoir projected from 452 V at 220 V, limit 480 V; delays short enough
    /// for a test.
    pub fn hall(device: &Path, webhook: &str) -> Self {
        let bench = Bench { folder: tempfile::tempdir().expect("a folder") };
        bench.write_config(&format!(
            r#"
[site]
name = "hall"
time_zone = "Europe/Lisbon"
declared_v = 230

[store]
path = "hall.db"
commit_every = "1 s"

[[logger]]
name = "bench"
port = "{}"

[[channel]]
name = "mains"
quantity = "mains_rms"
sample_period_ms = 100
accuracy_pct = 0.2
accuracy_v = 0.1

[[channel]]
name = "hall.reservoir"
quantity = "rail"
amplifier = "hall"
node = "reservoir"
sample_period_ms = 100

[[amplifier]]
name = "hall"
[amplifier.measured]
mains_v = 220
rail_v = 452
node = "reservoir"
loading = "idle"
meter_pct = 0.5
[[amplifier.limit]]
node = "reservoir"
max_v = 480
why = "anode supply limit"

[[alarm]]
condition = "rail-high"
on_delay = "1 s"
off_delay = "1 s"

[[receiver]]
name = "phone"
webhook = "{webhook}"
"#,
            device.display()
        ));
        bench
    }

    pub fn config(&self) -> PathBuf {
        self.folder.path().join("railtide.toml")
    }

    pub fn database(&self) -> PathBuf {
        let text = std::fs::read_to_string(self.config()).unwrap();
        let disk = if text.contains("disk/hall.db") { "disk/hall.db" } else { "hall.db" };
        self.folder.path().join(disk)
    }

    pub fn write_config(&self, text: &str) {
        std::fs::write(self.config(), text).expect("a config");
    }

    pub fn change_config(&self, from: &str, to: &str) {
        let text = std::fs::read_to_string(self.config()).unwrap();
        assert!(text.contains(from), "the config holds {from}");
        self.write_config(&text.replace(from, to));
    }

    fn command(&self, arguments: &[&str]) -> Command {
        let mut command = Command::new(env!("CARGO_BIN_EXE_railtide"));
        command.args(arguments).arg("--config").arg(self.config()).current_dir(self.folder.path());
        command.env_remove("RAILTIDE_CONFIG").env_remove("RAILTIDE_LOG");
        command
    }

    /// Runs a command to its end.
    pub fn run(&self, arguments: &[&str]) -> Output {
        self.command(arguments).output().expect("the binary runs")
    }

    /// Runs a command that must succeed; its standard output.
    pub fn say(&self, arguments: &[&str]) -> String {
        let output = self.run(arguments);
        assert!(output.status.success(), "{arguments:?}: {}", String::from_utf8_lossy(&output.stderr));
        String::from_utf8(output.stdout).expect("text")
    }

    pub fn json(&self, arguments: &[&str]) -> serde_json::Value {
        let mut with_format = arguments.to_vec();
        with_format.extend(["--format", "json"]);
        serde_json::from_str(&self.say(&with_format)).expect("JSON")
    }

    /// Starts the daemon; its log goes to `log.txt` in the folder.
    pub fn start(&self) -> Daemon {
        self.start_with(self.command(&["run"]))
    }

    pub fn start_with(&self, mut command: Command) -> Daemon {
        let log = std::fs::OpenOptions::new().create(true).append(true).open(self.log_file()).unwrap();
        let child = command
            .stdin(Stdio::null())
            .stdout(Stdio::null())
            .stderr(log)
            .spawn()
            .expect("the daemon starts");
        Daemon { child }
    }

    pub fn log_file(&self) -> PathBuf {
        self.folder.path().join("log.txt")
    }

    pub fn log(&self) -> String {
        std::fs::read_to_string(self.log_file()).unwrap_or_default()
    }

    /// A read-only look into the record.
    pub fn database_connection(&self) -> Option<rusqlite::Connection> {
        let flags = rusqlite::OpenFlags::SQLITE_OPEN_READ_ONLY | rusqlite::OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let connection = rusqlite::Connection::open_with_flags(self.database(), flags).ok()?;
        connection.busy_timeout(Duration::from_secs(5)).ok()?;
        Some(connection)
    }

    /// One number out of the record; `None` while the file or the table isn't there yet.
    pub fn count(&self, sql: &str) -> Option<i64> {
        self.database_connection()?.query_row(sql, [], |row| row.get(0)).ok()
    }

    /// The state of an alarm as `railtide alarm list --all` tells it.
    pub fn alarm_state(&self, alarm: &str) -> Option<String> {
        let output = self.run(&["alarm", "list", "--all", "--format", "json"]);
        let list: serde_json::Value = serde_json::from_slice(&output.stdout).ok()?;
        let line = list["alarms"].as_array()?.iter().find(|line| line["alarm"] == alarm)?.clone();
        Some(line["state"].as_str()?.to_owned())
    }
}

/// A running daemon; killed when dropped.
pub struct Daemon {
    child: Child,
}

impl Daemon {
    pub fn pid(&self) -> u32 {
        self.child.id()
    }

    /// Sends a signal by its name (`TERM`, `INT`, `KILL`) to this process alone.
    pub fn signal(&self, name: &str) {
        let status =
            Command::new("kill").arg(format!("-{name}")).arg(self.pid().to_string()).status().unwrap();
        assert!(status.success(), "kill -{name}");
    }

    /// Asks it to stop and waits until it has.
    pub fn stop(self) -> std::process::ExitStatus {
        self.signal("TERM");
        self.wait()
    }

    /// Waits for its end.
    pub fn wait(mut self) -> std::process::ExitStatus {
        self.child.wait().expect("the daemon ends")
    }

    /// SIGKILL: as a power cut, but for the file system's own buffers.
    pub fn kill(mut self) {
        self.child.kill().expect("killed");
        self.child.wait().expect("the daemon ends");
    }

    pub fn is_running(&mut self) -> bool {
        self.child.try_wait().expect("a state").is_none()
    }
}

impl Drop for Daemon {
    fn drop(&mut self) {
        let _ = self.child.kill();
        let _ = self.child.wait();
    }
}

/// Waits until `state` gives something; panics with `what` if it never does.
pub fn wait_for<T>(what: &str, mut state: impl FnMut() -> Option<T>) -> T {
    let began = Instant::now();
    loop {
        if let Some(found) = state() {
            return found;
        }
        assert!(began.elapsed() < PATIENCE, "it never came: {what}");
        std::thread::sleep(Duration::from_millis(10));
    }
}
