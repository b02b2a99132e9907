//! A consistent copy of the record, made while the daemon runs.

use std::path::Path;

use rusqlite::Connection;
use rusqlite::backup::Backup;

use super::error::StoreError;

/// All pages in one step: the read transaction of a write-ahead log holds up no writer, and a copy in steps would begin
/// anew at every commit of another process.
pub(super) fn copy(conn: &Connection, target: &Path) -> Result<(), StoreError> {
    let fault = |e| StoreError::from_sqlite(target, e);
    let mut made = Connection::open(target).map_err(fault)?;
    Backup::new(conn, &mut made).and_then(|backup| backup.step(-1)).map_err(fault)?;
    Ok(())
}
