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

impl LedgerError {
    pub(crate) fn damaged(what: impl Into<String>, reason: impl std::fmt::Display) -> Self {
        Self::Damaged { what: what.into(), reason: reason.to_string() }
    }
}
