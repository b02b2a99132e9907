//! Opening a port: the path to its device, the sentence that helps when that fails, and when to try again.

use std::fs;
use std::io::{self, Read};
use std::path::Path;
use std::time::Duration;

/// A read of the port waits this long for bytes, so that a stop is noticed.
const READ_TIMEOUT: Duration = Duration::from_millis(100);

/// An open port.
pub(super) struct Opened {
    /// The device behind the configured path.
    pub(super) port: String,
    /// Its bytes; `TimedOut` when none came.
    pub(super) source: Box<dyn Read + Send>,
}

/// Opens the port at a path with a baud rate, or says in one sentence what to do.
pub(super) type Opener = dyn Fn(&Path, u32) -> Result<Opened, String> + Send + Sync;

/// How long to wait after `failures` failed tries in a row (0 after a port was lost that had been heard): 1 s,
/// doubling to 30 s.
pub fn back_off(failures: u32) -> Duration {
    Duration::from_secs(1 << failures.min(5)).min(Duration::from_secs(30))
}

/// Opens a real port, exclusively.
pub(super) fn open_port(path: &Path, baud: u32) -> Result<Opened, String> {
    let device =
        fs::canonicalize(path).map_err(|error| cannot_open(path, error.kind(), &error.to_string()))?;
    if !is_device(&device).map_err(|error| cannot_open(path, error.kind(), &error.to_string()))? {
        return Err(format!(
            "{} is no serial port: see `railtide ports` for those there are",
            path.display()
        ));
    }
    let port = device.display().to_string();
    let opened = serialport::new(port.as_str(), baud).timeout(READ_TIMEOUT).exclusive(true).open();
    match opened {
        Ok(source) => Ok(Opened { port, source: Box::new(source) }),
        Err(error) => Err(match error.kind() {
            serialport::ErrorKind::NoDevice => in_use(path),
            serialport::ErrorKind::Io(kind) => cannot_open(path, kind, &error.description),
            _ => cannot_open(path, io::ErrorKind::Other, &error.description),
        }),
    }
}

#[cfg(unix)]
fn is_device(path: &Path) -> io::Result<bool> {
    use std::os::unix::fs::FileTypeExt;
    Ok(fs::metadata(path)?.file_type().is_char_device())
}

#[cfg(not(unix))]
fn is_device(_: &Path) -> io::Result<bool> {
    Ok(true)
}

fn cannot_open(path: &Path, kind: io::ErrorKind, said: &str) -> String {
    let path = path.display();
    match kind {
        io::ErrorKind::NotFound => format!(
            "{path} is not there: plug the logger in, try another cable (some carry power alone), and see \
             `railtide ports` for the ports there are"
        ),
        io::ErrorKind::PermissionDenied => format!(
            "{path} may not be opened by this user: add the user to the port's group (`ls -lL {path}` shows it, \
             often dialout: `sudo usermod -aG dialout NAME`), then log in again or restart the service"
        ),
        _ => format!(
            "{path} can't be opened ({said}): unplug the logger and plug it in again, and see `railtide ports` \
             for the ports there are"
        ),
    }
}

fn in_use(path: &Path) -> String {
    let path = path.display();
    format!(
        "{path} is in use by another program (another railtide, a serial terminal, a modem service): close that one \
         first; `fuser -v {path}` names it"
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_back_off_doubles_from_one_second_to_thirty() {
        let seconds: Vec<_> = (0..8).map(|failures| back_off(failures).as_secs()).collect();
        assert_eq!(seconds, [1, 2, 4, 8, 16, 30, 30, 30]);
        assert_eq!(back_off(u32::MAX).as_secs(), 30);
    }

    #[test]
    fn each_reason_gets_the_sentence_that_helps() {
        let port = Path::new("/dev/ttyACM0");
        let denied = cannot_open(port, io::ErrorKind::PermissionDenied, "");
        assert!(denied.contains("usermod -aG dialout"), "{denied}");
        let missing = open_port(Path::new("/nowhere/logger"), 115_200).err().unwrap();
        assert!(
            missing.contains("/nowhere/logger is not there") && missing.contains("railtide ports"),
            "{missing}"
        );
        let file = tempfile::NamedTempFile::new().unwrap();
        let no_port = open_port(file.path(), 115_200).err().unwrap();
        assert!(no_port.contains("no serial port"), "{no_port}");
        let not_a_tty = open_port(Path::new("/dev/null"), 115_200).err().unwrap();
        assert!(not_a_tty.contains("/dev/null can't be opened"), "{not_a_tty}");
    }
}
