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

-- Who published what, when.
CREATE TABLE audit (
    number INTEGER PRIMARY KEY,
    at INTEGER NOT NULL,
    who TEXT NOT NULL,
    what TEXT NOT NULL,
    model INTEGER NOT NULL REFERENCES model,
    from_version INTEGER REFERENCES version,
    to_version INTEGER REFERENCES version
) STRICT;

-- In order of arrival. Numbers are 64-bit floats, little-endian, one after another.
CREATE TABLE record (
    number INTEGER PRIMARY KEY,
    model INTEGER NOT NULL,
    version INTEGER NOT NULL,
    id_hash INTEGER NOT NULL,
    id TEXT NOT NULL,
    time INTEGER NOT NULL,
    received INTEGER NOT NULL,
    log_odds BLOB NOT NULL,
    inputs BLOB NOT NULL,
    segments TEXT NOT NULL
) STRICT;
CREATE INDEX record_by_id ON record (id_hash);

CREATE TABLE outcome (
    number INTEGER PRIMARY KEY,
    model INTEGER NOT NULL,
    id_hash INTEGER NOT NULL,
    id TEXT NOT NULL,
    category TEXT NOT NULL,
    observed_at INTEGER NOT NULL,
    received INTEGER NOT NULL
) STRICT;
CREATE INDEX outcome_by_id ON outcome (id_hash);

-- What an outcome was before it was corrected.
CREATE TABLE former_outcome (
    number INTEGER PRIMARY KEY,
    outcome INTEGER NOT NULL REFERENCES outcome,
    category TEXT NOT NULL,
    observed_at INTEGER NOT NULL,
    received INTEGER NOT NULL
) STRICT;

-- A day of record time of one version; field and value are empty for all of its records.
CREATE TABLE summary (
    version INTEGER NOT NULL,
    day INTEGER NOT NULL,
    field TEXT NOT NULL,
    value TEXT NOT NULL,
    scored REAL NOT NULL,
    outcomes REAL NOT NULL,
    summary TEXT NOT NULL,
    PRIMARY KEY (version, day, field, value)
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
