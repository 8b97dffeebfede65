-- The records of one study.
--
-- Rows are only ever added. Each row belongs to an act on the trail, directly (`act`) or through its filing; what is
-- current is derived, so that any question can be asked as of any trail number. Triggers refuse UPDATE, DELETE and
-- INSERT OR REPLACE on any connection. Two exceptions, both narrow: rows of a filing that was never published may be
-- cleared, and a removal (an act on the trail) may blank a subject's texts and numbers.

-- The audit trail: one row an act, chained by hash (see records/trail.rs for the canonical form).
CREATE TABLE trail (
    number   INTEGER PRIMARY KEY,
    at       TEXT NOT NULL,              -- UTC, RFC 3339 with milliseconds
    who      TEXT NOT NULL,
    program  TEXT NOT NULL,              -- name and version
    act      TEXT NOT NULL,
    objects  TEXT NOT NULL,              -- JSON: what it was done to; ids and codes, never values of readings
    before   TEXT,
    after    TEXT,
    reason   TEXT,
    digest   BLOB NOT NULL,              -- over the digests of all rows that belong to the act
    previous BLOB NOT NULL,
    hash     BLOB NOT NULL
) STRICT;
CREATE INDEX trail_act ON trail (act);

-- `act` columns carry no foreign key: a trail row is written after the rows of its act, and SQLite would then search
-- every table for them. `verify` finds rows without an act.

-- Texts that stand in many rows: codes of instruments and measures, conditions, units, labels, operators. A row's
-- digest covers the text, not the number, so these need none of their own.
CREATE TABLE term (
    id   INTEGER PRIMARY KEY,
    text TEXT NOT NULL UNIQUE
) STRICT;

CREATE TABLE subject (
    id   INTEGER PRIMARY KEY,
    code TEXT NOT NULL UNIQUE
) STRICT;

-- An actual occasion: subject, local day of the study centre, and the visit's label if there was one.
CREATE TABLE session (
    id      INTEGER PRIMARY KEY,
    subject INTEGER NOT NULL REFERENCES subject (id),
    day     INTEGER NOT NULL,            -- days since 0001-01-01 (day 1)
    label   INTEGER NOT NULL DEFAULT 0,  -- a term: a visit's code or 'unscheduled'; 0 = none
    UNIQUE (subject, day, label)
) STRICT;

CREATE TABLE plan_version (
    id     INTEGER PRIMARY KEY,
    act    INTEGER NOT NULL,
    sha256 BLOB NOT NULL,
    files  TEXT NOT NULL                 -- JSON: main text and the reader files it names
) STRICT;

-- The roster as a history of cells: field is enrolled, withdrawn, data, arm, or an attribute with a leading '.'.
CREATE TABLE roster_event (
    id      INTEGER PRIMARY KEY,
    act     INTEGER NOT NULL,
    subject INTEGER NOT NULL REFERENCES subject (id),
    field   TEXT NOT NULL,
    value   TEXT,
    salt    BLOB,
    digest  BLOB,
    removed INTEGER
) STRICT;
CREATE INDEX roster_event_subject ON roster_event (subject);

-- Raw copies: bytes in the row when small (spares two fsyncs a file), else in raw/ under the hash.
CREATE TABLE raw (
    sha256        BLOB PRIMARY KEY,      -- of the export's bytes
    size          INTEGER NOT NULL,
    stored_sha256 BLOB NOT NULL,         -- of the compressed bytes
    stored        BLOB                   -- compressed bytes; NULL = in raw/
) STRICT, WITHOUT ROWID;

-- The bytes that one path held at one time.
CREATE TABLE capture (
    id         INTEGER PRIMARY KEY,
    act        INTEGER NOT NULL,
    instrument INTEGER NOT NULL REFERENCES term (id),
    path       TEXT NOT NULL,
    modified   INTEGER NOT NULL,         -- nanoseconds since 1970
    size       INTEGER NOT NULL,
    sha256     BLOB NOT NULL,
    plan       INTEGER NOT NULL REFERENCES plan_version (id),
    repeat_of  INTEGER,                  -- a capture with the same bytes; nothing was read
    continues  INTEGER                   -- the path's older capture, whose bytes these begin with
) STRICT;
CREATE INDEX capture_path ON capture (path);
CREATE INDEX capture_bytes ON capture (sha256);

