//! The ledger: where scored records and outcomes are kept, matched and folded into window
//! summaries.
//!
//! * A record or outcome that is acknowledged is on disk. Requests that come while a commit runs
//!   are committed together by the one writer.
//! * The same id again changes nothing. An outcome may come before its record, twice, or be
//!   corrected; the summaries follow in the same transaction.
//! * A window is a UTC day of record time. Its summaries are always what a recomputation from the
//!   raw records would give; [`Ledger::verify`] compares.
//! * Raw records may be removed by age; the summaries of their days stay and are final. A record or
//!   outcome that comes later for such a day is kept, but is in no summary.
//!
//! A ledger is a SQLite file, for one machine, or a PostgreSQL data base that the replicas of a fleet
//! share; [`move_from_sqlite`] brings it from the one to the other. A file is copied with
//! [`Ledger::backup`] while it is written to; a data base with `pg_dump`.
//!
//! The crate knows no clock: whoever calls says when things happen.

mod acts;
mod codes;
mod compare;
mod error;
mod fold;
mod ledger;
mod postgres;
mod recomputed;
mod sqlite;
mod store;
#[cfg(test)]
mod tests;
mod types;
mod url;
mod writer;

pub use crate::postgres::{Moved, PostgresAddress, move_from_sqlite};
pub use error::LedgerError;
pub use fold::{MOST_SEGMENT_VALUES, OTHER_SEGMENTS, day_of};
pub use ledger::{Ledger, Settings};
pub use sqlite::restore;
pub use store::{Job, Reader, Reply, Store};
pub use types::{
    Act, AuditEntry, Counts, FileEntry, FileStart, NewOutcome, NewRecord, OutcomeState, Outcomes, Pruned,
    RawOutcome, RawPair, RawRecord, Records, ShadowScore, ShadowScores, Stream, VerifyDifference,
    VersionChange, VersionRow, VersionState, WindowSummary,
};
pub use url::LedgerUrl;
