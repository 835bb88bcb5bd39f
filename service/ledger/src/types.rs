//! What goes into the ledger and comes out of it.

use kilter_drift::Summary;

/// A scored record to be kept.
#[derive(Debug, Clone, PartialEq)]
pub struct NewRecord {
    /// Its id, unique under the name of the model.
    pub id: String,
    /// Its time, microseconds since 1970-01-01T00:00:00Z.
    pub time: i64,
    /// Log-odds against the reference category, J-1 in model order.
    pub log_odds: Vec<f64>,
    /// One input per field, as [`kilter_model::Coded::inputs`] has them.
    pub inputs: Vec<f64>,
    /// One value per segment field of the model; empty where the record has none.
    pub segments: Vec<String>,
}

/// Records scored by one version.
#[derive(Debug, Clone, PartialEq)]
pub struct Records {
    /// Name of the model.
    pub model: String,
    /// Fingerprint of the version that scored them.
    pub version: String,
    /// When they were received, microseconds since 1970.
    pub received: i64,
    /// The records.
    pub records: Vec<NewRecord>,
}

/// An observed outcome.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct NewOutcome {
    /// Id of its record.
    pub id: String,
    /// The category that was observed.
    pub category: String,
    /// When, microseconds since 1970; the moment of arrival where it is not known.
    pub observed_at: Option<i64>,
}

/// Outcomes of records of one model.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Outcomes {
    /// Name of the model.
    pub model: String,
    /// When they were received, microseconds since 1970.
    pub received: i64,
    /// The outcomes.
    pub outcomes: Vec<NewOutcome>,
}

/// What became of an outcome.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum OutcomeState {
    /// Its record was there.
    Matched,
    /// It waits for its record.
    Waiting,
    /// It was known already; nothing changed.
    Repeated,
    /// It replaced a former one.
    Corrected,
    /// It was not taken in, for this reason.
    Refused(String),
}

/// What a version does.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum VersionState {
    /// It answers.
    Live,
    /// It is scored beside the live version.
    Shadow,
    /// It is kept for the record.
    Retired,
}

impl VersionState {
    pub(crate) fn name(self) -> &'static str {
        match self {
            Self::Live => "live",
            Self::Shadow => "shadow",
            Self::Retired => "retired",
        }
    }

    pub(crate) fn from_name(name: &str) -> Option<Self> {
        [Self::Live, Self::Shadow, Self::Retired].into_iter().find(|state| state.name() == name)
    }
}

/// A version of a model.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct VersionRow {
    /// Name of the model.
    pub model: String,
    /// Fingerprint.
    pub fingerprint: String,
    /// Text of the model file.
    pub file: String,
    /// What it does.
    pub state: VersionState,
    /// When it was published, microseconds since 1970.
    pub published_at: i64,
}

/// Which records of a version a summary is of.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Stream {
    /// All of them.
    All,
    /// Those of one segment.
    Segment {
        /// The segment field.
        field: String,
        /// Its value.
        value: String,
    },
}

/// The summary of one window of one stream.
#[derive(Debug, Clone, PartialEq)]
pub struct WindowSummary {
    /// The day, counted from 1970-01-01.
    pub day: i64,
    /// Which records.
    pub stream: Stream,
    /// Their summary.
    pub summary: Summary,
}

/// A file that a worker starts on.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct FileStart {
    /// Name of the model.
    pub model: String,
    /// SHA-256 of its content, hexadecimal.
    pub sha256: String,
    /// Its name as it came.
    pub name: String,
    /// The name under which its worker holds it.
    pub claim: String,
    /// The name of its results.
    pub result: String,
    /// When, microseconds since 1970.
    pub started: i64,
}

/// What the ledger knows of a file's content.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct FileEntry {
    /// Its name as it came first.
    pub name: String,
    /// The name under which its worker holds or held it.
    pub claim: String,
    /// The name of its results.
    pub result: String,
    /// When work on it began, microseconds since 1970.
    pub started: i64,
    /// When it was finished.
    pub finished: Option<i64>,
}

