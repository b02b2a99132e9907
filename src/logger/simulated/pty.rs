//! A pseudo-terminal: the simulated logger writes at one end, the other end is a serial port like any.

use std::fs::File;
use std::io::{self, Write};
use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};

use nix::errno::Errno;
use nix::fcntl::{FcntlArg, FdFlag, OFlag, fcntl};
use nix::pty::openpty;
use nix::sys::termios::{SetArg, cfmakeraw, tcgetattr, tcsetattr};
use nix::unistd::ttyname;

/// The logger's end. Dropping it hangs the other end up, as an unplugging does.
#[derive(Debug)]
pub(super) struct Pty {
    end: File,
    device: PathBuf,
}

/// What became of a write.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Written {
    /// So many bytes, at least one.
    Bytes(usize),
    /// The other end doesn't read, and the kernel's buffer is full.
    Full,
    /// Nobody has the other end open.
    Unheard,
}

impl Pty {
    pub(super) fn open() -> io::Result<Self> {
        let pair = openpty(None, None)?;
        // Raw from the start, so that no reader sees its own bytes echoed or line ends changed. The settings stay with
        // the terminal while this end is open; the other end is left to whoever opens it.
        let mut settings = tcgetattr(&pair.slave)?;
        cfmakeraw(&mut settings);
        tcsetattr(&pair.slave, SetArg::TCSANOW, &settings)?;
        let device = ttyname(&pair.slave)?;
        fcntl(&pair.master, FcntlArg::F_SETFD(FdFlag::FD_CLOEXEC))?;
        fcntl(&pair.master, FcntlArg::F_SETFL(OFlag::O_NONBLOCK))?;
        Ok(Pty { end: File::from(pair.master), device })
    }

    /// The path of the other end.
    pub(super) fn device(&self) -> &Path {
        &self.device
    }

    pub(super) fn write(&mut self, bytes: &[u8]) -> io::Result<Written> {
        match self.end.write(bytes) {
            Ok(0) => Ok(Written::Full),
            Ok(n) => Ok(Written::Bytes(n)),
            Err(error) if error.kind() == io::ErrorKind::WouldBlock => Ok(Written::Full),
            Err(error) if error.kind() == io::ErrorKind::Interrupted => Ok(Written::Full),
            // What Linux answers while the other end is closed; it may be opened again.
            Err(error) if error.raw_os_error() == Some(Errno::EIO as i32) => Ok(Written::Unheard),
            Err(error) => Err(error),
        }
    }
}

/// Makes `link` point to `device`, in one step, replacing an older link but nothing else.
pub(super) fn point_link(link: &Path, device: &Path) -> io::Result<()> {
    match link.symlink_metadata() {
        Ok(found) if !found.is_symlink() => {
            let why = format!("{} exists and is no link: choose another path", link.display());
            return Err(io::Error::new(io::ErrorKind::AlreadyExists, why));
        }
        Ok(_) => {}
        Err(error) if error.kind() == io::ErrorKind::NotFound => {}
        Err(error) => return Err(error),
    }
    let mut new = link.as_os_str().to_owned();
    new.push(format!(".{}.new", std::process::id()));
    let new = PathBuf::from(new);
    symlink(device, &new)?;
    std::fs::rename(&new, link).inspect_err(|_| drop(std::fs::remove_file(&new)))
}

/// Removes `link` if it still points to `device`.
pub(super) fn remove_link(link: &Path, device: &Path) {
    if std::fs::read_link(link).is_ok_and(|target| target == device) {
        // If it can't be removed it dangles, which readers take for an unplugged logger; there's no better way.
        let _ = std::fs::remove_file(link);
    }
}
