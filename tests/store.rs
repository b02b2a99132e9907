//! The record as the daemon and the commands meet it: commits, restarts, requests, faults.

use railtide::alarm::{
    AlarmKey, AlarmRecord, Delivery, Event, Facts, JournalEntry, Notice, NoticeKind, Outcome, Priority,
    Request, RequestAction, State,
};
use railtide::quantity::{Millivolts, Mono, Utc};
use railtide::reading::{ChannelId, ChannelQuantity, Quality, Reading};
use railtide::store::{
    Answer, Batch, ChannelSpec, JournalFilter, Lock, OpenOptions, PlacedSession, Store, StoreError,
    WaitingReading,
};

/// 2026-12-01T18:00:00Z.
const EVENING: i64 = 1_796_148_000_000;

/// A database in a folder of its own with the channel `mains` registered.
struct Scene {
    folder: tempfile::TempDir,
    store: Store,
    mains: ChannelId,
}

impl Scene {
    fn new() -> Scene {
        let folder = tempfile::tempdir().unwrap();
        let mut store = Store::open(&folder.path().join("house.db"), &OpenOptions::default()).unwrap();
        let mains = store.register_channels(&[mains_spec()]).unwrap()[0];
        Scene { folder, store, mains }
    }

    fn path(&self) -> std::path::PathBuf {
        self.folder.path().join("house.db")
    }

    fn reading(&self, at: i64, mv: i32) -> Reading {
        Reading { channel: self.mains, at: Utc(at), value: Millivolts(mv), quality: Quality::Good }
    }

    fn commit_readings(&mut self, readings: Vec<Reading>) {
        self.store.commit(&Batch { readings, ..Batch::default() }).unwrap();
    }

    fn all(&self) -> Vec<Reading> {
        self.store.readings(self.mains, Utc(0), Utc(i64::MAX)).collect::<Result<_, _>>().unwrap()
    }
}

fn mains_spec() -> ChannelSpec {
    ChannelSpec {
        name: "mains".into(),
        was: None,
        quantity: ChannelQuantity::MainsRms,
        sample_period_ms: 1000,
        amplifier: None,
        node: None,
    }
}

fn rail_high() -> AlarmKey {
    AlarmKey { condition: "rail-high".into(), subject: "hall.reservoir".into() }
}

fn facts() -> Facts {
    Facts {
        value: Some(481.2),
        setpoint: Some(476.0),
        unit: "V".into(),
        mains_v: Some(243.1),
        ..Facts::default()
    }
}

fn entry(seq: u64, event: Event, from: State, to: State) -> JournalEntry {
    JournalEntry {
        seq,
        at: Utc(EVENING + seq as i64),
        key: rail_high(),
        event,
        from,
        to,
        priority: Priority::High,
        by: None,
        facts: facts(),
    }
}

fn raised() -> AlarmRecord {
    AlarmRecord {
        key: rail_high(),
        state: State::Unacknowledged,
        priority: Priority::High,
        since: Utc(EVENING),
        raised_at: Some(Utc(EVENING)),
        shelved_until: None,
        last_seq: 1,
        facts: facts(),
    }
}

fn notice(id: u64) -> Notice {
    Notice {
        id,
        receiver: "phone".into(),
        kind: NoticeKind::Raised,
        priority: Priority::High,
        at: Utc(EVENING),
        key: rail_high(),
        raised_at: Utc(EVENING),
        facts: facts(),
        advice: "switch the amplifier off".into(),
        idempotency_key: format!("test-{id}"),
        recorded: true,
    }
}

fn raising() -> Batch {
    Batch {
        alarms: vec![raised()],
        journal: vec![entry(1, Event::Raise, State::Normal, State::Unacknowledged)],
        notices: vec![notice(1), notice(2)],
        ..Batch::default()
    }
}

