//! What the audit trail says of acts, and what a version must be to be published.

use kilter_model::ModelFile;

use crate::error::LedgerError;
use crate::fold::FoldedVersion;
use crate::types::{VersionRow, VersionState};

/// A version was published and made live.
pub(crate) const PUBLISHED_LIVE: &str = "publish as live";
/// A version that was there was made live.
pub(crate) const PROMOTED: &str = "promote";
/// The version that was live before was made live again.
pub(crate) const ROLLED_BACK: &str = "roll back";
/// A version was retired.
pub(crate) const RETIRED: &str = "retire";

/// A line of the audit trail before it is written.
pub(crate) struct Line<'a> {
    pub(crate) model: i64,
    pub(crate) what: &'a str,
    pub(crate) from: Option<i64>,
    pub(crate) to: Option<i64>,
}

/// A version was published.
pub(crate) fn publication(state: VersionState) -> &'static str {
    match state {
        VersionState::Live => PUBLISHED_LIVE,
        VersionState::Shadow => "publish as shadow",
        VersionState::Retired => "publish as retired",
    }
}

/// Records were deleted on request.
pub(crate) fn deletion(deleted: usize) -> String {
    format!("delete {deleted} records")
}

/// Refuses a file that the ledger could not fold by, or that is not what it is called.
pub(crate) fn check_file(version: &VersionRow) -> Result<(), LedgerError> {
    let refused = |reason: String| LedgerError::ModelFile { model: version.model.clone(), reason };
    let model = ModelFile::from_json(&version.file).map_err(|error| refused(error.to_string()))?;
    if model.name != version.model || model.fingerprint != version.fingerprint {
        return Err(refused(format!("the file is of `{}` {}", model.name, model.fingerprint)));
    }
    FoldedVersion::of_model(0, model).map(|_| ()).map_err(|error| refused(error.to_string()))
}
