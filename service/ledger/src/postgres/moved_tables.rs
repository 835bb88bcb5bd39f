//! How the tables of a SQLite ledger become those of a PostgreSQL ledger.

/// A table of the one ledger and the same in the other.
pub(super) struct Table {
    pub(super) name: &'static str,
    /// Reads its rows from SQLite.
    pub(super) select: &'static str,
    /// Whether the first column is the time of the record, in place of which its day is written.
    pub(super) day_first: bool,
    /// Writes them to PostgreSQL.
    pub(super) copy: &'static str,
    pub(super) columns: u16,
    /// Counts them there.
    pub(super) count: &'static str,
}

/// In an order in which rows come after those that they refer to.
pub(super) const TABLES: [Table; 13] = [
    Table {
        name: "model",
        select: "SELECT number, name FROM model",
        day_first: false,
        copy: "COPY model (number, name) FROM STDIN (FORMAT binary)",
        columns: 2,
        count: "SELECT count(*) FROM model",
    },
    Table {
        name: "version",
        select: "SELECT number, model, fingerprint, file, state, published_at FROM version",
        day_first: false,
        copy: "COPY version (number, model, fingerprint, file, state, published_at) FROM STDIN (FORMAT binary)",
        columns: 6,
        count: "SELECT count(*) FROM version",
    },
    Table {
        name: "audit",
        select: "SELECT number, at, who, why, what, model, from_version, to_version FROM audit",
        day_first: false,
        copy: "COPY audit (number, at, who, why, what, model, from_version, to_version) \
               FROM STDIN (FORMAT binary)",
        columns: 8,
        count: "SELECT count(*) FROM audit",
    },
    Table {
        name: "category",
        select: "SELECT number, model, name FROM category",
        day_first: false,
        copy: "COPY category (number, model, name) FROM STDIN (FORMAT binary)",
        columns: 3,
        count: "SELECT count(*) FROM category",
    },
    Table {
        name: "stream",
        select: "SELECT number, version, field, value FROM stream",
        day_first: false,
        copy: "COPY stream (number, version, field, value) FROM STDIN (FORMAT binary)",
        columns: 4,
        count: "SELECT count(*) FROM stream",
    },
    Table {
        name: "summary",
        select: "SELECT stream, day, version, summary FROM summary",
        day_first: false,
        copy: "COPY summary (stream, day, version, summary) FROM STDIN (FORMAT binary)",
        columns: 4,
        count: "SELECT count(*) FROM summary",
    },
    Table {
        name: "day",
        select: "SELECT model, day, records, matched FROM day",
        day_first: false,
        copy: "COPY day (model, day, records, matched) FROM STDIN (FORMAT binary)",
        columns: 4,
        count: "SELECT count(*) FROM day",
    },
    Table {
        name: "file",
        select: "SELECT model, sha256, name, claim, result, started, finished FROM file",
        day_first: false,
        copy: "COPY file (model, sha256, name, claim, result, started, finished) FROM STDIN (FORMAT binary)",
        columns: 7,
        count: "SELECT count(*) FROM file",
    },
    Table {
        name: "record",
        select: "SELECT time, number, model, version, time, received, id, log_odds, inputs, segments \
                 FROM record ORDER BY number",
        day_first: true,
        copy: "COPY record (day, number, model, version, time, received, id, log_odds, inputs, segments) \
               FROM STDIN (FORMAT binary)",
        columns: 10,
        count: "SELECT count(*) FROM record",
    },
    Table {
        name: "shadow_score",
        select: "SELECT time, shadow_score.record, shadow_score.version, shadow_score.log_odds, \
                 shadow_score.inputs, shadow_score.segments \
                 FROM shadow_score JOIN record ON record.number = shadow_score.record",
        day_first: true,
        copy: "COPY shadow_score (day, record, version, log_odds, inputs, segments) \
               FROM STDIN (FORMAT binary)",
        columns: 6,
        count: "SELECT count(*) FROM shadow_score",
    },
    Table {
        name: "outcome",
        select: "SELECT time, outcome.record, outcome.number, category, observed_at, outcome.received \
                 FROM outcome JOIN record ON record.number = outcome.record ORDER BY outcome.record",
        day_first: true,
        copy: "COPY outcome (day, record, number, category, observed_at, received) FROM STDIN (FORMAT binary)",
        columns: 6,
        count: "SELECT count(*) FROM outcome",
    },
    Table {
        name: "waiting_outcome",
        select: "SELECT number, model, id_hash, id, category, observed_at, received FROM outcome \
                 WHERE record IS NULL",
        day_first: false,
        copy: "COPY waiting_outcome (number, model, hash, id, category, observed_at, received) \
               FROM STDIN (FORMAT binary)",
        columns: 7,
        count: "SELECT count(*) FROM waiting_outcome",
    },
    Table {
        name: "former_outcome",
        select: "SELECT number, outcome, category, observed_at, received FROM former_outcome",
        day_first: false,
        copy: "COPY former_outcome (number, outcome, category, observed_at, received) \
               FROM STDIN (FORMAT binary)",
        columns: 5,
        count: "SELECT count(*) FROM former_outcome",
    },
];