#[test]
fn a_restart_takes_up_alarms_numbers_notices_and_the_latest_readings() {
    let mut scene = Scene::new();
    let mut batch = raising();
    batch.readings = vec![scene.reading(EVENING, 243_100), scene.reading(EVENING - 1000, 242_900)];
    batch.outcomes = vec![
        Outcome {
            notice_id: 1,
            attempts: 1,
            delivery: Delivery::Delivered { at: Utc(EVENING + 40) },
            said: "200 OK".into(),
            body: b"{}".to_vec(),
        },
        Outcome {
            notice_id: 2,
            attempts: 3,
            delivery: Delivery::Waiting,
            said: "503 Service Unavailable".into(),
            body: b"{\"n\":2}".to_vec(),
        },
    ];
    scene.store.commit(&batch).unwrap();

    drop(scene.store);
    let path = scene.folder.path().join("house.db");
    let restored = Store::open(&path, &OpenOptions::default()).unwrap().restore().unwrap();
    assert_eq!(restored.alarms, [raised()]);
    assert_eq!(restored.next_seq, 2);
    assert_eq!(restored.next_notice_id, 3);
    assert_eq!(restored.undelivered.len(), 1);
    assert_eq!(restored.undelivered[0].notice, notice(2));
    assert_eq!(restored.undelivered[0].attempts, 3);
    assert_eq!(restored.undelivered[0].body, b"{\"n\":2}");
    assert_eq!(restored.latest[&ChannelId(1)].value, Millivolts(243_100));
    assert_eq!(restored.newest, Some(Utc(EVENING)));
}

#[test]
fn an_empty_database_starts_its_numbers_at_one() {
    let restored = Scene::new().store.restore().unwrap();
    assert_eq!((restored.next_seq, restored.next_notice_id), (1, 1));
    assert_eq!((restored.newest, restored.alarms.len(), restored.undelivered.len()), (None, 0, 0));
}

#[test]
fn every_state_of_an_alarm_comes_back_as_it_was_stored() {
    let mut scene = Scene::new();
    let mut states =
        vec![State::Normal, State::Unacknowledged, State::Acknowledged, State::ReturnedUnacknowledged];
    for active in [false, true] {
        states.extend([
            State::Shelved { active },
            State::Suppressed { active },
            State::OutOfService { active },
        ]);
    }
    for state in states {
        let alarm = AlarmRecord { state, shelved_until: Some(Utc(EVENING + 5)), ..raised() };
        scene.store.commit(&Batch { alarms: vec![alarm.clone()], ..Batch::default() }).unwrap();
        assert_eq!(scene.store.alarms().unwrap(), [alarm]);
    }
}

#[test]
fn the_journal_gives_back_what_was_written_filtered_by_time_alarm_and_count() {
    let mut scene = Scene::new();
    let mut silent = entry(2, Event::Raise, State::Normal, State::Unacknowledged);
    silent.key = AlarmKey { condition: "logger-silent".into(), subject: "bench".into() };
    let mut shelved = entry(3, Event::Shelve, State::Unacknowledged, State::Shelved { active: true });
    shelved.by = Some("ada".into());
    let journal = vec![entry(1, Event::Raise, State::Normal, State::Unacknowledged), silent, shelved];
    scene.store.commit(&Batch { journal: journal.clone(), ..Batch::default() }).unwrap();

    let read = |filter| scene.store.journal(&filter).unwrap();
    assert_eq!(read(JournalFilter::default()), journal);
    assert_eq!(
        read(JournalFilter {
            from: Some(Utc(EVENING + 2)),
            to: Some(Utc(EVENING + 3)),
            ..Default::default()
        }),
        journal[1..2]
    );
    assert_eq!(
        read(JournalFilter { key: Some(rail_high()), ..Default::default() }),
        [journal[0].clone(), journal[2].clone()]
    );
    assert_eq!(read(JournalFilter { newest: Some(2), ..Default::default() }), journal[1..]);
}

#[test]
fn nobody_can_edit_the_journal() {
    let mut scene = Scene::new();
    scene.store.commit(&raising()).unwrap();
    let shell = rusqlite::Connection::open(scene.path()).unwrap();
    for edit in [
        "UPDATE journal SET done_by = 'nobody'",
        "DELETE FROM journal",
        "INSERT OR REPLACE INTO journal SELECT 1, 0, condition, subject, event, from_state, from_active, to_state,
             to_active, priority, done_by, facts FROM journal",
    ] {
        let refused = shell.execute(edit, []).unwrap_err().to_string();
        assert!(refused.contains("only ever added to"), "{edit}: {refused}");
    }
    assert_eq!(scene.store.journal(&JournalFilter::default()).unwrap(), raising().journal);
}

