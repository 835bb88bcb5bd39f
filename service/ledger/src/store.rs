//! What every store of the ledger can do.

use kilter_drift::Summary;

use crate::error::LedgerError;
use crate::types::{
    FileEntry, FileStart, OutcomeState, Outcomes, Records, VerifyDifference, VersionRow, VersionState,
    WindowSummary,
};

/// Something to be written.
#[derive(Debug, Clone)]
pub enum Job {
    /// Keep scored records.
    Records(Records),
    /// Keep outcomes.
    Outcomes(Outcomes),
    /// Make a model file a version; a live one retires the version that was live.
    Publish {
        /// The version.
        version: VersionRow,
        /// Who asked for it.
        who: String,
    },
    /// Take up a file, or learn what is known of its content.
    BeginFile(FileStart),
    /// Note that a file is finished.
    FinishFile {
        /// Name of the model.
        model: String,
        /// SHA-256 of its content.
        sha256: String,
        /// When, microseconds since 1970.
        finished: i64,
    },
}

impl Job {
    /// Rows that the job writes: what a commit is filled up by.
    pub(crate) fn size(&self) -> usize {
        match self {
            Self::Records(records) => records.records.len(),
            Self::Outcomes(outcomes) => outcomes.outcomes.len(),
            Self::Publish { .. } | Self::BeginFile(_) | Self::FinishFile { .. } => 1,
        }
    }
}

/// What became of a job.
#[derive(Debug, Clone, PartialEq)]
pub enum Reply {
    /// For each record whether its id was there already.
    Records(Vec<bool>),
    /// What became of each outcome.
    Outcomes(Vec<OutcomeState>),
    /// The version is published.
    Published,
    /// What was known of the file's content before; `None` where it is new.
    File(Option<FileEntry>),
    /// The file is finished.
    Finished,
}

/// A store of the ledger. One writer calls [`Store::commit`]; reading may go on meanwhile.
pub trait Store: Send {
    /// Writes all jobs in one transaction, durably, and gives their replies in order.
    ///
    /// # Errors
    /// Where anything failed: nothing of any of the jobs is kept then.
    fn commit(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError>;

    /// A reader of what is committed.
    ///
    /// # Errors
    /// Where the store cannot be reached.
    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError>;
}

/// Reads what is committed.
pub trait Reader: Send {
    /// All versions in a state, the oldest first.
    fn versions(&self, state: Option<VersionState>) -> Result<Vec<VersionRow>, LedgerError>;

    /// Window summaries of a version from one day to another, both included.
    fn summaries(
        &self,
        model: &str,
        version: &str,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError>;

    /// First and last day with records of a version.
    fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError>;

    /// Records that wait for their outcome.
    fn waiting_records(&self) -> Result<u64, LedgerError>;

    /// Compares all summaries with what the raw records give: counts exactly, sums to 1e-9.
    fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError>;
}

/// Why two summaries of the same records differ by more than the order of addition explains.
pub(crate) fn difference(stored: &Summary, computed: &Summary) -> Option<String> {
    const RELATIVE: f64 = 1e-9;
    let (Ok(stored), Ok(computed)) = (serde_json::to_value(stored), serde_json::to_value(computed)) else {
        return Some("a summary cannot be written".into());
    };
    differing_place(&stored, &computed, RELATIVE, "")
}

/// Sums that cancel are compared on the scale of a record's contribution.
const SCALE_OF_A_RECORD: f64 = 1.0;

fn differing_place(
    a: &serde_json::Value,
    b: &serde_json::Value,
    relative: f64,
    place: &str,
) -> Option<String> {
    use serde_json::Value;
    match (a, b) {
        (Value::Number(left), Value::Number(right)) => {
            let (left, right) = (left.as_f64()?, right.as_f64()?);
            let scale = left.abs().max(right.abs()).max(SCALE_OF_A_RECORD);
            ((left - right).abs() > relative * scale)
                .then(|| format!("{place}: {left} stored, {right} computed"))
        }
        (Value::Array(left), Value::Array(right)) if left.len() == right.len() => {
            left.iter().zip(right).enumerate().find_map(|(index, (left, right))| {
                differing_place(left, right, relative, &format!("{place}[{index}]"))
            })
        }
        (Value::Object(left), Value::Object(right)) if left.len() == right.len() => {
            left.iter().find_map(|(key, left)| {
                let right = right.get(key).unwrap_or(&Value::Null);
                differing_place(left, right, relative, &format!("{place}.{key}"))
            })
        }
        _ => (a != b).then(|| format!("{place}: {a} stored, {b} computed")),
    }
}
