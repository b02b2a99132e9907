//! The versions of the schema, and how a file gets from one to the next.

use std::path::{Path, PathBuf};

use rusqlite::Connection;
use rusqlite_migration::{M, Migrations};

use super::error::StoreError;

/// Marks a SQLite file as one of ours (`PRAGMA application_id`).
pub(super) const APPLICATION_ID: i32 = 0x7274_5644;

/// Every released version's step, oldest first. A released one is never changed.
pub(super) const VERSIONS: &[M<'_>] = &[M::up(include_str!("schema/v1.sql"))];

/// The version that `conn` holds; 0 for a file that has just been made.
pub(super) fn version(conn: &Connection) -> rusqlite::Result<usize> {
    conn.pragma_query_value(None, "user_version", |row| row.get::<_, u32>(0)).map(|v| v as usize)
}

/// Refuses a file that isn't ours, or that a newer railtide has written.
pub(super) fn refuse_strangers(conn: &Connection, path: &Path, known: usize) -> Result<(), StoreError> {
    let found = version(conn).map_err(|e| StoreError::from_sqlite(path, e))?;
    let id: i32 = conn
        .pragma_query_value(None, "application_id", |row| row.get(0))
        .map_err(|e| StoreError::from_sqlite(path, e))?;
    let tables: i64 = conn
        .query_row("SELECT count(*) FROM sqlite_schema", [], |row| row.get(0))
        .map_err(|e| StoreError::from_sqlite(path, e))?;
    if id != APPLICATION_ID && (tables > 0 || found > 0) {
        return Err(StoreError::NotOurs { path: path.into() });
    }
    if found > known {
        return Err(StoreError::TooNew { path: path.into(), found, known });
    }
    Ok(())
}

/// Brings `conn` to the last of `steps`. Before an existing file is changed, a consistent copy of it is made beside it;
/// its path is given back.
pub(super) fn bring_up_to_date(
    conn: &mut Connection,
    path: &Path,
    steps: &[M<'_>],
) -> Result<Option<PathBuf>, StoreError> {
    let found = version(conn).map_err(|e| StoreError::from_sqlite(path, e))?;
    if found == steps.len() {
        return Ok(None);
    }
    let copy = if found > 0 { Some(copy_before_migration(conn, path, found)?) } else { None };
    Migrations::from_slice(steps).to_latest(conn).map_err(|e| match e {
        rusqlite_migration::Error::RusqliteError { err, .. } => StoreError::from_sqlite(path, err),
        other => StoreError::Migration { path: path.into(), source: Box::new(other) },
    })?;
    Ok(copy)
}

fn copy_before_migration(conn: &Connection, path: &Path, found: usize) -> Result<PathBuf, StoreError> {
    let mut name = path.as_os_str().to_owned();
    name.push(format!(".version-{found}"));
    let copy = PathBuf::from(name);
    super::copy::copy(conn, &copy)?;
    Ok(copy)
}
