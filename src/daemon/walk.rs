//! The walk of one reading: logger → time → watch → held → store → notice, in this order and never back.

use std::time::Duration;

use crate::alarm::{JournalEntry, Outcome, State};
use crate::clock::{Clock, TimeBase};
use crate::config::Site;
use crate::logger::{FromLogger, LoggerEvent};
use crate::notice::{Waiting, WorkerHandle};
use crate::quantity::{Moment, Mono};
use crate::store::{Answer, PendingRequest, Store, StoreError};
use crate::watch::{Decided, Watch};

use super::early::Early;
use super::held::Held;
use super::hush::Hush;
use super::outlook::Outlook;
use super::upkeep::Upkeep;

/// After a commit that failed the next one is tried no sooner than this.
const RETRY_COMMIT: Duration = Duration::from_secs(2);

/// Everything that a reading meets on its way.
pub(super) struct Walk {
    clock: Clock,
    time: TimeBase,
    early: Early,
    watch: Watch,
    held: Held,
    store: Store,
    notices: WorkerHandle,
    logger_names: Vec<String>,
    commit_every: Duration,
    commit_at: Mono,
    store_failed: bool,
    /// True until requests that were put before the start have been looked for.
    requests_unread: bool,
    upkeep: Upkeep,
    outlook: Outlook,
    hush: Hush,
}

impl Walk {
    pub(super) fn new(
        site: &Site,
        clock: Clock,
        time: TimeBase,
        early: Early,
        watch: Watch,
        store: Store,
        notices: WorkerHandle,
    ) -> Self {
        let start = clock.now().mono;
        let commit_at = start + site.store.commit_every;
        Walk {
            clock,
            time,
            early,
            watch,
            held: Held::default(),
            store,
            notices,
            logger_names: site.loggers.iter().map(|l| l.name.clone()).collect(),
            commit_every: site.store.commit_every,
            commit_at,
            store_failed: false,
            requests_unread: true,
            upkeep: Upkeep::new(start, site.store.keep_readings),
            outlook: Outlook::new(site),
            hush: Hush::default(),
        }
    }

    /// A logger spoke, or something happened to its line.
    pub(super) fn take(&mut self, from: FromLogger) {
        let FromLogger { logger, received, what } = from;
        match what {
            LoggerEvent::Sample(sample) => {
                self.look_at_the_clock(received);
                let stamp = self.time.stamp(logger, received, sample.logger_ms);
                let now = self.label(self.clock.now());
                let decided = self.watch.sample(logger, stamp, &sample.values, now);
                self.settle(decided);
            }
            LoggerEvent::Disconnected { why } => {
                self.log_fault(logger, &format!("not connected: {why}"));
                self.watch.disconnected(logger, why);
            }
            LoggerEvent::Connected { port } => {
                tracing::info!(logger = self.logger_names[logger], port, "the logger's port is open");
            }
            LoggerEvent::Fault(fault) => self.log_fault(logger, fault.sentence()),
            LoggerEvent::Lost { lines } => {
                self.log_fault(logger, &format!("lines are missing before this one (latest count {lines})"));
            }
            LoggerEvent::Restarted => {
                tracing::info!(logger = self.logger_names[logger], "the logger has started again");
            }
            LoggerEvent::ReadHangs => {
                self.log_fault(logger, "a read from its port has not returned; look at the adapter")
            }
        }
    }

    /// Time passes: delays run out, requests are answered, what is due is committed.
    pub(super) fn tick(&mut self) {
        let now = self.clock.now();
        self.look_at_the_clock(now);
        let now = self.label(now);
        let decided = self.watch.tick(now);
        self.answer_requests(now);
        self.settle(decided);
        if !self.store_failed
            && let Err(error) = self.upkeep.turn(&mut self.store, now)
        {
            self.log_store_failure(&error, now.mono);
        }
        match self.upkeep.room(&self.store, now) {
            Ok(Some(room)) => self.watch.set_room(room),
            Ok(None) => {}
            Err(error) => self.log_store_failure(&error, now.mono),
        }
        self.look_ahead(now);
        for (what, times) in self.hush.overdue(now.mono) {
            tracing::warn!("{what} ({times} times more)");
        }
    }

