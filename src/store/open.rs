//! Opening the database: as its owner, beside the owner, or only to read.

use std::cell::Cell;
use std::path::{Path, PathBuf};
use std::time::Duration;

use rusqlite::{Connection, MAIN_DB, OpenFlags};
use rusqlite_migration::M;

use super::copy::copy;
use super::error::StoreError;
use super::schema;
use crate::quantity::Utc;

/// How long a writer waits for another process. Every transaction of ours is meant to end within 100 ms; this leaves
/// room for a slow card and for a person's SQL shell.
const BUSY_TIMEOUT: Duration = Duration::from_secs(5);

/// What the owner may choose when it opens the database.
#[derive(Clone, Debug, Default)]
pub struct OpenOptions {
    /// The most pages (of 4096 bytes) that the file may grow to; none: until the disk is full.
    pub page_limit: Option<u32>,
}

/// An open database.
#[derive(Debug)]
pub struct Store {
    pub(super) conn: Connection,
    path: PathBuf,
    /// `PRAGMA data_version` when [`Store::changed_by_others`] last looked.
    seen_version: Cell<i64>,
    /// Hours before this one are not closed: one of them has a damaged block.
    pub(super) close_from: Utc,
}

impl Store {
    /// Opens the database at `path` as its owner, who holds the [`super::Lock`]; makes the file if it isn't there, and
    /// brings the schema of an older one up to date after a consistent copy has been made beside it.
    pub fn open(path: &Path, options: &OpenOptions) -> Result<Store, StoreError> {
        Store::open_with_steps(path, options, schema::VERSIONS)
    }

