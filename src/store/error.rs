//! What can go wrong with the record, each with a sentence that says what to do.

use std::path::{Path, PathBuf};

use rusqlite::ErrorCode;
use thiserror::Error;

/// Why the record could not be opened, read or written.
#[derive(Debug, Error)]
#[non_exhaustive]
pub enum StoreError {
    /// The folder that should hold the database isn't there; the owner makes it or corrects `[store] path`.
    #[error("the folder {} for the database does not exist: make it, or set `[store] path` to another", folder.display())]
    NoFolder {
        /// The missing folder.
        folder: PathBuf,
    },
    /// A command that only reads, or that speaks to the daemon, found no database.
    #[error("there is no database at {}: start `railtide run` once, or set `[store] path` to where it is", path.display())]
    Missing {
        /// Where it was looked for.
        path: PathBuf,
    },
    /// Another process owns this database.
    #[error("{} is in use by process {owner}: stop that one first, or use another database", path.display())]
    InUse {
        /// The database.
        path: PathBuf,
        /// The owner's process id as it wrote it, or `unknown`.
        owner: String,
    },
    /// No room: the disk is full, or a page limit is reached. The store can be used again when there is room.
    #[error("no room to write {}: free some space on its disk", path.display())]
    Full {
        /// The database.
        path: PathBuf,
    },
    /// The file, its folder or its file system cannot be written.
    #[error("{} cannot be written: check who owns it and its folder, and that the disk is not mounted read-only", path.display())]
    ReadOnly {
        /// The database.
        path: PathBuf,
    },
    /// Another process has held the database for longer than the busy time-out.
    #[error("{} has been held by another program for too long: close any SQL shell or copy that is open on it", path.display())]
    Busy {
        /// The database.
        path: PathBuf,
    },
    /// What was read makes no sense.
    #[error("{} is damaged ({what}): keep it as it is, set `[store] path` to a new file to go on recording, and save what can be read with `railtide export`", path.display())]
    Damaged {
        /// The database.
        path: PathBuf,
        /// Which part, as far as is known.
        what: String,
    },
    /// A newer railtide has written this file.
    #[error("{} was written by a newer railtide (schema {found}, this one knows up to {known}): install the newer one, or open the copy that it made beside the file", path.display())]
    TooNew {
        /// The database.
        path: PathBuf,
        /// The file's version.
        found: usize,
        /// The newest version that this program knows.
        known: usize,
    },
    /// An older railtide has written this file, and it isn't this process that may change it.
    #[error("{} was written by an older railtide (schema {found}, this one needs {known}): start `railtide run` of this version once, it brings the file up to date", path.display())]
    TooOld {
        /// The database.
        path: PathBuf,
        /// The file's version.
        found: usize,
        /// The version that this program needs.
        known: usize,
    },
    /// A SQLite file of some other program.
    #[error("{} is not a railtide database, or its first page is damaged: set `[store] path` to another file, or put a backup in its place", path.display())]
    NotOurs {
        /// The file.
        path: PathBuf,
    },
    /// The schema could not be brought up to date.
    #[error("{} could not be brought up to date; the copy made before lies beside it", path.display())]
    Migration {
        /// The database.
        path: PathBuf,
        /// Why.
        source: Box<rusqlite_migration::Error>,
    },
    /// One name would stand for two kinds of figures.
    #[error(
        "channel `{name}` is recorded as {recorded} and cannot become {configured}: give the new channel another name"
    )]
    QuantityChanged {
        /// The channel.
        name: String,
        /// What the record holds under that name.
        recorded: String,
        /// What the config says.
        configured: String,
    },
    /// A rename whose both names already have a history.
    #[error(
        "channel `{name}` cannot take over the history of `{was}`: both are recorded already; remove `was`, or give the channel a new name"
    )]
    RenameClash {
        /// The new name.
        name: String,
        /// The old one.
        was: String,
    },
    /// Channel numbers are 1 to 255 and never used again.
    #[error(
        "no number is left for channel `{name}`: a database holds 255 channels in its life; start a new one"
    )]
    TooManyChannels {
        /// The channel that got none.
        name: String,
    },
    /// The file system failed.
    #[error("{}: {doing} failed", path.display())]
    Io {
        /// The file.
        path: PathBuf,
        /// What was tried.
        doing: &'static str,
        /// Why.
        source: std::io::Error,
    },
    /// Anything else that SQLite said.
    #[error("{}: the database refused", path.display())]
    Other {
        /// The database.
        path: PathBuf,
        /// Why.
        source: rusqlite::Error,
    },
}

impl StoreError {
    /// Sorts what SQLite said about the database at `path`.
    pub(super) fn from_sqlite(path: &Path, source: rusqlite::Error) -> Self {
        let path = path.to_path_buf();
        match &source {
            rusqlite::Error::SqliteFailure(failure, message) => match failure.code {
                ErrorCode::DiskFull => StoreError::Full { path },
                ErrorCode::ReadOnly | ErrorCode::PermissionDenied | ErrorCode::CannotOpen => {
                    StoreError::ReadOnly { path }
                }
                ErrorCode::DatabaseBusy | ErrorCode::DatabaseLocked => StoreError::Busy { path },
                ErrorCode::DatabaseCorrupt => StoreError::Damaged {
                    path,
                    what: message.clone().unwrap_or_else(|| "the database's structure".into()),
                },
                ErrorCode::NotADatabase => StoreError::NotOurs { path },
                _ => StoreError::Other { path, source },
            },
            rusqlite::Error::FromSqlConversionFailure(_, _, why) => {
                StoreError::Damaged { path, what: why.to_string() }
            }
            rusqlite::Error::InvalidColumnType(_, column, _) => {
                StoreError::Damaged { path, what: format!("column {column}") }
            }
            _ => StoreError::Other { path, source },
        }
    }

    /// No room now; the same commit can succeed later.
    pub fn is_full(&self) -> bool {
        matches!(self, StoreError::Full { .. })
    }

    /// Not writable now; the same commit can succeed later.
    pub fn is_read_only(&self) -> bool {
        matches!(self, StoreError::ReadOnly { .. })
    }

    /// Held by another process; the same commit can succeed later.
    pub fn is_busy(&self) -> bool {
        matches!(self, StoreError::Busy { .. })
    }

    /// What is stored cannot be trusted.
    pub fn is_damaged(&self) -> bool {
        matches!(self, StoreError::Damaged { .. })
    }
}
