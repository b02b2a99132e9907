//! One instance per database: a lock file that holds its owner's process id.

use std::fs::{File, TryLockError};
use std::io::{Read, Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};

use super::error::StoreError;

/// Held by the process that owns a database's live state; given back when dropped, or by the system when the process
/// ends in any way.
#[derive(Debug)]
pub struct Lock {
    /// Keeps the lock; closing it gives the lock back.
    _file: File,
}

impl Lock {
    /// Takes the lock of the database at `path`, or says which process has it.
    ///
    /// The file `<path>.lock` stays when the lock is given back: removing it would let two processes each lock a file
    /// of their own.
    pub fn take(path: &Path) -> Result<Lock, StoreError> {
        let lock_path = lock_path(path);
        let io = |doing, source| StoreError::Io { path: lock_path.clone(), doing, source };
        super::refuse_missing_folder(path)?;
        let mut file = File::options()
            .read(true)
            .write(true)
            .create(true)
            .truncate(false)
            .open(&lock_path)
            .map_err(|e| io("opening the lock file", e))?;
        match file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                return Err(StoreError::InUse { path: path.into(), owner: owner(&mut file) });
            }
            Err(TryLockError::Error(e)) => return Err(io("locking", e)),
        }
        let pid = format!("{}\n", std::process::id());
        // On a full disk the lock still holds; only its owner's number would be missing from a later message.
        let _ = file
            .set_len(0)
            .and_then(|()| file.seek(SeekFrom::Start(0)))
            .and_then(|_| file.write_all(pid.as_bytes()));
        Ok(Lock { _file: file })
    }
}

fn lock_path(path: &Path) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(".lock");
    name.into()
}

/// The process id in the lock file. Its owner may be between locking and writing it.
fn owner(file: &mut File) -> String {
    let mut text = String::new();
    match file.take(32).read_to_string(&mut text) {
        Ok(_) if !text.trim().is_empty() => text.trim().to_owned(),
        _ => "unknown".to_owned(),
    }
}
