-- The ledger, version 1. Times are UTC, ISO 8601. Text is as the recipe and the frames had it.

PRAGMA application_id = 0x53475244;  -- "SGRD"

-- One row for each time the program worked on this folder.
CREATE TABLE runs (
    run           INTEGER PRIMARY KEY,
    started       TEXT NOT NULL,
    ended         TEXT,            -- NULL while it runs, and for ever if it was killed
    ending        TEXT,            -- finished, stopped, or NULL
    version       TEXT NOT NULL,   -- of this program
    recipe        TEXT NOT NULL,
    recipe_sha256 TEXT NOT NULL,
    recipe_text   TEXT NOT NULL,
    host          TEXT NOT NULL,
    process       INTEGER NOT NULL,
    jobs          INTEGER NOT NULL, -- devices at work at once
    threads       INTEGER NOT NULL  -- cores that each could use
);

-- One row for each device: what the last run said of it.
CREATE TABLE devices (
    device        INTEGER PRIMARY KEY,
    run           INTEGER NOT NULL REFERENCES runs,
    serial        TEXT NOT NULL,
    folder        TEXT NOT NULL UNIQUE,  -- below the run's folder
    lot           TEXT,
    wafer         TEXT,
    die_row       INTEGER,
    die_column    INTEGER,
    taken         REAL,            -- start of the earliest frame, s since 1970 UTC
    outcome       TEXT NOT NULL CHECK (outcome IN ('inspected', 'failed')),
    grade         TEXT,            -- NULL: no grade was met
    decision      TEXT CHECK (decision IN ('accept', 'reject', 'undecided', 'ungraded')),
    failure       TEXT,            -- why it could not be inspected, one sentence
    trace         TEXT,            -- where the program was when an unexpected error came
    recipe        TEXT NOT NULL,
    recipe_sha256 TEXT NOT NULL,
    versions      TEXT NOT NULL,   -- JSON object, library to version
    described     TEXT NOT NULL,   -- digest of recipe, version and what is known of each frame
    state         TEXT NOT NULL,   -- digest of the input files' sizes and times of change
    finished      TEXT NOT NULL,
    seconds       REAL NOT NULL,
    CHECK ((outcome = 'inspected') = (decision IS NOT NULL)),
    CHECK ((outcome = 'failed') = (failure IS NOT NULL))
);
CREATE INDEX devices_by_serial ON devices (serial);
CREATE INDEX devices_by_wafer ON devices (lot, wafer, die_row, die_column);
CREATE INDEX devices_by_grade ON devices (decision, grade);
CREATE INDEX devices_by_run ON devices (run);

-- In the tables below ``place`` keeps the order in which things were said.
CREATE TABLE inputs (
    device INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place  INTEGER NOT NULL,
    label  TEXT NOT NULL,          -- path below the source
    bytes  INTEGER NOT NULL,
    sha256 TEXT NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;

CREATE TABLE measurements (
    device INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place  INTEGER NOT NULL,
    name   TEXT NOT NULL,
    scope  TEXT NOT NULL,
    value  REAL NOT NULL,
    standard_uncertainty REAL NOT NULL,
    unit   TEXT NOT NULL,
    n      INTEGER NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;
CREATE INDEX measurements_by_name ON measurements (name, scope, value);

CREATE TABLE defect_counts (
    device   INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place    INTEGER NOT NULL,
    kind     TEXT NOT NULL,
    scope    TEXT NOT NULL,
    found    INTEGER NOT NULL,
    expected REAL NOT NULL,
    standard_uncertainty REAL NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;
CREATE INDEX defect_counts_by_kind ON defect_counts (kind, scope, found);

-- A limit as the recipe states it; shared by all devices that were held against it.
CREATE TABLE limits (
    "limit"     INTEGER PRIMARY KEY,
    name        TEXT NOT NULL,
    relation    TEXT NOT NULL CHECK (relation IN ('<=', '>=')),
    bound       REAL NOT NULL,
    unit        TEXT NOT NULL,
    line        INTEGER NOT NULL,
    of          TEXT NOT NULL,
    scope       TEXT,
    zone        TEXT,
    temperature REAL,
    rule        TEXT
);

CREATE TABLE limit_results (
    device      INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place       INTEGER NOT NULL,
    grade       TEXT NOT NULL,
    "limit"     INTEGER NOT NULL REFERENCES limits,
    scope       TEXT NOT NULL,
    value       REAL,
    standard_uncertainty    REAL,
    margin      REAL,
    margin_in_uncertainties REAL,
    probability REAL,
    outcome     TEXT NOT NULL CHECK (outcome IN ('accept', 'reject', 'undecided')),
    reason      TEXT NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;
CREATE INDEX limit_results_by_limit ON limit_results ("limit", outcome);

CREATE TABLE reasons (
    device INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place  INTEGER NOT NULL,
    reason TEXT NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;

CREATE TABLE findings (
    device    INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place     INTEGER NOT NULL,
    severity  TEXT NOT NULL CHECK (severity IN ('note', 'warning', 'error')),
    "where"   TEXT NOT NULL,
    seen      TEXT NOT NULL,
    remedy    TEXT NOT NULL,
    undecides TEXT NOT NULL,       -- JSON list of measurement names
    PRIMARY KEY (device, place)
) WITHOUT ROWID;

CREATE TABLE not_measured (
    device INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place  INTEGER NOT NULL,
    stage  TEXT NOT NULL,
    lacked TEXT NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;

CREATE TABLE stage_times (
    device  INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place   INTEGER NOT NULL,
    stage   TEXT NOT NULL,
    seconds REAL NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;

-- The files that a device's folder holds, so that a later run knows which ones to take away.
CREATE TABLE files (
    device INTEGER NOT NULL REFERENCES devices ON DELETE CASCADE,
    place  INTEGER NOT NULL,
    name   TEXT NOT NULL,
    PRIMARY KEY (device, place)
) WITHOUT ROWID;

-- Files on their way into a device's folder, or out of it: what a run that was killed just then
-- may have left there. Empty otherwise.
CREATE TABLE moving (
    folder TEXT NOT NULL,
    name   TEXT NOT NULL,
    PRIMARY KEY (folder, name)
) WITHOUT ROWID;