#[test]
fn the_order_of_arrival_never_decides_between_two_claims_on_one_millisecond() {
    let claims = [
        (Quality::Good, 229_000),
        (Quality::Good, 230_000),
        (Quality::Stuck, 240_000),
        (Quality::ClockDoubtful, 231_000),
    ];
    // Every order of four.
    for order in 0..24 {
        let mut left: Vec<_> = claims.to_vec();
        let mut index = order;
        let mut scene = Scene::new();
        for n in (1..=4).rev() {
            let (quality, mv) = left.remove(index % n);
            index /= n;
            let reading = Reading { quality, ..scene.reading(EVENING, mv) };
            scene.commit_readings(vec![reading]);
        }
        assert_eq!(scene.all(), [scene.reading(EVENING, 230_000)], "order {order}");
        assert_eq!(scene.store.tallies().unwrap().differing_duplicates, 3);
    }
}

#[test]
fn the_same_reading_again_is_no_differing_duplicate() {
    let mut scene = Scene::new();
    let reading = scene.reading(EVENING, 229_000);
    scene.commit_readings(vec![reading, reading]);
    scene.commit_readings(vec![reading]);
    assert_eq!(scene.all(), [reading]);
    assert_eq!(scene.store.tallies().unwrap().differing_duplicates, 0);
}

#[test]
fn readings_come_back_in_order_of_time_within_the_range_asked_for() {
    let mut scene = Scene::new();
    let readings: Vec<Reading> =
        [3, 1, 2, 0].map(|n| scene.reading(EVENING + n * 1000, 229_000 + n as i32)).into();
    scene.commit_readings(readings);
    let values = |from: i64, to: i64| -> Vec<i32> {
        let range = scene.store.readings(scene.mains, Utc(EVENING + from), Utc(EVENING + to));
        range.map(|r| r.unwrap().value.0).collect()
    };
    assert_eq!(values(0, 4000), [229_000, 229_001, 229_002, 229_003]);
    assert_eq!(values(1000, 3000), [229_001, 229_002], "from is in the range, to isn't");
    assert_eq!(values(4000, 4000), Vec::<i32>::new());
}

#[test]
fn readings_that_waited_for_the_clock_move_to_their_time_when_it_is_known() {
    let mut scene = Scene::new();
    let waiting = |session, mono| WaitingReading {
        session,
        mono: Mono(mono),
        channel: scene.mains,
        value: Millivolts(229_000 + mono as i32),
        quality: Quality::Good,
    };
    let (first, second, other_run) = (waiting(7, 100), waiting(7, 1100), waiting(8, 100));
    scene.store.commit(&Batch { waiting: vec![first, other_run], ..Batch::default() }).unwrap();
    assert_eq!(scene.all(), []);
    let placed = PlacedSession { session: 7, utc_of_zero: Utc(EVENING), sure: true };
    scene.store.commit(&Batch { waiting: vec![second], placed: vec![placed], ..Batch::default() }).unwrap();
    assert_eq!(scene.all(), [scene.reading(EVENING + 100, 229_100), scene.reading(EVENING + 1100, 230_100)]);
}

#[test]
fn a_commit_that_is_refused_leaves_nothing_of_itself() {
    let mut scene = Scene::new();
    scene.store.commit(&raising()).unwrap();
    let mut again = raising();
    again.journal.clear();
    again.readings = vec![scene.reading(EVENING, 229_000)];
    scene.store.commit(&again).expect_err("notice 1 is in the outbox already");
    assert_eq!(scene.all(), []);
}