-- The account of a capture's lines, anew whenever an act changes it.
CREATE TABLE account (
    id      INTEGER PRIMARY KEY,
    act     INTEGER NOT NULL,
    capture INTEGER NOT NULL,
    lines   TEXT NOT NULL                -- JSON
) STRICT;
CREATE INDEX account_capture ON account (capture);

-- One act's readings and holds. Rows that name a filing without a row here are not yet published.
CREATE TABLE filing (
    id            INTEGER PRIMARY KEY,
    act           INTEGER NOT NULL,
    capture       INTEGER,
    first_reading INTEGER,
    last_reading  INTEGER,
    readings      INTEGER NOT NULL,
    holds         INTEGER NOT NULL,
    digest        BLOB NOT NULL          -- over the salted digests of its readings, holds, sightings and goings
) STRICT;
CREATE INDEX filing_act ON filing (act);
CREATE INDEX filing_capture ON filing (capture);

CREATE TABLE reading (
    id         INTEGER PRIMARY KEY,
    filing     INTEGER NOT NULL,
    capture    INTEGER,                  -- NULL: entered by hand
    line       INTEGER,
    byte_from  INTEGER,
    byte_to    INTEGER,
    cell       TEXT,                     -- where in a workbook
    instrument INTEGER NOT NULL,
    measure    INTEGER NOT NULL,
    condition  INTEGER NOT NULL,
    replicate  INTEGER NOT NULL,
    labelled   INTEGER NOT NULL,         -- the replicate's number came from the export
    session    INTEGER NOT NULL,
    text       TEXT,                     -- as exported
    exported   REAL,                     -- the number as exported, in unit
    unit       INTEGER NOT NULL,         -- as exported; 0 = the measure's
    number     REAL,                     -- in the measure's unit
    mark       TEXT,                     -- < or >
    written    TEXT,                     -- the time as written
    moment     INTEGER,                  -- UTC, milliseconds since 1970; NULL: only the day is known
    operator   INTEGER NOT NULL,         -- 0 = not said
    plan       INTEGER NOT NULL,
    identity   INTEGER,                  -- hash of what identifies it in its instrument's exports; NULL: no export's own
    ordinal    INTEGER NOT NULL,         -- its order among equals in the export
    supersedes INTEGER,
    source     INTEGER NOT NULL,         -- 0 export, 1 by hand, 2 amended
    salt       BLOB,
    digest     BLOB,                     -- only once removed
    removed    INTEGER
) STRICT;
CREATE INDEX reading_identity ON reading (identity);
CREATE INDEX reading_cell ON reading (session, measure, condition, replicate);
CREATE INDEX reading_supersedes ON reading (supersedes) WHERE supersedes IS NOT NULL;

CREATE TABLE reading_event (
    id      INTEGER PRIMARY KEY,
    act     INTEGER NOT NULL,
    reading INTEGER NOT NULL,
    kind    TEXT NOT NULL CHECK (kind IN ('struck', 'restored', 'superseded'))
) STRICT;
CREATE INDEX reading_event_reading ON reading_event (reading);

CREATE TABLE hold (
    id        INTEGER PRIMARY KEY,
    filing    INTEGER NOT NULL,
    capture   INTEGER NOT NULL,
    reason    TEXT NOT NULL,
    line      INTEGER,                   -- NULL: the whole file
    cell      TEXT,
    byte_from INTEGER,
    byte_to   INTEGER,
    column    TEXT NOT NULL,             -- '' = the whole row
    row_key   BLOB NOT NULL,             -- the row as written, with its order among equals
    row       TEXT,                      -- as exported
    detail    TEXT,                      -- JSON: what is wrong, and the likeliest answers
    salt      BLOB,
    digest    BLOB,
    removed   INTEGER
) STRICT;
CREATE INDEX hold_capture ON hold (capture);
CREATE INDEX hold_row ON hold (row_key);
CREATE INDEX hold_filing ON hold (filing);

CREATE TABLE hold_event (
    id     INTEGER PRIMARY KEY,
    act    INTEGER NOT NULL,
    hold   INTEGER NOT NULL,
    state  TEXT NOT NULL CHECK (state IN ('decided', 'dismissed')),
    answer TEXT,                         -- JSON; NULL: settled by a change of plan, roster or bytes
    salt   BLOB,
    digest BLOB,
    removed INTEGER
) STRICT;
CREATE INDEX hold_event_hold ON hold_event (hold);

