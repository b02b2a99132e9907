//! Fits of supply models: kept for ever, read newest first.

use rusqlite::{Row, params};

use super::columns::to_json;
use super::error::StoreError;
use super::open::Store;
use crate::quantity::Utc;
use crate::supply::fit::{Fit, RecordedFit};

impl Store {
    /// Keeps a fit. One short transaction, so that it may be done beside the owner.
    pub fn insert_fit(&mut self, made: &RecordedFit) -> Result<(), StoreError> {
        let insert = || -> rusqlite::Result<usize> {
            self.conn.execute(
                "INSERT INTO fit (amplifier, made_at_ms, from_ms, to_ms, pairs, model) VALUES (?1, ?2, ?3, ?4, ?5, ?6)",
                params![
                    made.fit.amplifier,
                    made.made_at.0,
                    made.from.0,
                    made.to.0,
                    made.fit.seen.all as i64,
                    to_json(&made.fit)?
                ],
            )
        };
        insert().map(|_| ()).map_err(|e| self.fault(e))
    }

    /// The fits of `amplifier`, newest first. One that another version of railtide wrote in a form that this one
    /// doesn't know is passed over: it can be made again.
    pub fn fits(&self, amplifier: &str) -> Result<Vec<RecordedFit>, StoreError> {
        let read = || -> rusqlite::Result<Vec<Option<RecordedFit>>> {
            self.conn
                .prepare_cached(
                    "SELECT made_at_ms, from_ms, to_ms, model FROM fit WHERE amplifier = ?1
                     ORDER BY made_at_ms DESC, id DESC",
                )?
                .query_map([amplifier], recorded)?
                .collect()
        };
        Ok(read().map_err(|e| self.fault(e))?.into_iter().flatten().collect())
    }
}

fn recorded(row: &Row<'_>) -> rusqlite::Result<Option<RecordedFit>> {
    let model: String = row.get(3)?;
    let Ok(fit) = serde_json::from_str::<Fit>(&model) else { return Ok(None) };
    let [made_at, from, to] = [Utc(row.get(0)?), Utc(row.get(1)?), Utc(row.get(2)?)];
    Ok(Some(RecordedFit { made_at, from, to, fit }))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::store::OpenOptions;
    use crate::supply::fit::{PairsSeen, Parameter, Second};

    fn fit(residual_v: f64) -> Fit {
        let parameter = Parameter { nameplate: 350.0, nameplate_u: 8.0, fitted: 353.0, fitted_u: 3.0 };
        Fit {
            amplifier: "hall".into(),
            node: "reservoir".into(),
            seen: PairsSeen { all: 600, idle: 500, off: 100, ..PairsSeen::default() },
            mains_v: [226.0, 241.0],
            secondary_v: parameter,
            second: Second::SourceResistance,
            second_value: Parameter { nameplate: 38.0, nameplate_u: 4.0, fitted: 38.0, fitted_u: 4.0 },
            told_apart: false,
            residual_v,
            independent_pairs: 70.5,
            covariance: [[1.5e-5, 0.0], [0.0, 2.5e-3]],
            rests_on: "abc".into(),
        }
    }

    #[test]
    fn fits_come_back_newest_first_and_an_unknown_form_is_passed_over() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("hall.db");
        let mut store = Store::open(&path, &OpenOptions::default()).unwrap();
        for (at, residual_v) in [(10, 0.5), (30, 0.25), (20, 0.75)] {
            let made = RecordedFit { made_at: Utc(at), from: Utc(1), to: Utc(9), fit: fit(residual_v) };
            store.insert_fit(&made).unwrap();
        }
        let strange = "INSERT INTO fit (amplifier, made_at_ms, from_ms, to_ms, pairs, model)
                       VALUES ('hall', 40, 1, 9, 5, '{\"later\": true}')";
        store.conn.execute(strange, []).unwrap();
        let found = store.fits("hall").unwrap();
        assert_eq!(found.iter().map(|f| f.made_at.0).collect::<Vec<_>>(), [30, 20, 10]);
        assert_eq!(found[0].fit, fit(0.25));
        assert_eq!(store.fits("choir").unwrap(), []);
    }
}
