//! Channels: names that people use, and the numbers that the record uses.

use rusqlite::{Connection, OptionalExtension, Row, TransactionBehavior, params};

use super::error::StoreError;
use super::open::Store;
use crate::reading::{ChannelId, ChannelQuantity};

/// A channel as the config has it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ChannelSpec {
    /// Its name.
    pub name: String,
    /// The name that its history is recorded under, if it was renamed.
    pub was: Option<String>,
    /// What it measures.
    pub quantity: ChannelQuantity,
    /// How long one reading stands for, ms; more than 0.
    pub sample_period_ms: u32,
    /// For a rail: whose.
    pub amplifier: Option<String>,
    /// For a rail: at which node.
    pub node: Option<String>,
}

/// A channel as the record has it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct StoredChannel {
    /// Its number.
    pub id: ChannelId,
    /// Its present name.
    pub name: String,
    /// What it measures.
    pub quantity: ChannelQuantity,
    /// How long one live reading stands for, ms.
    pub sample_period_ms: u32,
    /// For a rail: whose.
    pub amplifier: Option<String>,
    /// For a rail: at which node.
    pub node: Option<String>,
}

const COLUMNS: &str = "id, name, quantity, sample_period_ms, amplifier, node";

impl Store {
    /// Gives each of `specs` its number, in their order: that of its name, or of the name that it had before, which it
    /// then takes over, or a new one.
    ///
    /// Refuses to let one name stand for two quantities, and changes nothing then.
    pub fn register_channels(&mut self, specs: &[ChannelSpec]) -> Result<Vec<ChannelId>, StoreError> {
        let path = self.path().to_path_buf();
        let fault = |e| StoreError::from_sqlite(&path, e);
        let tx = self.conn.transaction_with_behavior(TransactionBehavior::Immediate).map_err(fault)?;
        // Renames first: a new channel may have got the name that another one leaves.
        for spec in specs {
            let Some(was) = &spec.was else { continue };
            let Some(old) = by_name(&tx, was).map_err(fault)? else { continue };
            if by_name(&tx, &spec.name).map_err(fault)?.is_some() {
                return Err(StoreError::RenameClash { name: spec.name.clone(), was: was.clone() });
            }
            tx.execute("UPDATE channel SET name = ?1 WHERE id = ?2", params![spec.name, old.id.0])
                .map_err(fault)?;
        }
        let mut ids = Vec::with_capacity(specs.len());
        for spec in specs {
            ids.push(match by_name(&tx, &spec.name).map_err(fault)? {
                Some(known) => {
                    keep_quantity(&known, spec)?;
                    update(&tx, known.id, spec).map_err(fault)?;
                    known.id
                }
                None => insert(&tx, spec)
                    .map_err(fault)?
                    .ok_or_else(|| StoreError::TooManyChannels { name: spec.name.clone() })?,
            });
        }
        tx.commit().map_err(fault)?;
        Ok(ids)
    }

    /// Every channel that the record has known, in the order of its number.
    pub fn channels(&self) -> Result<Vec<StoredChannel>, StoreError> {
        let read = || -> rusqlite::Result<Vec<StoredChannel>> {
            let mut rows = self.conn.prepare_cached(&format!("SELECT {COLUMNS} FROM channel ORDER BY id"))?;
            rows.query_map([], stored)?.collect()
        };
        read().map_err(|e| self.fault(e))
    }
}

fn keep_quantity(known: &StoredChannel, spec: &ChannelSpec) -> Result<(), StoreError> {
    if known.quantity == spec.quantity {
        return Ok(());
    }
    Err(StoreError::QuantityChanged {
        name: spec.name.clone(),
        recorded: known.quantity.word().into(),
        configured: spec.quantity.word().into(),
    })
}

fn by_name(conn: &Connection, name: &str) -> rusqlite::Result<Option<StoredChannel>> {
    conn.query_row(&format!("SELECT {COLUMNS} FROM channel WHERE name = ?1"), [name], stored).optional()
}

fn update(conn: &Connection, id: ChannelId, spec: &ChannelSpec) -> rusqlite::Result<()> {
    // Only where something differs, so that a plain start writes nothing.
    conn.execute(
        "UPDATE channel SET sample_period_ms = ?2, amplifier = ?3, node = ?4
         WHERE id = ?1 AND (sample_period_ms, amplifier, node) IS NOT (?2, ?3, ?4)",
        params![id.0, spec.sample_period_ms, spec.amplifier, spec.node],
    )?;
    Ok(())
}

/// None when all 255 numbers have been given. Channels are never deleted, so the next number was never used.
fn insert(conn: &Connection, spec: &ChannelSpec) -> rusqlite::Result<Option<ChannelId>> {
    let next: i64 = conn.query_row("SELECT coalesce(max(id), 0) + 1 FROM channel", [], |row| row.get(0))?;
    let Ok(id) = u8::try_from(next) else { return Ok(None) };
    conn.execute(
        &format!("INSERT INTO channel ({COLUMNS}) VALUES (?1, ?2, ?3, ?4, ?5, ?6)"),
        params![id, spec.name, spec.quantity.word(), spec.sample_period_ms, spec.amplifier, spec.node],
    )?;
    Ok(Some(ChannelId(id)))
}

fn stored(row: &Row<'_>) -> rusqlite::Result<StoredChannel> {
    Ok(StoredChannel {
        id: ChannelId(row.get(0)?),
        name: row.get(1)?,
        quantity: super::columns::parsed(row, 2, ChannelQuantity::from_word)?,
        sample_period_ms: row.get(3)?,
        amplifier: row.get(4)?,
        node: row.get(5)?,
    })
}

/// How long one live reading of `channel` stands for, ms.
pub(super) fn live_period(conn: &Connection, channel: ChannelId) -> rusqlite::Result<u32> {
    let period = conn
        .prepare_cached("SELECT sample_period_ms FROM channel WHERE id = ?1")?
        .query_row([channel.0], |row| row.get(0))
        .optional()?;
    Ok(period.unwrap_or(1000))
}