    /// At each interval's end: the tide table, from the record, for the watch to judge.
    fn look_ahead(&mut self, now: Moment) {
        match self.outlook.turn(&self.store, now) {
            None => {}
            Some(Ok(table)) => {
                if let Err(why) = &table {
                    tracing::debug!("no tide table: {why}");
                }
                self.watch.forecast(table.ok().as_ref(), now.mono);
            }
            Some(Err(error))
                if self.hush.note("the record can't be read for the tide table", now.mono).is_some() =>
            {
                tracing::warn!("there is no tide table this time: {error}");
            }
            Some(Err(_)) => {}
        }
    }

    /// A notice was delivered, or wasn't.
    pub(super) fn outcome(&mut self, outcome: Outcome) {
        self.held.add_outcome(outcome);
        // At once: a delivery that isn't in the record yet would be repeated by a restart.
        self.commit();
    }

    /// Commits what is held and gives up the parts that must be stopped.
    pub(super) fn finish(mut self) -> (Held, Store, WorkerHandle) {
        self.commit();
        (self.held, self.store, self.notices)
    }

    /// Holds what was decided, commits it when it's urgent or due, and only then tells receivers. If the commit
    /// fails, they are told at once from memory, marked "not recorded".
    fn settle(&mut self, mut decided: Decided) {
        let urgent = !decided.journal.is_empty();
        for entry in &decided.journal {
            log_transition(entry);
        }
        let mut notices = decided.notices.clone();
        self.held.add_waiting(self.early.hold_back(&self.time, &mut decided.readings));
        self.held.add(decided);
        if urgent || self.clock.now().mono >= self.commit_at {
            let recorded = self.commit();
            if !recorded {
                self.held.mark_not_recorded(&notices);
                notices.iter_mut().for_each(|notice| notice.recorded = false);
            }
        }
        self.notices
            .send(notices.into_iter().map(|notice| Waiting { notice, attempts: 0, body: None }).collect());
    }

    fn commit(&mut self) -> bool {
        let now = self.clock.now().mono;
        if self.held.is_empty() {
            self.commit_at = now + self.commit_every;
            return true;
        }
        let let_go = self.held.let_go();
        match self.held.commit(&mut self.store) {
            Ok(()) => {
                self.commit_at = now + self.commit_every;
                if std::mem::take(&mut self.store_failed) {
                    tracing::warn!(
                        readings_let_go = let_go,
                        "the record can be written again: what was held in memory is in it now, except the readings that had to be let go"
                    );
                }
                true
            }
            Err(error) => {
                self.commit_at = now + RETRY_COMMIT;
                self.store_failed = true;
                self.log_store_failure(&error, now);
                false
            }
        }
    }

    fn answer_requests(&mut self, now: Moment) {
        let requests = match self.new_requests() {
            Ok(requests) => requests,
            Err(error) => return self.log_store_failure(&error, now.mono),
        };
        for PendingRequest { id, request, .. } in requests {
            let (decided, answer) = self.watch.request(&request, now);
            tracing::info!(by = request.by, done = answer.done, "{}", answer.text);
            self.held.add_answer(id, Answer { done_at: now.utc, ok: answer.done, said: answer.text });
            self.settle(decided);
            self.commit();
        }
    }

    fn new_requests(&mut self) -> Result<Vec<PendingRequest>, StoreError> {
        let unread = self.store.changed_by_others()? || self.requests_unread;
        self.requests_unread = unread;
        let requests = if unread { self.store.pending_requests()? } else { Vec::new() };
        self.requests_unread = false;
        Ok(requests)
    }

    fn look_at_the_clock(&mut self, now: Moment) {
        if let Some(step) = self.time.look(now) {
            tracing::warn!(
                by_s = step.by_ms as f64 / 1000.0,
                "the host's clock has stepped; delays are not affected, readings are flagged until it has caught up"
            );
        }
        self.held.add_placed(self.early.look(&self.clock, &self.time));
    }

    /// The present moment with UTC as readings are labelled.
    fn label(&self, now: Moment) -> Moment {
        Moment { utc: self.time.utc(now.mono), ..now }
    }

    fn log_fault(&mut self, logger: usize, what: &str) {
        let name = &self.logger_names[logger];
        let now = self.clock.now().mono;
        if let Some(times) = self.hush.note(&format!("logger {name}: {what}"), now) {
            tracing::warn!(
                "logger {name}: {what}{}",
                if times > 1 { format!(" ({times} times)") } else { String::new() }
            );
        }
    }

