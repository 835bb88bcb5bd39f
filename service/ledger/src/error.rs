//! Why the ledger could not do something.

use std::path::PathBuf;
use std::sync::Arc;

use kilter_drift::DriftError;

/// Why the ledger could not do something. Several requests share one commit, so an error may be
/// given to all of them: it can be cloned.
#[derive(Debug, Clone, thiserror::Error)]
#[non_exhaustive]
pub enum LedgerError {
    /// The address of the ledger cannot be used.
    #[error("`{url}` is no ledger that this build knows: {reason}")]
    Url {
        /// The address, without any password.
        url: String,
        /// What is wrong with it.
        reason: String,
    },
    /// The ledger could not be opened.
    #[error("could not open ledger `{}`: {source}", path.display())]
    Open {
        /// Its file.
        path: PathBuf,
        /// The cause.
        source: Arc<rusqlite::Error>,
    },
    /// The file is of another kind.
    #[error("`{}` is no ledger; name another file, or move it away to have a ledger made", path.display())]
    NoLedger {
        /// The file.
        path: PathBuf,
    },
    /// The ledger was written by a later program.
    #[error("ledger `{}` has schema {found}, this build knows up to {known}; use the program that wrote it", path.display())]
    NewerSchema {
        /// Its file.
        path: PathBuf,
        /// Schema version of the file.
        found: u32,
        /// Latest schema version that this build knows.
        known: u32,
    },
    /// A later program has taken over the ledger while this one was running.
    #[error("a later program has taken over the ledger; stop this one and start the later one in its place")]
    LaterProgram,
    /// More is waiting to be written than the ledger takes at one time.
    #[error("the ledger has more to write than it takes at one time; try again in a moment")]
    Busy,
    /// The writer could not be started.
    #[error("the ledger's writer could not be started: {reason}")]
    Thread {
        /// Why not.
        reason: String,
    },
    /// The writer has ended.
    #[error("the ledger is closed")]
    Closed,
    /// Reading or writing failed; nothing of the request was kept.
    #[error("the ledger failed: {0}")]
    Storage(Arc<rusqlite::Error>),
    /// The data base cannot be reached.
    #[error("could not reach ledger `{ledger}`: {reason}")]
    Connect {
        /// Its address, without any password.
        ledger: String,
        /// The cause.
        reason: String,
    },
    /// The data base failed; nothing of the request was kept.
    #[error("the ledger's data base failed: {}", crate::postgres::describe(.0))]
    Database(Arc<postgres::Error>),
    /// The connection to the data base was lost while a commit was under way, and nobody can tell
    /// any more whether it was kept.
    #[error(
        "it is not known whether the ledger kept the request; send it again, which changes nothing if it did"
    )]
    Unknown,
    /// A copy is made in another way.
    #[error(
        "a PostgreSQL ledger is copied with `pg_dump` and restored with `pg_restore`, which come with PostgreSQL"
    )]
    CopiedOtherwise,
    /// What is stored cannot be read back.
    #[error("the ledger holds {what} that cannot be read: {reason}")]
    Damaged {
        /// What it is.
        what: String,
        /// Why not.
        reason: String,
    },
    /// A record or outcome that no summary takes.
    #[error("record `{id}` cannot be summed up: {source}")]
    Summary {
        /// Id of the record.
        id: String,
        /// The cause.
        source: Arc<DriftError>,
    },
    /// A version that is not in the ledger.
    #[error("model `{model}` has no version {version}")]
    UnknownVersion {
        /// Name of the model.
        model: String,
        /// Fingerprint of the version.
        version: String,
    },
    /// A model file that the ledger cannot fold by.
    #[error("the model file for `{model}` cannot be published: {reason}")]
    ModelFile {
        /// Name of the model.
        model: String,
        /// What is wrong with the file.
        reason: String,
    },
    /// A live version cannot be retired.
    #[error("version {version} of model `{model}` is live; make another version live first")]
    LiveVersion {
        /// Name of the model.
        model: String,
        /// Fingerprint of the version.
        version: String,
    },
    /// There is nothing to go back to.
    #[error("model `{model}` has no earlier live version to go back to")]
    NoFormerVersion {
        /// Name of the model.
        model: String,
    },
    /// A ledger is moved to where there is one already.
    #[error("`{ledger}` holds a ledger already; name an empty data base")]
    NotEmpty {
        /// Its address, without any password.
        ledger: String,
    },
    /// A ledger was moved, but not all of it arrived.
    #[error(
        "{arrived} of {sent} rows of `{table}` arrived in the new ledger; keep the old one, and move it again"
    )]
    NotAllMoved {
        /// The table.
        table: &'static str,
        /// Rows that were sent.
        sent: u64,
        /// Rows that are there.
        arrived: u64,
    },
    /// A copy of the ledger could not be written or read.
    #[error("could not copy the ledger to `{}`: {reason}", path.display())]
    Copy {
        /// Where to.
        path: PathBuf,
        /// Why not.
        reason: String,
    },
}

impl From<rusqlite::Error> for LedgerError {
    fn from(error: rusqlite::Error) -> Self {
        Self::Storage(Arc::new(error))
    }
}

impl From<postgres::Error> for LedgerError {
    fn from(error: postgres::Error) -> Self {
        Self::Database(Arc::new(error))
    }
}

impl LedgerError {
    /// Sending rows failed; the error of the connection is wrapped in one of writing.
    pub(crate) fn sending(error: std::io::Error) -> Self {
        match error.downcast::<postgres::Error>() {
            Ok(error) => error.into(),
            Err(error) => Self::damaged("rows", error),
        }
    }

    /// Whether it is the store that fails, so that other requests would fail in the same way.
    pub(crate) fn is_of_the_store(&self) -> bool {
        match self {
            Self::Connect { .. } | Self::Unknown | Self::Closed => true,
            Self::Database(error) => crate::postgres::is_of_the_server(error),
            _ => false,
        }
    }

    pub(crate) fn damaged(what: impl Into<String>, reason: impl std::fmt::Display) -> Self {
        Self::Damaged { what: what.into(), reason: reason.to_string() }
    }
}
