-- The record, first version. Times are UTC milliseconds since 1970, voltages are calibrated millivolts.
-- A key of readings, blocks and intervals is t_ms * 256 + channel: rows are appended in order of time.

PRAGMA application_id = 0x72745644;

CREATE TABLE meta (
    key   TEXT PRIMARY KEY,
    value TEXT NOT NULL
) STRICT, WITHOUT ROWID;
INSERT INTO meta VALUES ('database_id', lower(hex(randomblob(16))));

CREATE TABLE channel (
    id               INTEGER PRIMARY KEY CHECK (id BETWEEN 1 AND 255),
    name             TEXT NOT NULL UNIQUE,
    quantity         TEXT NOT NULL CHECK (quantity IN ('mains_rms', 'rail')),
    sample_period_ms INTEGER NOT NULL CHECK (sample_period_ms > 0),
    amplifier        TEXT,
    node             TEXT
) STRICT;

-- Readings of hours that are not closed yet, and late ones that wait to be merged into their hour's block.
-- quality: 0 good, 1 clock doubtful, 2 stuck, 3 out of range.
CREATE TABLE open (
    key     INTEGER PRIMARY KEY,
    mv      INTEGER NOT NULL,
    quality INTEGER NOT NULL CHECK (quality BETWEEN 0 AND 3),
    t_ms    INTEGER GENERATED ALWAYS AS (key >> 8) VIRTUAL,
    channel INTEGER GENERATED ALWAYS AS (key & 255) VIRTUAL
) STRICT;

-- Readings from before the host's clock could be trusted: known by the run that took them and its monotonic time.
CREATE TABLE waiting (
    session INTEGER NOT NULL,
    mono_ms INTEGER NOT NULL,
    channel INTEGER NOT NULL REFERENCES channel (id),
    mv      INTEGER NOT NULL,
    quality INTEGER NOT NULL CHECK (quality BETWEEN 0 AND 3),
    PRIMARY KEY (session, mono_ms, channel)
) STRICT, WITHOUT ROWID;

CREATE TABLE calibration (
    id          INTEGER PRIMARY KEY,
    channel     INTEGER NOT NULL REFERENCES channel (id),
    at_ms       INTEGER NOT NULL,
    gain        REAL NOT NULL,
    offset_v    REAL NOT NULL,
    accuracy_v  REAL,
    asked_by    TEXT NOT NULL,
    note        TEXT NOT NULL
) STRICT;

-- One closed hour of one channel. times: pco of u32 milliseconds since the hour's start, ascending;
-- millivolts: pco of i32; quality: JSON [[first index, count, quality], ...] of what is not good, NULL if all is.
-- minimum, maximum and mean square are over the readings whose value is sound (quality 0 and 1).
CREATE TABLE block (
    key              INTEGER PRIMARY KEY,
    count            INTEGER NOT NULL CHECK (count > 0),
    min_mv           INTEGER,
    max_mv           INTEGER,
    mean_square_v2   REAL,
    sample_period_ms INTEGER NOT NULL CHECK (sample_period_ms > 0),
    calibration      INTEGER REFERENCES calibration (id),
    quality          TEXT,
    times            BLOB NOT NULL,
    millivolts       BLOB NOT NULL,
    t_ms             INTEGER GENERATED ALWAYS AS (key >> 8) VIRTUAL,
    channel          INTEGER GENERATED ALWAYS AS (key & 255) VIRTUAL
) STRICT;
CREATE INDEX block_of_channel ON block (channel, t_ms);

-- Ten minutes of one channel, aligned to UTC and named by their start. count: sound readings; covered: which part of
-- the ten minutes they stand for, 0 to 1; flagged: doubtful or missing data (IEC 61000-4-30). Ten minutes without a
-- sound reading have no row.
CREATE TABLE interval (
    key              INTEGER PRIMARY KEY,
    rms_mv           REAL NOT NULL,
    min_mv           INTEGER NOT NULL,
    max_mv           INTEGER NOT NULL,
    count            INTEGER NOT NULL CHECK (count > 0),
    covered          REAL NOT NULL,
    flagged          INTEGER NOT NULL CHECK (flagged IN (0, 1)),
    t_ms             INTEGER GENERATED ALWAYS AS (key >> 8) VIRTUAL,
    channel          INTEGER GENERATED ALWAYS AS (key & 255) VIRTUAL
) STRICT;

-- Each alarm as it stands; active says whether its condition holds.
CREATE TABLE alarm (
    condition        TEXT NOT NULL,
    subject          TEXT NOT NULL,
    state            TEXT NOT NULL,
    active           INTEGER NOT NULL CHECK (active IN (0, 1)),
    priority         TEXT NOT NULL CHECK (priority IN ('high', 'medium', 'low')),
    since_ms         INTEGER NOT NULL,
    raised_at_ms     INTEGER,
    shelved_until_ms INTEGER,
    last_seq         INTEGER NOT NULL,
    facts            TEXT NOT NULL CHECK (json_valid(facts)),
    PRIMARY KEY (condition, subject)
) STRICT, WITHOUT ROWID;