/// A summary that is not what its records give.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct VerifyDifference {
    /// Fingerprint of the version.
    pub version: String,
    /// The day, counted from 1970-01-01.
    pub day: i64,
    /// Which records.
    pub stream: Stream,
    /// What differs.
    pub reason: String,
}

/// What a shadow version made of one record.
#[derive(Debug, Clone, PartialEq)]
pub struct ShadowScore {
    /// Log-odds against the reference category, J-1 in the order of the shadow version.
    pub log_odds: Vec<f64>,
    /// One input per field of the shadow version.
    pub inputs: Vec<f64>,
    /// One value per segment field of the shadow version; empty where the record has none.
    pub segments: Vec<String>,
}

/// What a shadow version made of the records of a request.
#[derive(Debug, Clone, PartialEq)]
pub struct ShadowScores {
    /// Fingerprint of the shadow version.
    pub version: String,
    /// One entry per record of the request; `None` where the version refused the record.
    pub scores: Vec<Option<ShadowScore>>,
}

/// A change of what versions do.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum VersionChange {
    /// The version becomes live; the one that was live is retired.
    Promote(String),
    /// The version that was live before becomes live again; done again, it goes back further.
    Rollback,
    /// The version is retired, which ends a shadow. A live version cannot be retired.
    Retire(String),
}

/// Who did something, when and why.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Act {
    /// When, microseconds since 1970.
    pub at: i64,
    /// Who asked for it.
    pub who: String,
    /// Why; may be empty.
    pub why: String,
}

/// A line of the audit trail.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct AuditEntry {
    /// Who, when and why.
    pub act: Act,
    /// Name of the model.
    pub model: String,
    /// What was done.
    pub what: String,
    /// Fingerprint of the version that was live before.
    pub from: Option<String>,
    /// Fingerprint of the version that it was done to.
    pub to: Option<String>,
}

/// What was removed because of its age.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Pruned {
    /// Records.
    pub records: u64,
    /// Outcomes, those that waited for a record among them.
    pub outcomes: u64,
    /// Whether there is more to remove.
    pub more: bool,
}

/// How much the ledger holds of a model.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Counts {
    /// Records that were taken in, pruned ones included, deleted ones not.
    pub records: u64,
    /// Those of them with an outcome.
    pub matched: u64,
    /// Records at hand without an outcome.
    pub waiting_records: u64,
    /// Outcomes whose record has not come.
    pub waiting_outcomes: u64,
    /// First and last day of record time, counted from 1970-01-01.
    pub days: Option<[i64; 2]>,
}

/// A record as it is kept, handed to whoever reads the raw records.
#[derive(Debug, Clone, PartialEq)]
pub struct RawRecord {
    /// Its id.
    pub id: String,
    /// Its time, microseconds since 1970.
    pub time: i64,
    /// When it was received, microseconds since 1970.
    pub received: i64,
    /// Log-odds against the reference category, J-1 in the order of the version.
    pub log_odds: Vec<f64>,
    /// One input per field of the version.
    pub inputs: Vec<f64>,
    /// One value per segment field of the version.
    pub segments: Vec<String>,
    /// Its outcome, where it is known.
    pub outcome: Option<RawOutcome>,
}

/// The outcome of a record as it is kept.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RawOutcome {
    /// The category.
    pub category: String,
    /// When it was observed, microseconds since 1970.
    pub observed_at: i64,
    /// When it was received, microseconds since 1970.
    pub received: i64,
}

/// A record as the live version and a shadow version scored it.
#[derive(Debug, Clone, PartialEq)]
pub struct RawPair {
    /// As the version that answered scored it.
    pub record: RawRecord,
    /// What the shadow version made of it.
    pub shadow: ShadowScore,
}
