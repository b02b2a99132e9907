//! What commands in other processes ask of the daemon, and its answers.

use rusqlite::{OptionalExtension, params};
use serde::{Deserialize, Serialize};

use super::columns::{from_json, to_json, unsigned};
use super::error::StoreError;
use super::open::Store;
use crate::alarm::Request;
use crate::quantity::Utc;

/// A request that nobody has answered yet.
#[derive(Clone, Debug, PartialEq)]
pub struct PendingRequest {
    /// Its number.
    pub id: u64,
    /// When it was put.
    pub asked_at: Utc,
    /// What is asked, and by whom.
    pub request: Request,
}

/// The daemon's answer to a request.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Answer {
    /// When.
    pub done_at: Utc,
    /// Whether it was done.
    pub ok: bool,
    /// What was done, or why not: one sentence for the person who asked.
    pub said: String,
}

impl Store {
    /// Puts a request before the daemon, in one short transaction; gives its number, to wait for the
    /// [`answer`](Self::answer) with.
    pub fn put_request(&mut self, request: &Request, asked_at: Utc) -> Result<u64, StoreError> {
        let put = || -> rusqlite::Result<i64> {
            self.conn.execute(
                "INSERT INTO request (asked_at_ms, asked_by, action) VALUES (?1, ?2, ?3)",
                params![asked_at.0, request.by, to_json(&request.action)?],
            )?;
            Ok(self.conn.last_insert_rowid())
        };
        put().map(|id| id as u64).map_err(|e| self.fault(e))
    }

    /// Takes back a request that was not answered in time, so that a daemon that starts tomorrow doesn't act on it.
    /// False if it has been answered meanwhile.
    pub fn withdraw_request(&mut self, id: u64) -> Result<bool, StoreError> {
        self.conn
            .execute("DELETE FROM request WHERE id = ?1 AND done_at_ms IS NULL", [id as i64])
            .map(|deleted| deleted == 1)
            .map_err(|e| self.fault(e))
    }

    /// Requests without an answer, oldest first. Ask [`changed_by_others`](Self::changed_by_others) before, it costs
    /// less.
    pub fn pending_requests(&self) -> Result<Vec<PendingRequest>, StoreError> {
        let read = || -> rusqlite::Result<Vec<PendingRequest>> {
            self.conn
                .prepare_cached(
                    "SELECT id, asked_at_ms, asked_by, action FROM request WHERE done_at_ms IS NULL ORDER BY id",
                )?
                .query_map([], |row| {
                    Ok(PendingRequest {
                        id: unsigned(row, 0)?,
                        asked_at: Utc(row.get(1)?),
                        request: Request { by: row.get(2)?, action: from_json(row, 3)? },
                    })
                })?
                .collect()
        };
        read().map_err(|e| self.fault(e))
    }

    /// The answer to request `id`, once the daemon has committed it.
    pub fn answer(&self, id: u64) -> Result<Option<Answer>, StoreError> {
        self.conn
            .prepare_cached("SELECT answer FROM request WHERE id = ?1 AND done_at_ms IS NOT NULL")
            .and_then(|mut found| found.query_row([id as i64], |row| from_json(row, 0)).optional())
            .map_err(|e| self.fault(e))
    }
}
