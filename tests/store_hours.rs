//! Closed hours: whatever the order in which readings come, and whenever hours are closed between them, the record
//! holds what a plain sorted map would.

use std::collections::BTreeMap;
use std::time::Duration;

use proptest::prelude::*;
use railtide::mains::{Interval, intervals};
use railtide::quantity::{Millivolts, Utc};
use railtide::reading::{ChannelId, ChannelQuantity, Quality, Reading};
use railtide::store::{Batch, ChannelSpec, OpenOptions, Store};

/// 2026-12-01T18:00:00Z.
const EVENING: i64 = 1_796_148_000_000;
const HOUR: i64 = 3_600_000;

struct Scene {
    _folder: tempfile::TempDir,
    store: Store,
    channel: ChannelId,
}

impl Scene {
    fn new(sample_period_ms: u32) -> Self {
        let folder = tempfile::tempdir().unwrap();
        let mut store = Store::open(&folder.path().join("house.db"), &OpenOptions::default()).unwrap();
        let spec = ChannelSpec {
            name: "mains".into(),
            was: None,
            quantity: ChannelQuantity::MainsRms,
            sample_period_ms,
            amplifier: None,
            node: None,
        };
        let channel = store.register_channels(&[spec]).unwrap()[0];
        Scene { _folder: folder, store, channel }
    }

    fn reading(&self, at: i64, mv: i32, quality: Quality) -> Reading {
        Reading { channel: self.channel, at: Utc(at), value: Millivolts(mv), quality }
    }

    fn commit(&mut self, readings: Vec<Reading>) {
        self.store.commit(&Batch { readings, ..Batch::default() }).unwrap();
    }

    fn close_all(&mut self, now: i64) -> usize {
        let mut closed = 0;
        while self.store.close_next_hour(Utc(now)).unwrap() {
            closed += 1;
        }
        closed
    }

    fn all(&self) -> Vec<Reading> {
        self.store.readings(self.channel, Utc(0), Utc(i64::MAX)).collect::<Result<_, _>>().unwrap()
    }

    fn intervals(&self) -> Vec<Interval> {
        self.store.intervals(self.channel, Utc(0), Utc(i64::MAX)).unwrap()
    }
}

/// A wave of good readings, one a second.
fn seconds(scene: &Scene, from: i64, count: i64) -> Vec<Reading> {
    (0..count).map(|i| scene.reading(from + i * 1000, 230_000 + (i % 977) as i32, Quality::Good)).collect()
}

#[test]
fn an_hour_closes_five_minutes_after_its_end_and_reads_the_same_before_and_after() {
    let mut scene = Scene::new(1000);
    scene.commit(seconds(&scene, EVENING, 2 * 3600));
    let (readings, whole) = (scene.all(), scene.intervals());
    assert_eq!(scene.close_all(EVENING + HOUR + 5 * 60_000 - 1), 0, "not yet due");
    assert_eq!(scene.close_all(EVENING + HOUR + 5 * 60_000), 1);
    assert_eq!((scene.all(), scene.intervals()), (readings.clone(), whole.clone()));
    assert_eq!(scene.close_all(EVENING + 3 * HOUR), 1);
    assert_eq!((scene.all(), scene.intervals()), (readings, whole.clone()));
    assert_eq!(whole.len(), 12);
    assert!(whole.iter().all(|i| !i.flagged && i.count == 600), "{whole:?}");
}

#[test]
fn late_rows_are_read_over_their_block_at_once_and_merged_into_it_by_the_next_closing() {
    let mut scene = Scene::new(1000);
    let all = seconds(&scene, EVENING, 3600);
    let (late, early): (Vec<_>, Vec<_>) = all.iter().partition(|r| (r.at.0 / 1000) % 7 == 0);
    scene.commit(early);
    scene.close_all(EVENING + 2 * HOUR);
    scene.commit(late);
    assert_eq!(scene.all(), all);
    let before = scene.intervals();
    assert_eq!(scene.close_all(EVENING + 2 * HOUR), 1);
    assert_eq!(scene.all(), all);
    assert_eq!(scene.intervals(), before);
    assert_eq!(before, intervals(all, Duration::from_secs(1)));
}