-- A held row that came again in a later capture.
CREATE TABLE sighting (
    id      INTEGER PRIMARY KEY,
    filing  INTEGER NOT NULL,
    capture INTEGER NOT NULL,
    hold    INTEGER NOT NULL,
    line    INTEGER
) STRICT;
CREATE INDEX sighting_capture ON sighting (capture);
CREATE INDEX sighting_filing ON sighting (filing);
CREATE INDEX sighting_hold ON sighting (hold);

-- A reading that a later export no longer holds.
CREATE TABLE gone (
    id      INTEGER PRIMARY KEY,
    filing  INTEGER NOT NULL,
    reading INTEGER NOT NULL
) STRICT;
CREATE INDEX gone_filing ON gone (filing);

-- Why a planned reading will not come.
CREATE TABLE accounted (
    id      INTEGER PRIMARY KEY,
    act     INTEGER NOT NULL,
    subject INTEGER NOT NULL REFERENCES subject (id),
    visit   TEXT NOT NULL,
    measure TEXT                         -- NULL: all of the visit
) STRICT;

CREATE TABLE cut (
    id    INTEGER PRIMARY KEY,
    act   INTEGER NOT NULL,
    name  TEXT NOT NULL UNIQUE,
    trail INTEGER NOT NULL
) STRICT;

-- A subject's data were removed by this act; only then may rows be blanked and raw copies be replaced.
CREATE TABLE removal (
    id      INTEGER PRIMARY KEY,
    act     INTEGER NOT NULL UNIQUE,
    subject INTEGER NOT NULL REFERENCES subject (id),
    rows    INTEGER NOT NULL,            -- how many it blanked
    digest  BLOB NOT NULL                -- over what is left of them: no other row can be passed off as removed
) STRICT;
CREATE TABLE raw_removal (
    id      INTEGER PRIMARY KEY,
    act     INTEGER NOT NULL,
    sha256  BLOB NOT NULL,               -- of the bytes as exported
    instead BLOB NOT NULL                -- of the bytes with the subject blanked
) STRICT;
CREATE INDEX raw_removal_bytes ON raw_removal (sha256);

-- Working tables: what can be made anew from the above and the export folders. Rows here may change.
CREATE TABLE staging (
    filing INTEGER PRIMARY KEY
) STRICT;
CREATE TABLE noticed (
    path       TEXT PRIMARY KEY,
    instrument TEXT NOT NULL,
    state      TEXT NOT NULL,            -- captured, settling, ignored, unreachable
    size       INTEGER NOT NULL,
    modified   INTEGER NOT NULL,
    changed    INTEGER NOT NULL,
    capture    INTEGER,
    detail     TEXT
) STRICT;
CREATE TABLE working (
    name  TEXT PRIMARY KEY,
    value TEXT NOT NULL
) STRICT;

