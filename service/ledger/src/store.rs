//! What every store of the ledger can do.

use std::ops::ControlFlow;
use std::path::Path;

use crate::error::LedgerError;
use crate::types::{
    Act, AuditEntry, Counts, FileEntry, FileStart, OutcomeState, Outcomes, Pruned, RawOutcome, RawPair,
    RawRecord, Records, ShadowScores, Stream, VerifyDifference, VersionChange, VersionRow, VersionState,
    WindowSummary,
};

/// Something to be written.
#[derive(Debug, Clone)]
pub enum Job {
    /// Keep scored records.
    Records(Records),
    /// Keep scored records together with what shadow versions made of them.
    RecordsWithShadows {
        /// The records, as the version that answers scored them.
        records: Records,
        /// What shadow versions made of the same records, in the same order.
        shadows: Vec<ShadowScores>,
    },
    /// Keep outcomes.
    Outcomes(Outcomes),
    /// Make a model file a version; a live one retires the version that was live.
    Publish {
        /// The version.
        version: VersionRow,
        /// Who asked for it.
        who: String,
    },
    /// Change what versions do.
    ChangeVersion {
        /// Name of the model.
        model: String,
        /// The change.
        change: VersionChange,
        /// Who, when and why.
        act: Act,
    },
    /// Forget records by their ids: record, scores, outcome and its history, and their share of the
    /// summaries. The audit trail says that it was done, but no ids. SQLite overwrites what it
    /// deletes; PostgreSQL may have it in its files until they are vacuumed and its log is reused.
    Delete {
        /// Name of the model.
        model: String,
        /// The ids.
        ids: Vec<String>,
        /// Who, when and why.
        act: Act,
    },
    /// Remove raw records and outcomes of days before `before`; their summaries stay and are final
    /// from then on.
    Prune {
        /// First day that is kept, counted from 1970-01-01.
        before: i64,
        /// Most rows of each kind that are removed at one time.
        most_rows: u32,
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
            Self::Records(records) | Self::RecordsWithShadows { records, .. } => records.records.len(),
            Self::Outcomes(outcomes) => outcomes.outcomes.len(),
            Self::Delete { ids, .. } => ids.len(),
            Self::Prune { most_rows, .. } => *most_rows as usize,
            Self::Publish { .. }
            | Self::ChangeVersion { .. }
            | Self::BeginFile(_)
            | Self::FinishFile { .. } => 1,
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
    /// The version that was changed, as it is now.
    Changed(VersionRow),
    /// For each id whether there was something to delete.
    Deleted(Vec<bool>),
    /// What was removed because of its age.
    Pruned(Pruned),
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

    /// Housekeeping between commits, when the replies have been given.
    ///
    /// # Errors
    /// Where it failed; nothing is lost then, and it is tried again later.
    fn maintain(&mut self) -> Result<(), LedgerError>;

    /// A reader of what is committed.
    ///
    /// # Errors
    /// Where the store cannot be reached.
    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError>;
}

/// Reads what is committed. Every method sees the ledger as of one moment, but for those that
/// visit raw records and [`Reader::verify`]: these see each day as of one moment.
pub trait Reader: Send {
    /// Another reader of the same store.
    fn another(&self) -> Result<Box<dyn Reader>, LedgerError>;

    /// All versions in a state, the oldest first.
    fn versions(&self, state: Option<VersionState>) -> Result<Vec<VersionRow>, LedgerError>;

    /// The audit trail of a model, the oldest entry first.
    fn audit(&self, model: &str) -> Result<Vec<AuditEntry>, LedgerError>;

    /// Streams of a version: all records first, then segments by field and value.
    fn streams(&self, model: &str, version: &str) -> Result<Vec<Stream>, LedgerError>;

    /// Window summaries of a version from one day to another, both included, of one stream or of
    /// all streams; ordered by day, then by stream.
    fn summaries(
        &self,
        model: &str,
        version: &str,
        stream: Option<&Stream>,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError>;

    /// First and last day with records of a version.
    fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError>;

    /// Records of all models that wait for their outcome.
    fn waiting_records(&self) -> Result<u64, LedgerError>;

    /// How much the ledger holds of a model.
    fn counts(&self, model: &str) -> Result<Counts, LedgerError>;

    /// Visits the records that a version scored, as live version or as shadow, with times from
    /// `period[0]` to before `period[1]` (microseconds since 1970), day by day.
    fn records(
        &self,
        model: &str,
        version: &str,
        period: [i64; 2],
        visit: &mut dyn FnMut(RawRecord) -> ControlFlow<()>,
    ) -> Result<(), LedgerError>;

    /// Visits the records that `version` answered and `shadow` scored beside it.
    fn pairs(
        &self,
        model: &str,
        version: &str,
        shadow: &str,
        period: [i64; 2],
        visit: &mut dyn FnMut(RawPair) -> ControlFlow<()>,
    ) -> Result<(), LedgerError>;

    /// A record by its id.
    fn record(&self, model: &str, id: &str) -> Result<Option<RawRecord>, LedgerError>;

    /// What the outcome of a record was before it was corrected, the oldest first.
    fn former_outcomes(&self, model: &str, id: &str) -> Result<Vec<RawOutcome>, LedgerError>;

    /// Compares all summaries with what the raw records give: counts exactly, sums to 1e-9.
    fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError>;

    /// Writes a consistent copy of the whole ledger while writing goes on;
    /// [`LedgerError::CopiedOtherwise`] where the store has a way of its own.
    fn backup(&self, path: &Path) -> Result<(), LedgerError>;
}