#[test]
fn a_channel_keeps_its_number_through_restarts_and_renames_and_new_ones_never_reuse_it() {
    let mut scene = Scene::new();
    let rail = ChannelSpec {
        name: "hall.reservoir".into(),
        quantity: ChannelQuantity::Rail,
        amplifier: Some("hall".into()),
        node: Some("reservoir".into()),
        ..mains_spec()
    };
    let ids = scene.store.register_channels(&[rail.clone(), mains_spec()]).unwrap();
    assert_eq!(ids, [ChannelId(2), ChannelId(1)]);

    // Renamed; and a new channel takes the name that became free.
    let renamed = ChannelSpec { name: "socket".into(), was: Some("mains".into()), ..mains_spec() };
    let ids = scene.store.register_channels(&[mains_spec(), renamed.clone()]).unwrap();
    assert_eq!(ids, [ChannelId(3), ChannelId(1)]);
    // `was` stays in the config for ever.
    let ids = scene.store.register_channels(std::slice::from_ref(&rail)).unwrap();
    assert_eq!(ids, [ChannelId(2)]);
    let names: Vec<String> = scene.store.channels().unwrap().into_iter().map(|c| c.name).collect();
    assert_eq!(names, ["socket", "hall.reservoir", "mains"]);

    let clash = scene.store.register_channels(&[renamed]).unwrap_err();
    assert!(matches!(clash, StoreError::RenameClash { .. }), "{clash}");
}

#[test]
fn a_quantity_never_changes_under_one_name() {
    let mut scene = Scene::new();
    let other = ChannelSpec { name: "other".into(), ..mains_spec() };
    let changed = ChannelSpec { quantity: ChannelQuantity::Rail, ..mains_spec() };
    let refused = scene.store.register_channels(&[other, changed]).unwrap_err();
    assert_eq!(
        refused.to_string(),
        "channel `mains` is recorded as mains_rms and cannot become rail: give the new channel another name"
    );
    assert_eq!(scene.store.channels().unwrap().len(), 1, "nothing was changed");
}

#[test]
fn the_two_hundred_and_fifty_sixth_channel_is_refused() {
    let mut scene = Scene::new();
    let spec = |n: u32| ChannelSpec { name: format!("c{n}"), ..mains_spec() };
    let ids = scene.store.register_channels(&(2..=255).map(spec).collect::<Vec<_>>()).unwrap();
    assert_eq!(ids.last(), Some(&ChannelId(255)));
    let refused = scene.store.register_channels(&[spec(256)]).unwrap_err();
    assert!(matches!(refused, StoreError::TooManyChannels { .. }), "{refused}");
}

#[test]
fn a_command_puts_a_request_and_reads_the_daemons_answer() {
    let mut scene = Scene::new();
    scene.store.changed_by_others().unwrap();
    assert!(!scene.store.changed_by_others().unwrap());

    let mut command = Store::open_beside(&scene.path()).unwrap();
    let request = Request { by: "ada".into(), action: RequestAction::Acknowledge { key: rail_high() } };
    let id = command.put_request(&request, Utc(EVENING)).unwrap();
    let late = command.put_request(&request, Utc(EVENING + 1)).unwrap();
    assert_eq!(command.answer(id).unwrap(), None);

    assert!(scene.store.changed_by_others().unwrap());
    let pending = scene.store.pending_requests().unwrap();
    assert_eq!(pending.iter().map(|p| p.id).collect::<Vec<_>>(), [id, late]);
    assert_eq!(pending[0].request, request);
    assert_eq!(pending[0].asked_at, Utc(EVENING));

    let answer = Answer { done_at: Utc(EVENING + 900), ok: true, said: "acknowledged".into() };
    scene.store.commit(&Batch { answers: vec![(id, answer.clone())], ..Batch::default() }).unwrap();
    assert!(!scene.store.changed_by_others().unwrap(), "one's own commits don't count");
    assert_eq!(command.answer(id).unwrap(), Some(answer));

    assert!(!command.withdraw_request(id).unwrap(), "answered already");
    assert!(command.withdraw_request(late).unwrap());
    assert_eq!(scene.store.pending_requests().unwrap(), []);
}