-- Append-only, on whatever connection: the INSERT trigger is what holds against INSERT OR REPLACE, which deletes
-- without firing DELETE triggers unless a connection has asked for that.
CREATE TRIGGER trail_once BEFORE INSERT ON trail
WHEN EXISTS (SELECT 1 FROM trail WHERE number = NEW.number)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of trail cannot be replaced'); END;
CREATE TRIGGER trail_stays BEFORE DELETE ON trail
BEGIN SELECT RAISE(ABORT, 'append-only: a row of trail cannot be deleted'); END;
CREATE TRIGGER trail_same BEFORE UPDATE ON trail
BEGIN SELECT RAISE(ABORT, 'append-only: a row of trail cannot be changed'); END;
CREATE TRIGGER term_once BEFORE INSERT ON term
WHEN EXISTS (SELECT 1 FROM term WHERE id = NEW.id OR text = NEW.text)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of term cannot be replaced'); END;
CREATE TRIGGER term_stays BEFORE DELETE ON term
BEGIN SELECT RAISE(ABORT, 'append-only: a row of term cannot be deleted'); END;
CREATE TRIGGER term_same BEFORE UPDATE ON term
BEGIN SELECT RAISE(ABORT, 'append-only: a row of term cannot be changed'); END;
CREATE TRIGGER subject_once BEFORE INSERT ON subject
WHEN EXISTS (SELECT 1 FROM subject WHERE id = NEW.id OR code = NEW.code)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of subject cannot be replaced'); END;
CREATE TRIGGER subject_stays BEFORE DELETE ON subject
BEGIN SELECT RAISE(ABORT, 'append-only: a row of subject cannot be deleted'); END;
CREATE TRIGGER subject_same BEFORE UPDATE ON subject
BEGIN SELECT RAISE(ABORT, 'append-only: a row of subject cannot be changed'); END;
CREATE TRIGGER session_once BEFORE INSERT ON session
WHEN EXISTS (SELECT 1 FROM session WHERE id = NEW.id OR (subject = NEW.subject AND day = NEW.day AND label = NEW.label))
BEGIN SELECT RAISE(ABORT, 'append-only: a row of session cannot be replaced'); END;
CREATE TRIGGER session_stays BEFORE DELETE ON session
BEGIN SELECT RAISE(ABORT, 'append-only: a row of session cannot be deleted'); END;
CREATE TRIGGER session_same BEFORE UPDATE ON session
BEGIN SELECT RAISE(ABORT, 'append-only: a row of session cannot be changed'); END;
CREATE TRIGGER plan_version_once BEFORE INSERT ON plan_version
WHEN EXISTS (SELECT 1 FROM plan_version WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of plan_version cannot be replaced'); END;
CREATE TRIGGER plan_version_stays BEFORE DELETE ON plan_version
BEGIN SELECT RAISE(ABORT, 'append-only: a row of plan_version cannot be deleted'); END;
CREATE TRIGGER plan_version_same BEFORE UPDATE ON plan_version
BEGIN SELECT RAISE(ABORT, 'append-only: a row of plan_version cannot be changed'); END;
CREATE TRIGGER roster_event_once BEFORE INSERT ON roster_event
WHEN EXISTS (SELECT 1 FROM roster_event WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of roster_event cannot be replaced'); END;
CREATE TRIGGER roster_event_stays BEFORE DELETE ON roster_event
BEGIN SELECT RAISE(ABORT, 'append-only: a row of roster_event cannot be deleted'); END;
CREATE TRIGGER roster_event_same BEFORE UPDATE ON roster_event
WHEN NOT (OLD.removed IS NULL AND NEW.removed IS NOT NULL AND NEW.removed IN (SELECT act FROM removal) AND NEW.digest IS NOT NULL
    AND NEW.value IS NULL AND NEW.salt IS NULL
    AND NEW.id IS OLD.id AND NEW.act IS OLD.act AND NEW.subject IS OLD.subject AND NEW.field IS OLD.field)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of roster_event cannot be changed'); END;
CREATE TRIGGER capture_once BEFORE INSERT ON capture
WHEN EXISTS (SELECT 1 FROM capture WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of capture cannot be replaced'); END;
CREATE TRIGGER capture_stays BEFORE DELETE ON capture
BEGIN SELECT RAISE(ABORT, 'append-only: a row of capture cannot be deleted'); END;
CREATE TRIGGER capture_same BEFORE UPDATE ON capture
BEGIN SELECT RAISE(ABORT, 'append-only: a row of capture cannot be changed'); END;
CREATE TRIGGER account_once BEFORE INSERT ON account
WHEN EXISTS (SELECT 1 FROM account WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of account cannot be replaced'); END;
CREATE TRIGGER account_stays BEFORE DELETE ON account
BEGIN SELECT RAISE(ABORT, 'append-only: a row of account cannot be deleted'); END;
CREATE TRIGGER account_same BEFORE UPDATE ON account
BEGIN SELECT RAISE(ABORT, 'append-only: a row of account cannot be changed'); END;
CREATE TRIGGER filing_once BEFORE INSERT ON filing
WHEN EXISTS (SELECT 1 FROM filing WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of filing cannot be replaced'); END;
CREATE TRIGGER filing_stays BEFORE DELETE ON filing
BEGIN SELECT RAISE(ABORT, 'append-only: a row of filing cannot be deleted'); END;
CREATE TRIGGER filing_same BEFORE UPDATE ON filing
BEGIN SELECT RAISE(ABORT, 'append-only: a row of filing cannot be changed'); END;
CREATE TRIGGER reading_once BEFORE INSERT ON reading
WHEN EXISTS (SELECT 1 FROM reading WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of reading cannot be replaced'); END;
CREATE TRIGGER reading_stays BEFORE DELETE ON reading
WHEN EXISTS (SELECT 1 FROM filing WHERE id = OLD.filing)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of reading cannot be deleted'); END;
CREATE TRIGGER reading_same BEFORE UPDATE ON reading
WHEN NOT (OLD.removed IS NULL AND NEW.removed IS NOT NULL AND NEW.removed IN (SELECT act FROM removal) AND NEW.digest IS NOT NULL
    AND NEW.text IS NULL AND NEW.exported IS NULL AND NEW.number IS NULL AND NEW.mark IS NULL AND NEW.byte_from IS NULL AND NEW.byte_to IS NULL AND NEW.salt IS NULL
    AND NEW.id IS OLD.id AND NEW.filing IS OLD.filing AND NEW.capture IS OLD.capture AND NEW.line IS OLD.line AND NEW.cell IS OLD.cell AND NEW.instrument IS OLD.instrument AND NEW.measure IS OLD.measure AND NEW.condition IS OLD.condition AND NEW.replicate IS OLD.replicate AND NEW.labelled IS OLD.labelled AND NEW.session IS OLD.session AND NEW.unit IS OLD.unit AND NEW.written IS OLD.written AND NEW.moment IS OLD.moment AND NEW.operator IS OLD.operator AND NEW.plan IS OLD.plan AND NEW.identity IS OLD.identity AND NEW.ordinal IS OLD.ordinal AND NEW.supersedes IS OLD.supersedes AND NEW.source IS OLD.source)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of reading cannot be changed'); END;
CREATE TRIGGER reading_event_once BEFORE INSERT ON reading_event
WHEN EXISTS (SELECT 1 FROM reading_event WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of reading_event cannot be replaced'); END;
CREATE TRIGGER reading_event_stays BEFORE DELETE ON reading_event
BEGIN SELECT RAISE(ABORT, 'append-only: a row of reading_event cannot be deleted'); END;
CREATE TRIGGER reading_event_same BEFORE UPDATE ON reading_event
BEGIN SELECT RAISE(ABORT, 'append-only: a row of reading_event cannot be changed'); END;
CREATE TRIGGER hold_once BEFORE INSERT ON hold
WHEN EXISTS (SELECT 1 FROM hold WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of hold cannot be replaced'); END;
CREATE TRIGGER hold_stays BEFORE DELETE ON hold
WHEN EXISTS (SELECT 1 FROM filing WHERE id = OLD.filing)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of hold cannot be deleted'); END;
CREATE TRIGGER hold_same BEFORE UPDATE ON hold
WHEN NOT (OLD.removed IS NULL AND NEW.removed IS NOT NULL AND NEW.removed IN (SELECT act FROM removal) AND NEW.digest IS NOT NULL
    AND NEW.row IS NULL AND NEW.detail IS NULL AND NEW.byte_from IS NULL AND NEW.byte_to IS NULL AND NEW.salt IS NULL
    AND NEW.id IS OLD.id AND NEW.filing IS OLD.filing AND NEW.capture IS OLD.capture AND NEW.reason IS OLD.reason AND NEW.line IS OLD.line AND NEW.cell IS OLD.cell AND NEW.column IS OLD.column AND NEW.row_key IS OLD.row_key)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of hold cannot be changed'); END;
CREATE TRIGGER hold_event_once BEFORE INSERT ON hold_event
WHEN EXISTS (SELECT 1 FROM hold_event WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of hold_event cannot be replaced'); END;
CREATE TRIGGER hold_event_stays BEFORE DELETE ON hold_event
BEGIN SELECT RAISE(ABORT, 'append-only: a row of hold_event cannot be deleted'); END;
CREATE TRIGGER hold_event_same BEFORE UPDATE ON hold_event
WHEN NOT (OLD.removed IS NULL AND NEW.removed IS NOT NULL AND NEW.removed IN (SELECT act FROM removal) AND NEW.digest IS NOT NULL
    AND NEW.answer IS NULL AND NEW.salt IS NULL
    AND NEW.id IS OLD.id AND NEW.act IS OLD.act AND NEW.hold IS OLD.hold AND NEW.state IS OLD.state)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of hold_event cannot be changed'); END;
CREATE TRIGGER sighting_once BEFORE INSERT ON sighting
WHEN EXISTS (SELECT 1 FROM sighting WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of sighting cannot be replaced'); END;
CREATE TRIGGER sighting_stays BEFORE DELETE ON sighting
WHEN EXISTS (SELECT 1 FROM filing WHERE id = OLD.filing)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of sighting cannot be deleted'); END;
CREATE TRIGGER sighting_same BEFORE UPDATE ON sighting
BEGIN SELECT RAISE(ABORT, 'append-only: a row of sighting cannot be changed'); END;
CREATE TRIGGER gone_once BEFORE INSERT ON gone
WHEN EXISTS (SELECT 1 FROM gone WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of gone cannot be replaced'); END;
CREATE TRIGGER gone_stays BEFORE DELETE ON gone
WHEN EXISTS (SELECT 1 FROM filing WHERE id = OLD.filing)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of gone cannot be deleted'); END;
CREATE TRIGGER gone_same BEFORE UPDATE ON gone
BEGIN SELECT RAISE(ABORT, 'append-only: a row of gone cannot be changed'); END;
CREATE TRIGGER accounted_once BEFORE INSERT ON accounted
WHEN EXISTS (SELECT 1 FROM accounted WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of accounted cannot be replaced'); END;
CREATE TRIGGER accounted_stays BEFORE DELETE ON accounted
BEGIN SELECT RAISE(ABORT, 'append-only: a row of accounted cannot be deleted'); END;
CREATE TRIGGER accounted_same BEFORE UPDATE ON accounted
BEGIN SELECT RAISE(ABORT, 'append-only: a row of accounted cannot be changed'); END;
CREATE TRIGGER cut_once BEFORE INSERT ON cut
WHEN EXISTS (SELECT 1 FROM cut WHERE id = NEW.id OR name = NEW.name)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of cut cannot be replaced'); END;
CREATE TRIGGER cut_stays BEFORE DELETE ON cut
BEGIN SELECT RAISE(ABORT, 'append-only: a row of cut cannot be deleted'); END;
CREATE TRIGGER cut_same BEFORE UPDATE ON cut
BEGIN SELECT RAISE(ABORT, 'append-only: a row of cut cannot be changed'); END;
CREATE TRIGGER raw_once BEFORE INSERT ON raw
WHEN EXISTS (SELECT 1 FROM raw WHERE sha256 = NEW.sha256)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of raw cannot be replaced'); END;
CREATE TRIGGER raw_stays BEFORE DELETE ON raw
WHEN (EXISTS (SELECT 1 FROM capture WHERE sha256 = OLD.sha256)
        OR EXISTS (SELECT 1 FROM raw_removal WHERE instead = OLD.sha256))
    AND NOT EXISTS (SELECT 1 FROM raw_removal WHERE sha256 = OLD.sha256)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of raw cannot be deleted'); END;
CREATE TRIGGER raw_same BEFORE UPDATE ON raw
BEGIN SELECT RAISE(ABORT, 'append-only: a row of raw cannot be changed'); END;
CREATE TRIGGER removal_once BEFORE INSERT ON removal
WHEN EXISTS (SELECT 1 FROM removal WHERE id = NEW.id OR act = NEW.act)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of removal cannot be replaced'); END;
CREATE TRIGGER removal_stays BEFORE DELETE ON removal
BEGIN SELECT RAISE(ABORT, 'append-only: a row of removal cannot be deleted'); END;
CREATE TRIGGER removal_same BEFORE UPDATE ON removal
BEGIN SELECT RAISE(ABORT, 'append-only: a row of removal cannot be changed'); END;
CREATE TRIGGER raw_removal_once BEFORE INSERT ON raw_removal
WHEN EXISTS (SELECT 1 FROM raw_removal WHERE id = NEW.id)
BEGIN SELECT RAISE(ABORT, 'append-only: a row of raw_removal cannot be replaced'); END;
CREATE TRIGGER raw_removal_stays BEFORE DELETE ON raw_removal
BEGIN SELECT RAISE(ABORT, 'append-only: a row of raw_removal cannot be deleted'); END;
CREATE TRIGGER raw_removal_same BEFORE UPDATE ON raw_removal
BEGIN SELECT RAISE(ABORT, 'append-only: a row of raw_removal cannot be changed'); END;
