-- One row. Whoever writes takes it first, so there is one writer at a time, and learns from it
-- whether others have written: `commits` counts all commits, `names` those that changed names,
-- streams, versions or partitions. `horizon` is the first day whose raw records are kept;
-- `summary_version` the latest version of the sums in summaries that any program has written.
CREATE TABLE state (
    one boolean PRIMARY KEY DEFAULT true CHECK (one),
    schema_version integer NOT NULL,
    summary_version bigint NOT NULL DEFAULT 0,
    commits bigint NOT NULL,
    names bigint NOT NULL,
    horizon bigint NOT NULL,
    next_record bigint NOT NULL,
    next_outcome bigint NOT NULL
);

CREATE TABLE model (
    number bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
    name text NOT NULL UNIQUE
);

CREATE TABLE version (
    number bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
    model bigint NOT NULL REFERENCES model,
    fingerprint text NOT NULL,
    file text NOT NULL,
    state text NOT NULL,
    published_at bigint NOT NULL,
    UNIQUE (model, fingerprint)
);

-- Who did what, when and why.
CREATE TABLE audit (
    number bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
    at bigint NOT NULL,
    who text NOT NULL,
    why text NOT NULL,
    what text NOT NULL,
    model bigint NOT NULL REFERENCES model,
    from_version bigint REFERENCES version,
    to_version bigint REFERENCES version
);

CREATE TABLE category (
    number bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
    model bigint NOT NULL REFERENCES model,
    name text NOT NULL,
    UNIQUE (model, name)
);

-- Partitioned by day of record time. Within a day in order of arrival. Numbers are 64-bit floats,
-- little-endian, one after another; segments are a JSON array of texts; times are microseconds since
-- 1970, days are counted from 1970-01-01.
CREATE TABLE record (
    day bigint NOT NULL,
    number bigint NOT NULL,
    model bigint NOT NULL,
    version bigint NOT NULL,
    time bigint NOT NULL,
    received bigint NOT NULL,
    id text NOT NULL,
    log_odds bytea NOT NULL,
    inputs bytea NOT NULL,
    segments text NOT NULL,
    PRIMARY KEY (day, number)
) PARTITION BY LIST (day);

-- The outcome of a record, beside it.
CREATE TABLE outcome (
    day bigint NOT NULL,
    record bigint NOT NULL,
    number bigint NOT NULL,
    category bigint NOT NULL,
    observed_at bigint NOT NULL,
    received bigint NOT NULL,
    PRIMARY KEY (day, record)
) PARTITION BY LIST (day);

-- What shadow versions made of a record.
CREATE TABLE shadow_score (
    day bigint NOT NULL,
    record bigint NOT NULL,
    version bigint NOT NULL,
    log_odds bytea NOT NULL,
    inputs bytea NOT NULL,
    segments text NOT NULL,
    PRIMARY KEY (day, record, version)
) PARTITION BY LIST (day);

-- Days beyond those that have partitions of their own.
CREATE TABLE record_other PARTITION OF record DEFAULT;
CREATE TABLE outcome_other PARTITION OF outcome DEFAULT;
CREATE TABLE shadow_score_other PARTITION OF shadow_score DEFAULT;

-- Where the record with an id of this hash is; of all days, because an id comes once.
CREATE TABLE record_id (
    hash bigint NOT NULL,
    day bigint NOT NULL,
    number bigint NOT NULL
);
CREATE INDEX record_id_by_hash ON record_id (hash);

-- Outcomes whose records have not come.
CREATE TABLE waiting_outcome (
    number bigint PRIMARY KEY,
    model bigint NOT NULL,
    hash bigint NOT NULL,
    id text NOT NULL,
    category bigint NOT NULL,
    observed_at bigint NOT NULL,
    received bigint NOT NULL
);
CREATE INDEX waiting_outcome_by_hash ON waiting_outcome (hash);
CREATE INDEX waiting_outcome_by_received ON waiting_outcome (received);

-- What an outcome, matched or waiting, was before it was corrected.
CREATE TABLE former_outcome (
    number bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
    outcome bigint NOT NULL,
    category bigint NOT NULL,
    observed_at bigint NOT NULL,
    received bigint NOT NULL
);
CREATE INDEX former_outcome_by_outcome ON former_outcome (outcome);

-- All records of a version (field and value empty), or those of one segment.
CREATE TABLE stream (
    number bigint GENERATED ALWAYS AS IDENTITY PRIMARY KEY,
    version bigint NOT NULL REFERENCES version,
    field text NOT NULL,
    value text NOT NULL,
    UNIQUE (version, field, value)
);

-- A day of record time of one stream, as MessagePack, and the version of its sums. Written often:
-- time spent on compression would be time in which others wait.
CREATE TABLE summary (
    stream bigint NOT NULL REFERENCES stream,
    day bigint NOT NULL,
    version bigint NOT NULL,
    summary bytea NOT NULL,
    PRIMARY KEY (stream, day)
);
ALTER TABLE summary ALTER COLUMN summary SET STORAGE EXTERNAL;

-- Records and matched outcomes of each day, pruned ones included.
CREATE TABLE day (
    model bigint NOT NULL,
    day bigint NOT NULL,
    records bigint NOT NULL,
    matched bigint NOT NULL,
    PRIMARY KEY (model, day)
);

CREATE TABLE file (
    model bigint NOT NULL,
    sha256 text NOT NULL,
    name text NOT NULL,
    claim text NOT NULL,
    result text NOT NULL,
    started bigint NOT NULL,
    finished bigint,
    PRIMARY KEY (model, sha256)
);

INSERT INTO state (schema_version, commits, names, horizon, next_record, next_outcome)
VALUES (1, 0, 0, -9223372036854775808, 1, 1);
