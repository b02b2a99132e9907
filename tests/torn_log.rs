//! A power cut in the middle of a write: the write-ahead log is cut short or has bytes turned at random places, and the
//! record still opens, is whole, and holds a prefix of what was committed. `RAILTIDE_TORN` sets how many times (20).

use std::path::Path;

use railtide::quantity::{Millivolts, Utc};
use railtide::reading::{ChannelId, ChannelQuantity, Quality, Reading};
use railtide::store::{Batch, ChannelSpec, OpenOptions, Store};

/// 2026-12-01T18:00:00Z.
const EVENING: i64 = 1_796_148_000_000;
const HOUR_S: i64 = 3600;
const BATCH_S: i64 = 60;

/// xorshift64*, so that a failure can be repeated.
struct Dice(u64);

impl Dice {
    fn below(&mut self, n: u64) -> u64 {
        self.0 ^= self.0 >> 12;
        self.0 ^= self.0 << 25;
        self.0 ^= self.0 >> 27;
        (self.0.wrapping_mul(0x2545_F491_4F6C_DD1D) >> 11) % n
    }
}

fn value(second: i64) -> Millivolts {
    Millivolts(229_000 + (second % 1009) as i32)
}

/// Two hours committed minute by minute, hours closed between: what stands in file and log after each commit is
/// snapshot as it is, as a power cut would leave it.
fn write_evening(folder: &Path) -> Store {
    let mut store = Store::open(&folder.join("house.db"), &OpenOptions::default()).unwrap();
    let spec = ChannelSpec {
        name: "mains".into(),
        was: None,
        quantity: ChannelQuantity::MainsRms,
        sample_period_ms: 1000,
        amplifier: None,
        node: None,
    };
    let channel = store.register_channels(&[spec]).unwrap()[0];
    // The log is folded in here once, so that the file itself holds the schema and the log all the rest.
    drop(store);
    let mut store = Store::open(&folder.join("house.db"), &OpenOptions::default()).unwrap();
    for start in (0..2 * HOUR_S + 600).step_by(BATCH_S as usize) {
        let readings = (start..start + BATCH_S)
            .map(|s| Reading {
                channel,
                at: Utc(EVENING + s * 1000),
                value: value(s),
                quality: Quality::Good,
            })
            .collect();
        store.commit(&Batch { readings, ..Batch::default() }).unwrap();
        store.close_next_hour(Utc(EVENING + (start + BATCH_S) * 1000)).unwrap();
    }
    store
}

fn log_of(database: &Path) -> std::path::PathBuf {
    database.with_extension("db-wal")
}

#[test]
fn a_torn_log_leaves_a_whole_record_with_a_prefix_of_what_was_committed() {
    let times: u64 = std::env::var("RAILTIDE_TORN").ok().map_or(20, |n| n.parse().expect("a number"));
    let folder = tempfile::tempdir().unwrap();
    let _open = write_evening(folder.path());
    let database = folder.path().join("house.db");
    let (file, log) = (std::fs::read(&database).unwrap(), std::fs::read(log_of(&database)).unwrap());
    assert!(log.len() > 500_000, "the log holds the evening: {} bytes", log.len());
    let all = read_all(&file, &log, "untouched");
    assert_eq!(all, 2 * HOUR_S + 600, "where the log is whole all is there");

    let mut dice = Dice(0x7a1d_e000_0000_0001);
    let mut shorter = 0;
    for round in 0..times {
        let mut torn = log.clone();
        // A cut, turned bytes after which nothing counts, or both: a sector half written.
        if round % 3 != 1 {
            torn.truncate(dice.below(log.len() as u64) as usize);
        }
        if round % 3 != 0 && !torn.is_empty() {
            for _ in 0..=dice.below(8) {
                let at = dice.below(torn.len() as u64) as usize;
                torn[at] ^= 1 + dice.below(255) as u8;
            }
        }
        let kept = read_all(&file, &torn, &format!("round {round}"));
        assert_eq!(kept % BATCH_S, 0, "round {round}: a commit is there whole or not at all");
        shorter += i64::from(kept < all);
    }
    assert!(shorter > times as i64 / 2, "the damage did cost something: {shorter} of {times}");
}

/// Opens a copy and gives how many seconds of the evening it holds, which must be the first ones, each once.
fn read_all(file: &[u8], log: &[u8], round: &str) -> i64 {
    let folder = tempfile::tempdir().unwrap();
    let database = folder.path().join("house.db");
    std::fs::write(&database, file).unwrap();
    std::fs::write(log_of(&database), log).unwrap();
    let mut store =
        Store::open(&database, &OpenOptions::default()).unwrap_or_else(|e| panic!("{round}: {e}"));
    let plain = rusqlite::Connection::open(&database).unwrap();
    let number = |sql: &str| plain.query_row(sql, [], |row| row.get::<_, i64>(0)).unwrap();
    let check: String = plain.query_row("PRAGMA integrity_check", [], |row| row.get(0)).unwrap();
    assert_eq!(check, "ok", "{round}");
    // A block and its rows are never both there, nor both gone.
    let twice = number(
        "SELECT count(*) FROM open o JOIN block b ON b.channel = o.channel AND b.t_ms = o.t_ms / 3600000 * 3600000",
    );
    assert_eq!(twice, 0, "{round}: an hour's rows stand beside its block");
    let held = number("SELECT count(*) FROM open") + number("SELECT coalesce(sum(count), 0) FROM block");
    let readings: Vec<Reading> =
        store.readings(ChannelId(1), Utc(0), Utc(i64::MAX)).collect::<Result<_, _>>().unwrap();
    assert_eq!(held, readings.len() as i64, "{round}");
    for (second, reading) in readings.iter().enumerate() {
        let second = second as i64;
        assert_eq!((reading.at, reading.value), (Utc(EVENING + second * 1000), value(second)), "{round}");
    }
    // And it goes on from there.
    while store.close_next_hour(Utc(EVENING + 4 * HOUR_S * 1000)).unwrap() {}
    let after = store.readings(ChannelId(1), Utc(0), Utc(i64::MAX)).count();
    assert_eq!(after, readings.len(), "{round}");
    readings.len() as i64
}
