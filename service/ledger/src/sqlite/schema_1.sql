CREATE TABLE model (
    number INTEGER PRIMARY KEY,
    name TEXT NOT NULL UNIQUE
) STRICT;

CREATE TABLE version (
    number INTEGER PRIMARY KEY,
    model INTEGER NOT NULL REFERENCES model,
    fingerprint TEXT NOT NULL,
    file TEXT NOT NULL,
    state TEXT NOT NULL,
    published_at INTEGER NOT NULL,
    UNIQUE (model, fingerprint)
) STRICT;

-- Who did what, when and why.
CREATE TABLE audit (
    number INTEGER PRIMARY KEY,
    at INTEGER NOT NULL,
    who TEXT NOT NULL,
    why TEXT NOT NULL,
    what TEXT NOT NULL,
    model INTEGER NOT NULL REFERENCES model,
    from_version INTEGER REFERENCES version,
    to_version INTEGER REFERENCES version
) STRICT;

CREATE TABLE category (
    number INTEGER PRIMARY KEY,
    model INTEGER NOT NULL REFERENCES model,
    name TEXT NOT NULL,
    UNIQUE (model, name)
) STRICT;

-- In order of arrival. Numbers are 64-bit floats, little-endian, one after another; segments are a
-- JSON array of texts; times are microseconds since 1970, days are counted from 1970-01-01.
CREATE TABLE record (
    number INTEGER PRIMARY KEY,
    model INTEGER NOT NULL,
    version INTEGER NOT NULL,
    time INTEGER NOT NULL,
    received INTEGER NOT NULL,
    id TEXT NOT NULL,
    log_odds BLOB NOT NULL,
    inputs BLOB NOT NULL,
    segments TEXT NOT NULL
) STRICT;

-- What shadow versions made of a record.
CREATE TABLE shadow_score (
    record INTEGER NOT NULL,
    version INTEGER NOT NULL,
    log_odds BLOB NOT NULL,
    inputs BLOB NOT NULL,
    segments TEXT NOT NULL,
    PRIMARY KEY (record, version)
) STRICT, WITHOUT ROWID;

-- In order of arrival. One that waits for its record has the id; one that is matched has the
-- number of the record instead.
CREATE TABLE outcome (
    number INTEGER PRIMARY KEY,
    model INTEGER NOT NULL,
    id_hash INTEGER NOT NULL,
    category INTEGER NOT NULL REFERENCES category,
    observed_at INTEGER NOT NULL,
    received INTEGER NOT NULL,
    record INTEGER,
    id TEXT
) STRICT;
CREATE INDEX outcome_waiting ON outcome (model, received) WHERE record IS NULL;

-- What an outcome was before it was corrected.
CREATE TABLE former_outcome (
    number INTEGER PRIMARY KEY,
    outcome INTEGER NOT NULL REFERENCES outcome,
    category INTEGER NOT NULL REFERENCES category,
    observed_at INTEGER NOT NULL,
    received INTEGER NOT NULL
) STRICT;
CREATE INDEX former_outcome_by_outcome ON former_outcome (outcome);

-- Which numbers of records (kind 0) and matched outcomes (kind 1) belong to which day of record
-- time. What comes together is numbered day by day, so there are few spans for many numbers.
CREATE TABLE span (
    kind INTEGER NOT NULL,
    model INTEGER NOT NULL,
    day INTEGER NOT NULL,
    first INTEGER NOT NULL,
    last INTEGER NOT NULL,
    PRIMARY KEY (kind, model, day, first)
) STRICT, WITHOUT ROWID;

-- Hashes of ids and the numbers of the records (kind 0) or outcomes (kind 1) with these ids, sorted
-- by hash, in runs that are written once. A run is of blocks with consecutive numbers; `fences` are
-- their first hashes. `last` is the last number in the run: what is younger is read from the tables.
CREATE TABLE run (
    number INTEGER PRIMARY KEY,
    kind INTEGER NOT NULL,
    last INTEGER NOT NULL,
    first_block INTEGER NOT NULL,
    fences BLOB NOT NULL,
    filter BLOB NOT NULL
) STRICT;
CREATE TABLE run_block (
    number INTEGER PRIMARY KEY,
    entries BLOB NOT NULL
) STRICT;

-- All records of a version (field and value empty), or those of one segment.
CREATE TABLE stream (
    number INTEGER PRIMARY KEY,
    version INTEGER NOT NULL REFERENCES version,
    field TEXT NOT NULL,
    value TEXT NOT NULL,
    UNIQUE (version, field, value)
) STRICT;

-- A day of record time of one stream, as MessagePack.
CREATE TABLE summary (
    number INTEGER PRIMARY KEY,
    stream INTEGER NOT NULL REFERENCES stream,
    day INTEGER NOT NULL,
    summary BLOB NOT NULL,
    UNIQUE (stream, day)
) STRICT;

-- Records and matched outcomes of each day, pruned ones included.
CREATE TABLE day (
    model INTEGER NOT NULL,
    day INTEGER NOT NULL,
    records INTEGER NOT NULL,
    matched INTEGER NOT NULL,
    PRIMARY KEY (model, day)
) STRICT, WITHOUT ROWID;

-- The first day whose raw records are kept, and the next numbers of records and outcomes where
-- the last ones were removed.
CREATE TABLE mark (
    name TEXT PRIMARY KEY,
    value INTEGER NOT NULL
) STRICT, WITHOUT ROWID;

CREATE TABLE file (
    model INTEGER NOT NULL,
    sha256 TEXT NOT NULL,
    name TEXT NOT NULL,
    claim TEXT NOT NULL,
    result TEXT NOT NULL,
    started INTEGER NOT NULL,
    finished INTEGER,
    PRIMARY KEY (model, sha256)
) STRICT, WITHOUT ROWID;