    fn open_with_steps(path: &Path, options: &OpenOptions, steps: &[M<'_>]) -> Result<Store, StoreError> {
        refuse_missing_folder(path)?;
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE
            | OpenFlags::SQLITE_OPEN_CREATE
            | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let fault = |e| StoreError::from_sqlite(path, e);
        let mut conn = Connection::open_with_flags(path, flags).map_err(fault)?;
        if conn.is_readonly(MAIN_DB).map_err(fault)? {
            return Err(StoreError::ReadOnly { path: path.into() });
        }
        conn.busy_timeout(BUSY_TIMEOUT).map_err(fault)?;
        schema::refuse_strangers(&conn, path, steps.len())?;
        // The first two only mean something before the first table is made.
        conn.execute_batch(
            "PRAGMA page_size = 4096; PRAGMA auto_vacuum = INCREMENTAL; PRAGMA journal_mode = WAL;",
        )
        .map_err(fault)?;
        for_writing(&conn).map_err(fault)?;
        schema::bring_up_to_date(&mut conn, path, steps)?;
        let store = Store::new(conn, path)?;
        store.limit_pages(options.page_limit)?;
        Ok(store)
    }

    /// Opens an existing database of this version beside its owner, to add requests or recordings.
    pub fn open_beside(path: &Path) -> Result<Store, StoreError> {
        refuse_missing_file(path)?;
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_NO_MUTEX;
        let fault = |e| StoreError::from_sqlite(path, e);
        let conn = Connection::open_with_flags(path, flags).map_err(fault)?;
        if conn.is_readonly(MAIN_DB).map_err(fault)? {
            return Err(StoreError::ReadOnly { path: path.into() });
        }
        conn.busy_timeout(BUSY_TIMEOUT).map_err(fault)?;
        for_writing(&conn).map_err(fault)?;
        refuse_other_versions(&conn, path)?;
        Store::new(conn, path)
    }

    /// Opens an existing database of this version to read; works beside the owner, and on a read-only disk.
    pub fn open_read_only(path: &Path) -> Result<Store, StoreError> {
        refuse_missing_file(path)?;
        let conn = match open_for_reading(path) {
            Err(StoreError::ReadOnly { .. }) if nothing_in_the_log(path) => open_unchanging(path)?,
            other => other?,
        };
        refuse_other_versions(&conn, path)?;
        Store::new(conn, path)
    }

    fn new(conn: Connection, path: &Path) -> Result<Store, StoreError> {
        conn.set_prepared_statement_cache_capacity(64);
        let store = Store { conn, path: path.into(), seen_version: Cell::new(0), close_from: Utc(0) };
        store.changed_by_others()?;
        Ok(store)
    }

    /// Copies the whole record into a new file at `target` by SQLite's online backup, as it is at one moment. The
    /// daemon may go on writing meanwhile.
    pub fn copy_to(&self, target: &Path) -> Result<(), StoreError> {
        copy(&self.conn, target)
    }

    /// The database file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// A random name that this database was given when it was made, 32 hexadecimal digits.
    pub fn database_id(&self) -> Result<String, StoreError> {
        self.conn
            .query_row("SELECT value FROM meta WHERE key = 'database_id'", [], |row| row.get(0))
            .map_err(|e| self.fault(e))
    }

    /// Whether another process has committed anything since this was last asked. Cheap: no page is read.
    pub fn changed_by_others(&self) -> Result<bool, StoreError> {
        let version = self
            .conn
            .pragma_query_value(None, "data_version", |row| row.get(0))
            .map_err(|e| self.fault(e))?;
        Ok(self.seen_version.replace(version) != version)
    }

    /// Changes how far the file may grow, in pages of 4096 bytes; none: until the disk is full. What is there already
    /// stays, also above the limit.
    pub fn limit_pages(&self, limit: Option<u32>) -> Result<(), StoreError> {
        // SQLite's own largest page count.
        let limit = limit.unwrap_or(u32::MAX - 1);
        self.conn
            .pragma_update_and_check(None, "max_page_count", limit, |_| Ok(()))
            .map_err(|e| self.fault(e))
    }

    /// Lets every write fail as on a file system that has become read-only.
    #[cfg(test)]
    pub(crate) fn set_read_only(&self, read_only: bool) -> Result<(), StoreError> {
        self.conn.pragma_update(None, "query_only", read_only).map_err(|e| self.fault(e))
    }

    pub(super) fn fault(&self, error: rusqlite::Error) -> StoreError {
        StoreError::from_sqlite(&self.path, error)
    }
}

fn for_writing(conn: &Connection) -> rusqlite::Result<()> {
    // FULL: a commit has reached the disk when it returns, whatever happens to the mains next.
    conn.execute_batch("PRAGMA synchronous = FULL; PRAGMA foreign_keys = ON;")
}

fn open_for_reading(path: &Path) -> Result<Connection, StoreError> {
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    let fault = |e| StoreError::from_sqlite(path, e);
    let conn = Connection::open_with_flags(path, flags).map_err(fault)?;
    conn.busy_timeout(BUSY_TIMEOUT).map_err(fault)?;
    // Opening reads nothing; this does, and so finds out whether the log's shared memory can be used.
    conn.query_row("SELECT count(*) FROM sqlite_schema", [], |_| Ok(())).map_err(fault)?;
    Ok(conn)
}

/// For a disk that can't be written: without shared memory for the log, SQLite reads the file only when told that
/// nobody changes it.
fn open_unchanging(path: &Path) -> Result<Connection, StoreError> {
    let mut uri = String::from("file:");
    for byte in path.as_os_str().as_encoded_bytes() {
        match byte {
            b'a'..=b'z' | b'A'..=b'Z' | b'0'..=b'9' | b'/' | b'-' | b'_' | b'.' => {
                uri.push(char::from(*byte))
            }
            _ => uri.push_str(&format!("%{byte:02X}")),
        }
    }
    uri.push_str("?immutable=1");
    let flags =
        OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX | OpenFlags::SQLITE_OPEN_URI;
    Connection::open_with_flags(uri, flags).map_err(|e| StoreError::from_sqlite(path, e))
}

fn nothing_in_the_log(path: &Path) -> bool {
    let mut name = path.as_os_str().to_owned();
    name.push("-wal");
    std::fs::metadata(PathBuf::from(name)).map_or(true, |log| log.len() == 0)
}

fn refuse_other_versions(conn: &Connection, path: &Path) -> Result<(), StoreError> {
    let known = schema::VERSIONS.len();
    schema::refuse_strangers(conn, path, known)?;
    match schema::version(conn).map_err(|e| StoreError::from_sqlite(path, e))? {
        found if found < known => Err(StoreError::TooOld { path: path.into(), found, known }),
        _ => Ok(()),
    }
}

fn refuse_missing_file(path: &Path) -> Result<(), StoreError> {
    refuse_missing_folder(path)?;
    if path.exists() { Ok(()) } else { Err(StoreError::Missing { path: path.into() }) }
}

/// Says which folder is missing, rather than leave it to "unable to open".
pub(super) fn refuse_missing_folder(path: &Path) -> Result<(), StoreError> {
    match path.parent() {
        Some(folder) if !folder.as_os_str().is_empty() && !folder.is_dir() => {
            Err(StoreError::NoFolder { folder: folder.into() })
        }
        _ => Ok(()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rusqlite::ffi;

    fn folder() -> tempfile::TempDir {
        tempfile::tempdir().unwrap()
    }

    #[test]
    fn an_older_file_is_brought_up_to_date_and_a_readable_copy_of_it_kept() {
        let folder = folder();
        let path = folder.path().join("house.db");
        let id = Store::open(&path, &OpenOptions::default()).unwrap().database_id().unwrap();
        let mut steps = vec![M::up(include_str!("schema/v1.sql"))];
        steps.push(M::up("CREATE TABLE later (id INTEGER PRIMARY KEY) STRICT;"));

        let newer = Store::open_with_steps(&path, &OpenOptions::default(), &steps).unwrap();
        assert_eq!(schema::version(&newer.conn).unwrap(), 2);
        assert_eq!(newer.database_id().unwrap(), id);
        drop(newer);

        let copy = folder.path().join("house.db.version-1");
        assert_eq!(Store::open_read_only(&copy).unwrap().database_id().unwrap(), id);
        let refused = Store::open(&path, &OpenOptions::default()).unwrap_err();
        assert!(matches!(refused, StoreError::TooNew { found: 2, known: 1, .. }), "{refused}");
    }

    #[test]
    fn a_step_that_fails_leaves_the_file_as_it_was() {
        let folder = folder();
        let path = folder.path().join("house.db");
        Store::open(&path, &OpenOptions::default()).unwrap();
        let steps = [
            M::up(include_str!("schema/v1.sql")),
            M::up("CREATE TABLE later (id INTEGER PRIMARY KEY) STRICT; INSERT INTO nowhere VALUES (1);"),
        ];
        Store::open_with_steps(&path, &OpenOptions::default(), &steps).unwrap_err();
        let again = Store::open(&path, &OpenOptions::default()).unwrap();
        assert_eq!(schema::version(&again.conn).unwrap(), 1);
    }

    #[test]
    fn the_file_has_the_layout_that_cards_and_later_versions_rely_on() {
        let folder = folder();
        let store = Store::open(&folder.path().join("house.db"), &OpenOptions::default()).unwrap();
        let pragma = |name: &str| -> String {
            store
                .conn
                .pragma_query_value(None, name, |row| row.get::<_, rusqlite::types::Value>(0))
                .map(|v| format!("{v:?}"))
                .unwrap()
        };
        assert_eq!(pragma("page_size"), "Integer(4096)");
        assert_eq!(pragma("auto_vacuum"), "Integer(2)", "2 is INCREMENTAL");
        assert_eq!(pragma("journal_mode"), "Text(\"wal\")");
        assert_eq!(pragma("synchronous"), "Integer(2)", "2 is FULL");
    }

    #[test]
    fn each_kind_of_failure_is_told_apart() {
        let path = Path::new("house.db");
        let of =
            |code| StoreError::from_sqlite(path, rusqlite::Error::SqliteFailure(ffi::Error::new(code), None));
        assert!(of(ffi::SQLITE_FULL).is_full());
        assert!(of(ffi::SQLITE_READONLY).is_read_only());
        assert!(of(ffi::SQLITE_READONLY_DIRECTORY).is_read_only());
        assert!(of(ffi::SQLITE_BUSY).is_busy());
        assert!(of(ffi::SQLITE_CORRUPT).is_damaged());
        assert!(of(ffi::SQLITE_CORRUPT_INDEX).is_damaged());
        assert!(matches!(of(ffi::SQLITE_NOTADB), StoreError::NotOurs { .. }));
        assert!(matches!(of(ffi::SQLITE_IOERR), StoreError::Other { .. }));
    }
}