    fn log_store_failure(&mut self, error: &StoreError, now: Mono) {
        if self.hush.note("the record can't be written", now).is_some() {
            tracing::error!(
                readings_held = self.held.readings(),
                "the record can't be written: {error}; alarms still go out, readings are held in memory"
            );
        }
    }
}

fn log_transition(entry: &JournalEntry) {
    let facts = &entry.facts;
    let line = format!("{} is {} (it was {})", entry.key, entry.to.word(), entry.from.word(),);
    match entry.to {
        State::Unacknowledged => {
            tracing::warn!(
                seq = entry.seq,
                value = facts.value,
                setpoint = facts.setpoint,
                unit = facts.unit,
                "{line}"
            );
        }
        _ => tracing::info!(
            seq = entry.seq,
            value = facts.value,
            setpoint = facts.setpoint,
            unit = facts.unit,
            "{line}"
        ),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::alarm::CONDITIONS;
    use crate::clock::SimulatedClock;
    use crate::config::Surroundings;
    use crate::logger::Sample;
    use crate::notice::Worker;
    use crate::quantity::Utc;
    use crate::store::{OpenOptions, OutboxEntry};

    const HALL: &str = r#"
[site]
name = "hall"
time_zone = "UTC"
[store]
path = "hall.db"
commit_every = "10 s"
[[logger]]
name = "bench"
port = "/dev/null"
[[channel]]
name = "mains"
quantity = "mains_rms"
[[amplifier]]
name = "hall"
[amplifier.measured]
mains_v = 220
rail_v = 452
node = "reservoir"
loading = "idle"
[[amplifier.limit]]
node = "reservoir"
max_v = 480
[[receiver]]
name = "phone"
webhook = "http://127.0.0.1:9/"
"#;

    /// A walk over a real record in a folder of its own; nobody listens at its receiver.
    struct Scene {
        folder: tempfile::TempDir,
        walk: Walk,
        hand: SimulatedClock,
        lines: u64,
    }

    impl Scene {
        fn new() -> Self {
            Scene::with(HALL)
        }

        fn with(config: &str) -> Self {
            Scene::at(config, tempfile::tempdir().unwrap(), 1_790_000_000_000)
        }

        /// The next run on the same record, by a host whose clock shows `start_ms`.
        fn again(self, start_ms: i64) -> Self {
            let Scene { folder, walk, .. } = self;
            walk.finish();
            Scene::at(HALL, folder, start_ms)
        }

        fn at(config: &str, folder: tempfile::TempDir, start_ms: i64) -> Self {
            let conditions: Vec<&str> = CONDITIONS.iter().map(|c| c.name).collect();
            let surroundings = Surroundings { conditions: &conditions, default_store: "hall.db".into() };
            let site = Site::parse(config, &folder.path().join("railtide.toml"), &surroundings).unwrap();
            let (clock, hand) = Clock::simulated(Utc(start_ms));
            let mut store = Store::open(&site.store.path, &OpenOptions::default()).unwrap();
            let ids = store.register_channels(&crate::daemon::channel_specs(&site)).unwrap();
            let (remembered, restored) = crate::daemon::remembered(&store).unwrap();
            let watch = Watch::new(
                &site,
                &ids,
                &crate::daemon::projectors(&site, &store).unwrap(),
                remembered,
                clock.now(),
            );
            let time = TimeBase::new(clock.now(), restored.newest);
            let (early, placed) = Early::begin(&clock, &time, &restored);
            store.commit(&crate::store::Batch { placed, ..Default::default() }).unwrap();
            let (outcomes, _) = tokio::sync::mpsc::channel(64);
            let worker =
                Worker::spawn(site.receivers.clone(), site.time_zone, clock.clone(), outcomes).unwrap();
            let walk = Walk::new(&site, clock, time, early, watch, store, worker);
            Scene { folder, walk, hand, lines: 0 }
        }

        /// One line a second for `seconds`, with a little noise, as no channel that lives is without.
        fn mains(&mut self, volts: f64, seconds: u64) {
            for _ in 0..seconds {
                self.hand.advance(Duration::from_secs(1));
                let sample = Sample {
                    logger_ms: Some(self.lines * 1000),
                    values: vec![(0, volts + (self.lines % 7) as f64 * 0.01)],
                };
                self.lines += 1;
                let received = self.walk.clock.now();
                self.walk.take(FromLogger { logger: 0, received, what: LoggerEvent::Sample(sample) });
                self.walk.tick();
            }
        }

        fn readings(&self) -> u64 {
            self.number("SELECT count(*) FROM open")
        }

        fn number(&self, sql: &str) -> u64 {
            let connection = rusqlite::Connection::open(self.folder.path().join("hall.db")).unwrap();
            connection.query_row(sql, [], |row| row.get::<_, i64>(0)).unwrap() as u64
        }

        fn outbox(&self) -> Vec<OutboxEntry> {
            self.walk.store.outbox(100).unwrap()
        }
    }

    #[tokio::test]
    async fn readings_wait_for_the_commit_interval_and_an_alarm_commits_at_once() {
        let mut scene = Scene::new();
        scene.mains(226.0, 9);
        assert_eq!(scene.readings(), 0, "nothing is due yet");
        scene.mains(226.0, 1);
        assert_eq!(scene.readings(), 10);
        scene.mains(238.0, 11);
        assert_eq!(scene.readings(), 21, "the alarm of the eleventh high second took everything with it");
        assert_eq!(scene.number("SELECT count(*) FROM journal"), 1);
        assert!(scene.outbox()[0].notice.recorded);
    }

    #[tokio::test]
    async fn hours_are_closed_as_time_goes_by_and_old_ones_let_go_where_the_owner_wants_that() {
        let mut scene = Scene::with(&HALL.replace("commit_every", "keep_readings = \"2h\"\ncommit_every"));
        scene.mains(226.0, 5 * 3600);
        let hours = scene.number("SELECT count(*) FROM block");
        assert!((2..=3).contains(&hours), "{hours} hours of readings are kept");
        assert!(scene.readings() <= 2 * 3600, "closed hours leave no rows behind");
        let intervals = scene.number("SELECT count(*) FROM interval");
        assert!((24..=30).contains(&intervals), "intervals stay: {intervals}");
    }

    #[tokio::test]
    async fn what_the_tide_table_expects_is_told_before_it_comes() {
        let scene = Scene::new();
        let start = 1_790_000_000_000_i64;
        let Scene { folder, walk, .. } = scene;
        let (_, mut store, _) = walk.finish();
        let channel = store.channels().unwrap()[0].id;
        // Ten days by the minute: 222 V, and 238 V at its height once a day, next about three hours from now.
        let minute = |i: i64| {
            let into_day = (i - 180) as f64 / 1440.0 * std::f64::consts::TAU;
            let mv = 230_000.0 + 8_000.0 * into_day.cos() + (i % 7) as f64;
            crate::reading::Reading {
                channel,
                at: Utc(start + i * 60_000),
                value: crate::quantity::Millivolts(mv as i32),
                quality: crate::reading::Quality::Good,
            }
        };
        let history = (-14_400..0).map(minute).collect();
        store.merge_recording(channel, 60_000, history).unwrap();
        drop(store);
        let mut scene = Scene::at(HALL, folder, start);
        let level = |seconds: i64| f64::from(minute(seconds / 60).value.0) / 1000.0;
        for seconds in (0..1500).step_by(10) {
            scene.mains(level(seconds) - 4.5, 10);
        }
        let ahead =
            "SELECT count(*) FROM journal WHERE condition = 'rail-ahead' AND to_state = 'unacknowledged'";
        assert_eq!(scene.number(ahead), 1);
        let outbox = scene.outbox();
        let notice = &outbox.iter().find(|entry| entry.notice.key.condition == "rail-ahead").unwrap().notice;
        assert!(notice.facts.note.contains("expected from about"), "{:?}", notice.facts);
    }

    #[tokio::test]
    async fn with_no_room_the_notice_is_handed_over_unrecorded_and_all_is_written_when_there_is_room() {
        let mut scene = Scene::new();
        scene.mains(226.0, 10);
        let pages = scene.number("PRAGMA page_count") as u32;
        scene.walk.store.limit_pages(Some(pages)).unwrap();
        // Enough readings that no free page takes them.
        scene.mains(226.0, 2_000);
        assert!(scene.walk.store_failed);
        scene.mains(238.0, 30);
        let status = &scene.walk.notices.status()[0];
        assert_eq!(status.queued, 1, "the notice waits at the worker, not behind the record");
        assert_eq!(scene.number("SELECT count(*) FROM journal"), 0);

        scene.walk.store.limit_pages(None).unwrap();
        scene.mains(238.0, 10);
        assert!(!scene.walk.store_failed);
        assert_eq!(scene.number("SELECT count(*) FROM journal"), 1);
        assert_eq!(scene.walk.held.let_go(), 0);
        assert!(!scene.outbox()[0].notice.recorded, "the record tells that it went out unrecorded");
        assert_eq!(scene.readings() + scene.walk.held.readings() as u64, scene.lines, "no reading was lost");
    }

    #[tokio::test]
    async fn a_record_that_has_become_read_only_keeps_no_alarm_back() {
        let mut scene = Scene::new();
        scene.mains(226.0, 10);
        scene.walk.store.set_read_only(true).unwrap();
        scene.mains(238.0, 30);
        assert!(scene.walk.store_failed);
        assert_eq!(scene.walk.notices.status()[0].queued, 1);
        scene.walk.store.set_read_only(false).unwrap();
        scene.mains(238.0, 12);
        assert_eq!(scene.number("SELECT count(*) FROM journal"), 1);
        assert_eq!(scene.outbox().len(), 1);
    }

    #[tokio::test]
    async fn before_the_clock_is_set_readings_wait_alarms_work_and_then_each_gets_its_true_time() {
        let start = 1_790_000_000_000;
        let mut scene = Scene::new();
        scene.mains(226.0, 20);
        // No battery clock: the host wakes up a day before what is stored.
        let mut scene = scene.again(start - 86_400_000);
        scene.mains(238.0, 30);
        assert_eq!(scene.readings(), 20, "nothing new among the readings");
        let waiting = scene.number("SELECT count(*) FROM waiting");
        assert!((20..=30).contains(&waiting), "{waiting} wait");
        assert_eq!(scene.number("SELECT count(*) FROM journal"), 1, "the alarm is raised all the same");
        // The network comes: it is an hour later than when the record ends.
        scene.hand.step_utc(86_400_000 + 3_600_000);
        scene.mains(238.0, 10);
        assert_eq!(scene.number("SELECT count(*) FROM waiting"), 0);
        let (first, good) = (
            scene.number("SELECT min(t_ms) FROM open WHERE mv > 230000"),
            scene.number("SELECT count(*) FROM open WHERE mv > 230000 AND quality = 0"),
        );
        assert_eq!(
            first as i64,
            start + 3_600_000 + 1000,
            "the first of them, a second after the host woke up"
        );
        assert_eq!(good + scene.walk.held.readings() as u64, 40);
    }

    #[tokio::test]
    async fn what_a_run_left_waiting_is_kept_by_the_next_behind_the_record_and_flagged() {
        let start = 1_790_000_000_000;
        let mut scene = Scene::new();
        scene.mains(226.0, 20);
        let mut scene = scene.again(start - 86_400_000);
        scene.mains(229.0, 20);
        let scene = scene.again(start + 3_600_000);
        assert_eq!(scene.number("SELECT count(*) FROM waiting"), 0);
        assert_eq!(scene.number("SELECT count(*) FROM open WHERE quality = 1"), 20);
        assert_eq!(scene.readings(), 40);
    }

    #[tokio::test]
    async fn a_clock_that_steps_back_flags_readings_and_delays_nothing() {
        let mut scene = Scene::new();
        scene.mains(226.0, 10);
        scene.hand.step_utc(-3_600_000);
        scene.mains(238.0, 12);
        assert_eq!(scene.number("SELECT count(*) FROM journal"), 1, "the on-delay ran on monotonic time");
        scene.mains(238.0, 10);
        assert_eq!(scene.readings() + scene.walk.held.readings() as u64, scene.lines);
        let flagged = scene.number("SELECT count(*) FROM open WHERE quality = 1");
        assert!(flagged >= 20, "{flagged} readings are marked clock doubtful");
    }
}
