//! The ledger: where scored records and outcomes are kept, matched and folded into window
//! summaries.
//!
//! * A record or outcome that is acknowledged is on disk. Requests that come while a commit runs
//!   are committed together by the one writer.
//! * The same id again changes nothing. An outcome may come before its record, twice, or be
//!   corrected; the summaries follow in the same transaction.
//! * A window is a UTC day of record time. Its summaries are always what a recomputation from the
//!   raw records would give; [`Ledger::verify`] compares.
//!
//! The crate knows no clock: whoever calls says when things happen.

mod error;
mod fold;
mod ledger;
mod sqlite;
mod store;
mod types;
mod url;

pub use error::LedgerError;
pub use fold::{MOST_SEGMENT_VALUES, OTHER_SEGMENTS, day_of};
pub use ledger::{Ledger, Settings};
pub use store::{Job, Reader, Reply, Store};
pub use types::{
    FileEntry, FileStart, NewOutcome, NewRecord, OutcomeState, Outcomes, Records, Stream, VerifyDifference,
    VersionRow, VersionState, WindowSummary,
};
pub use url::LedgerUrl;