#[test]
fn a_full_disk_is_told_as_such_and_the_same_batch_is_stored_when_there_is_room_again() {
    let mut scene = Scene::new();
    scene.store.limit_pages(Some(1)).unwrap();
    let readings: Vec<Reading> = (0..20_000).map(|n| scene.reading(EVENING + n * 1000, 229_000)).collect();
    let batch = Batch { readings, ..raising() };
    let full = scene.store.commit(&batch).unwrap_err();
    assert!(full.is_full(), "{full}");
    assert!(full.to_string().contains("free some space"), "{full}");
    assert_eq!(scene.all(), []);
    assert_eq!(scene.store.alarms().unwrap(), []);

    scene.store.limit_pages(None).unwrap();
    scene.store.commit(&batch).unwrap();
    assert_eq!(scene.all().len(), 20_000);
    assert_eq!(scene.store.alarms().unwrap(), [raised()]);
}

#[test]
fn a_second_instance_is_told_which_process_has_the_database() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("house.db");
    let first = Lock::take(&path).unwrap();
    let refused = Lock::take(&path).unwrap_err();
    assert!(refused.to_string().contains(&format!("in use by process {}", std::process::id())), "{refused}");
    drop(first);
    Lock::take(&path).expect("the lock was given back");
}

#[test]
fn a_missing_folder_and_a_missing_file_are_told_apart() {
    let folder = tempfile::tempdir().unwrap();
    let nowhere = folder.path().join("nowhere").join("house.db");
    let no_folder = Store::open(&nowhere, &OpenOptions::default()).unwrap_err();
    assert!(
        matches!(&no_folder, StoreError::NoFolder { folder } if folder.ends_with("nowhere")),
        "{no_folder}"
    );
    let missing = Store::open_read_only(&folder.path().join("house.db")).unwrap_err();
    assert!(matches!(missing, StoreError::Missing { .. }), "{missing}");
    let missing = Store::open_beside(&folder.path().join("house.db")).unwrap_err();
    assert!(matches!(missing, StoreError::Missing { .. }), "{missing}");
}

#[test]
fn files_of_other_programs_are_refused_and_left_alone() {
    let folder = tempfile::tempdir().unwrap();
    let notes = folder.path().join("notes.db");
    rusqlite::Connection::open(&notes).unwrap().execute_batch("CREATE TABLE note (text TEXT)").unwrap();
    let text = folder.path().join("text.db");
    std::fs::write(
        &text,
        "a plain text that is long enough to be no header of SQLite, surely, by any measure of it",
    )
    .unwrap();
    for path in [notes, text] {
        let before = std::fs::read(&path).unwrap();
        let refused = Store::open(&path, &OpenOptions::default()).unwrap_err();
        assert!(matches!(refused, StoreError::NotOurs { .. }), "{refused}");
        assert_eq!(std::fs::read(&path).unwrap(), before);
    }
}

#[test]
fn a_reader_sees_what_is_committed_and_can_write_nothing() {
    let mut scene = Scene::new();
    let mut reader = Store::open_read_only(&scene.path()).unwrap();
    scene.commit_readings(vec![scene.reading(EVENING, 229_000)]);
    assert_eq!(reader.latest_reading(scene.mains).unwrap(), Some(scene.reading(EVENING, 229_000)));
    let refused = reader.commit(&raising()).unwrap_err();
    assert!(refused.is_read_only(), "{refused}");
}

#[test]
fn views_show_volts_names_and_iso_times() {
    let mut scene = Scene::new();
    let mut batch = raising();
    batch.readings = vec![Reading { quality: Quality::Stuck, ..scene.reading(EVENING + 25, 229_512) }];
    scene.store.commit(&batch).unwrap();
    let shell = rusqlite::Connection::open(scene.path()).unwrap();
    let row = |sql: &str| -> String { shell.query_row(sql, [], |row| row.get::<_, String>(0)).unwrap() };
    assert_eq!(
        row("SELECT at || ' ' || channel || ' ' || volts || ' ' || quality FROM open_readings"),
        "2026-12-01T18:00:00.025Z mains 229.512 stuck"
    );
    assert_eq!(
        row("SELECT condition || ' ' || state || ' ' || since || ' ' || value || unit FROM alarms"),
        "rail-high unacknowledged 2026-12-01T18:00:00.000Z 481.2V"
    );
    assert_eq!(
        row("SELECT seq || ' ' || event || ' ' || from_state || ' ' || to_state FROM transitions"),
        "1 raise normal unacknowledged"
    );
}