-- Every transition of every alarm, in the order of seq. It is only ever added to.
CREATE TABLE journal (
    seq         INTEGER PRIMARY KEY,
    at_ms       INTEGER NOT NULL,
    condition   TEXT NOT NULL,
    subject     TEXT NOT NULL,
    event       TEXT NOT NULL,
    from_state  TEXT NOT NULL,
    from_active INTEGER NOT NULL CHECK (from_active IN (0, 1)),
    to_state    TEXT NOT NULL,
    to_active   INTEGER NOT NULL CHECK (to_active IN (0, 1)),
    priority    TEXT NOT NULL CHECK (priority IN ('high', 'medium', 'low')),
    done_by     TEXT,
    facts       TEXT NOT NULL CHECK (json_valid(facts))
) STRICT;
CREATE TRIGGER journal_is_not_updated BEFORE UPDATE ON journal
BEGIN SELECT RAISE(ABORT, 'the journal is only ever added to'); END;
CREATE TRIGGER journal_is_not_deleted BEFORE DELETE ON journal
BEGIN SELECT RAISE(ABORT, 'the journal is only ever added to'); END;
-- Without this one INSERT OR REPLACE would be a way round the two above.
CREATE TRIGGER journal_is_appended BEFORE INSERT ON journal
WHEN NEW.seq <= (SELECT coalesce(max(seq), 0) FROM journal)
BEGIN SELECT RAISE(ABORT, 'the journal is only ever added to'); END;

-- Notices and how far they have come: waiting, delivered, given_up. body: the bytes of the last attempt.
CREATE TABLE outbox (
    id              INTEGER PRIMARY KEY,
    receiver        TEXT NOT NULL,
    kind            TEXT NOT NULL,
    priority        TEXT NOT NULL CHECK (priority IN ('high', 'medium', 'low')),
    at_ms           INTEGER NOT NULL,
    condition       TEXT NOT NULL,
    subject         TEXT NOT NULL,
    raised_at_ms    INTEGER NOT NULL,
    facts           TEXT NOT NULL CHECK (json_valid(facts)),
    advice          TEXT NOT NULL,
    idempotency_key TEXT NOT NULL UNIQUE,
    recorded        INTEGER NOT NULL CHECK (recorded IN (0, 1)),
    state           TEXT NOT NULL DEFAULT 'waiting' CHECK (state IN ('waiting', 'delivered', 'given_up')),
    settled_at_ms   INTEGER,
    attempts        INTEGER NOT NULL DEFAULT 0,
    said            TEXT NOT NULL DEFAULT '',
    body            BLOB NOT NULL DEFAULT x''
) STRICT;
CREATE INDEX outbox_waiting ON outbox (id) WHERE state = 'waiting';

-- What commands ask of the running daemon, and its answers.
CREATE TABLE request (
    id          INTEGER PRIMARY KEY AUTOINCREMENT,
    asked_at_ms INTEGER NOT NULL,
    asked_by    TEXT NOT NULL,
    action      TEXT NOT NULL CHECK (json_valid(action)),
    done_at_ms  INTEGER,
    answer      TEXT CHECK (json_valid(answer))
) STRICT;
CREATE INDEX request_pending ON request (id) WHERE done_at_ms IS NULL;

-- Fitted supply models, for ever.
CREATE TABLE fit (
    id         INTEGER PRIMARY KEY,
    amplifier  TEXT NOT NULL,
    made_at_ms INTEGER NOT NULL,
    from_ms    INTEGER NOT NULL,
    to_ms      INTEGER NOT NULL,
    pairs      INTEGER NOT NULL,
    model      TEXT NOT NULL CHECK (json_valid(model))
) STRICT;

-- For people with a plain SQL shell: volts, ISO times, names, words.
CREATE VIEW open_readings AS
SELECT strftime('%Y-%m-%dT%H:%M:%fZ', o.t_ms / 1000.0, 'unixepoch') AS at, c.name AS channel, o.mv / 1000.0 AS volts,
       CASE o.quality WHEN 0 THEN 'good' WHEN 1 THEN 'clock doubtful' WHEN 2 THEN 'stuck' ELSE 'out of range' END
       AS quality
FROM open o JOIN channel c ON c.id = o.channel;

CREATE VIEW hours AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', b.t_ms / 1000, 'unixepoch') AS start, c.name AS channel, b.count,
       sqrt(b.mean_square_v2) AS rms_v, b.min_mv / 1000.0 AS min_v, b.max_mv / 1000.0 AS max_v,
       length(b.times) + length(b.millivolts) AS bytes
FROM block b JOIN channel c ON c.id = b.channel;

CREATE VIEW intervals AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', i.t_ms / 1000, 'unixepoch') AS start, c.name AS channel,
       i.rms_mv / 1000.0 AS rms_v, i.min_mv / 1000.0 AS min_v, i.max_mv / 1000.0 AS max_v, i.count,
       i.covered, i.flagged
FROM interval i JOIN channel c ON c.id = i.channel;

CREATE VIEW alarms AS
SELECT condition, subject, state, active, priority,
       strftime('%Y-%m-%dT%H:%M:%fZ', since_ms / 1000.0, 'unixepoch') AS since,
       strftime('%Y-%m-%dT%H:%M:%fZ', raised_at_ms / 1000.0, 'unixepoch') AS raised_at,
       facts ->> 'value' AS value, facts ->> 'setpoint' AS setpoint, facts ->> 'limit' AS "limit",
       facts ->> 'unit' AS unit
FROM alarm;

CREATE VIEW transitions AS
SELECT seq, strftime('%Y-%m-%dT%H:%M:%fZ', at_ms / 1000.0, 'unixepoch') AS at, condition, subject, event,
       from_state, to_state, priority, done_by, facts ->> 'value' AS value, facts ->> 'unit' AS unit
FROM journal;