#[test]
fn old_hours_are_let_go_their_intervals_stay_and_nothing_older_is_taken() {
    let mut scene = Scene::new(1000);
    scene.commit(seconds(&scene, EVENING, 3 * 3600));
    scene.close_all(EVENING + 5 * HOUR);
    let before = scene.intervals();
    while scene.store.drop_hours_before(Utc(EVENING + 2 * HOUR + 1)).unwrap() {}
    assert_eq!(scene.all().first().unwrap().at, Utc(EVENING + 2 * HOUR));
    assert_eq!(scene.intervals(), before, "intervals are kept for ever");
    let old = scene.reading(EVENING + 500, 240_000, Quality::Good);
    scene.commit(vec![old]);
    assert_eq!(scene.store.tallies().unwrap().too_old, 1);
    assert_eq!(
        scene.store.merge_recording(scene.channel, 1000, vec![old]).unwrap(),
        1,
        "an import is refused by count"
    );
    assert_eq!(scene.intervals(), before);
}

#[test]
fn a_damaged_block_stops_neither_later_hours_nor_the_reading_of_the_others() {
    let mut scene = Scene::new(1000);
    scene.commit(seconds(&scene, EVENING, 2 * 3600));
    scene.close_all(EVENING + 3 * HOUR);
    let other = rusqlite::Connection::open(scene.store.path()).unwrap();
    other
        .execute("UPDATE block SET times = x'00112233' WHERE key = (SELECT min(key) FROM block)", [])
        .unwrap();
    scene.commit(vec![
        scene.reading(EVENING + 500, 231_000, Quality::Good),
        scene.reading(EVENING + 3 * HOUR, 232_000, Quality::Good),
    ]);
    let now = Utc(EVENING + 6 * HOUR);
    let error = scene.store.close_next_hour(now).unwrap_err().to_string();
    assert!(error.contains("damaged"), "{error}");
    assert!(scene.store.close_next_hour(now).unwrap(), "the next hour is closed");
    assert!(!scene.store.close_next_hour(now).unwrap());
    let rows: i64 = other.query_row("SELECT count(*) FROM open", [], |row| row.get(0)).unwrap();
    assert_eq!(rows, 1, "the late row of the damaged hour is still there");
    let read: Vec<_> =
        scene.store.readings(scene.channel, Utc(0), Utc(i64::MAX)).filter_map(Result::ok).collect();
    assert!(read.len() >= 3601, "the other hours can be read: {}", read.len());
}

fn quality() -> impl Strategy<Value = Quality> {
    prop_oneof![
        6 => Just(Quality::Good),
        1 => Just(Quality::ClockDoubtful),
        1 => Just(Quality::Stuck),
        1 => Just(Quality::OutOfRange),
    ]
}

#[derive(Clone, Debug)]
enum Step {
    Commit(Vec<(i64, i32, Quality)>),
    Merge(Vec<(i64, i32, Quality)>),
    Close(i64),
}

fn values() -> impl Strategy<Value = Vec<(i64, i32, Quality)>> {
    // Four hours in steps of ten seconds, so that milliseconds meet often.
    prop::collection::vec((0..1440_i64, 228_000..232_000_i32, quality()), 1..60)
}

fn step() -> impl Strategy<Value = Step> {
    prop_oneof![
        4 => values().prop_map(Step::Commit),
        1 => values().prop_map(Step::Merge),
        2 => (0..6_i64).prop_map(Step::Close),
    ]
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 60, ..ProptestConfig::default() })]

    /// The reference keeps everything in a sorted map, by the rule of the record: better quality, then higher voltage.
    #[test]
    fn any_order_with_duplicates_gives_what_a_sorted_map_gives(
        steps in prop::collection::vec(step(), 1..12),
        period_s in prop_oneof![Just(1_u32), Just(10), Just(60), Just(300)],
    ) {
        let mut scene = Scene::new(period_s * 1000);
        let mut plain: BTreeMap<i64, Reading> = BTreeMap::new();
        for step in steps {
            let (values, merging) = match step {
                Step::Close(hours) => {
                    scene.close_all(EVENING + hours * HOUR);
                    continue;
                }
                Step::Commit(values) => (values, false),
                Step::Merge(values) => (values, true),
            };
            let readings: Vec<Reading> =
                values.into_iter().map(|(at, mv, q)| scene.reading(EVENING + at * 10_000, mv, q)).collect();
            for reading in &readings {
                let better = |held: &Reading| {
                    (reading.quality, -reading.value.0) < (held.quality, -held.value.0)
                };
                if plain.get(&reading.at.0).is_none_or(better) {
                    plain.insert(reading.at.0, *reading);
                }
            }
            if merging {
                scene.store.merge_recording(scene.channel, period_s * 1000, readings).unwrap();
            } else {
                scene.commit(readings);
            }
        }
        let expected: Vec<Reading> = plain.into_values().collect();
        prop_assert_eq!(scene.all(), expected.clone());
        let period = Duration::from_secs(u64::from(period_s));
        prop_assert_eq!(scene.intervals(), intervals(expected, period));
    }
}
