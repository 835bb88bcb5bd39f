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
    /// More is waiting to be written than the ledger takes at one time.
    #[error("the ledger has more to write than it takes at one time; try again in a moment")]
    Busy,
    /// The writer has ended.
    #[error("the ledger is closed")]
    Closed,
    /// Reading or writing failed; nothing of the request was kept.
    #[error("the ledger failed: {0}")]
    Storage(Arc<rusqlite::Error>),
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
}

impl From<rusqlite::Error> for LedgerError {
    fn from(error: rusqlite::Error) -> Self {
        Self::Storage(Arc::new(error))
    }
}

impl LedgerError {
    pub(crate) fn damaged(what: impl Into<String>, reason: impl std::fmt::Display) -> Self {
        Self::Damaged { what: what.into(), reason: reason.to_string() }
    }
}
