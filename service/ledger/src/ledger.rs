//! The handle: one writer thread with group commit, readers beside it.

use std::fmt;
use std::ops::ControlFlow;
use std::path::Path;
use std::sync::mpsc::sync_channel;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use kilter_drift::Summary;

use crate::error::LedgerError;
use crate::postgres::PostgresStore;
use crate::sqlite::SqliteStore;
use crate::store::{Job, Reader, Reply, Store};
use crate::types::{
    AuditEntry, Counts, Pruned, RawOutcome, RawPair, RawRecord, Stream, VerifyDifference, VersionRow,
    VersionState, WindowSummary,
};
use crate::url::LedgerUrl;
use crate::writer::{Done, Writer};

/// Settings of a ledger.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Settings {
    /// Requests that wait for the writer at one time; more are answered [`LedgerError::Busy`].
    pub longest_queue: usize,
    /// Rows that wait for the writer at one time; more are answered [`LedgerError::Busy`].
    pub most_rows_queued: usize,
    /// Rows that one commit takes at most, unless a single request has more.
    pub rows_per_commit: usize,
}

impl Default for Settings {
    fn default() -> Self {
        Self { longest_queue: 1024, most_rows_queued: 500_000, rows_per_commit: 20_000 }
    }
}

/// Rows that are removed by one transaction of [`Ledger::prune`]: few enough that requests that
/// come meanwhile hardly notice.
const ROWS_PRUNED_AT_ONCE: u32 = 5_000;

/// The ledger. Clones share the writer; when the last is dropped, what is queued is written and
/// the writer ends.
#[derive(Clone)]
pub struct Ledger {
    shared: Arc<Shared>,
}

struct Shared {
    writer: Writer,
    /// Readers that are not in use; there is always one to make others from.
    readers: Mutex<Readers>,
}

struct Readers {
    first: Box<dyn Reader>,
    idle: Vec<Box<dyn Reader>>,
}

impl fmt::Debug for Ledger {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.debug_struct("Ledger").finish_non_exhaustive()
    }
}

impl Ledger {
    /// Opens a ledger, made anew where there is none.
    ///
    /// # Errors
    /// Where it cannot be opened, or was written by a later program.
    pub fn open(url: &LedgerUrl, settings: Settings) -> Result<Self, LedgerError> {
        match url {
            LedgerUrl::Sqlite(path) => Self::with_store(Box::new(SqliteStore::open(path)?), settings),
            LedgerUrl::Postgres(address) => {
                Self::with_store(Box::new(PostgresStore::open(address)?), settings)
            }
        }
    }

    /// A ledger on a store.
    ///
    /// # Errors
    /// Where the store cannot be read, or no thread can be started.
    pub fn with_store(store: Box<dyn Store>, settings: Settings) -> Result<Self, LedgerError> {
        let readers = Mutex::new(Readers { first: store.reader()?, idle: Vec::new() });
        let writer = Writer::start(store, settings)?;
        Ok(Self { shared: Arc::new(Shared { writer, readers }) })
    }

    /// Hands a job to the writer; `done` is called from its thread once the job is on disk, or has
    /// failed as a whole.
    ///
    /// # Errors
    /// [`LedgerError::Busy`] at once where too much is waiting; `done` is not called then.
    pub fn submit(
        &self,
        job: Job,
        done: impl FnOnce(Result<Reply, LedgerError>) + Send + 'static,
    ) -> Result<(), LedgerError> {
        self.shared.writer.submit(job, Box::new(done))
    }

    /// Hands a job to the writer and waits until it is on disk.
    ///
    /// # Errors
    /// Where the job failed; nothing of it is kept then. A full queue is waited for.
    pub fn write(&self, job: Job) -> Result<Reply, LedgerError> {
        let (answer, wait) = sync_channel(1);
        let done: Done = Box::new(move |reply| {
            // Nobody waits any more where the caller has gone.
            let _ = answer.send(reply);
        });
        self.shared.writer.wait_to_submit(job, done)?;
        wait.recv().map_err(|_| LedgerError::Closed)?
    }

    /// Removes raw records and outcomes of days before `before` (counted from 1970-01-01), some at
    /// a time, so that other requests are written in between. Summaries stay.
    ///
    /// # Errors
    /// Where the ledger cannot be written; what is left is removed by the next call.
    pub fn prune(&self, before: i64) -> Result<Pruned, LedgerError> {
        let mut total = Pruned::default();
        loop {
            let reply = self.write(Job::Prune { before, most_rows: ROWS_PRUNED_AT_ONCE })?;
            let Reply::Pruned(pruned) = reply else { return Err(LedgerError::Closed) };
            total.records += pruned.records;
            total.outcomes += pruned.outcomes;
            if !pruned.more {
                return Ok(total);
            }
        }
    }

    /// All versions in a state, the oldest first; all versions without one.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn versions(&self, state: Option<VersionState>) -> Result<Vec<VersionRow>, LedgerError> {
        self.read(|reader| reader.versions(state))
    }

    /// The live version of a model.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn live(&self, model: &str) -> Result<Option<VersionRow>, LedgerError> {
        Ok(self.versions(Some(VersionState::Live))?.into_iter().find(|version| version.model == model))
    }

    /// The audit trail of a model, the oldest entry first.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn audit(&self, model: &str) -> Result<Vec<AuditEntry>, LedgerError> {
        self.read(|reader| reader.audit(model))
    }

    /// Streams of a version: all records first, then segments by field and value.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn streams(&self, model: &str, version: &str) -> Result<Vec<Stream>, LedgerError> {
        self.read(|reader| reader.streams(model, version))
    }

    /// Window summaries of a version from one day to another, both included; days are counted from
    /// 1970-01-01.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn summaries(
        &self,
        model: &str,
        version: &str,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError> {
        self.read(|reader| reader.summaries(model, version, None, days))
    }

    /// Window summaries of one stream of a version.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn summaries_of(
        &self,
        model: &str,
        version: &str,
        stream: &Stream,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError> {
        self.read(|reader| reader.summaries(model, version, Some(stream), days))
    }

    /// The windows of one stream of a version added up; `None` where there are none. Delays of
    /// outcomes by category are in it.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn merged(
        &self,
        model: &str,
        version: &str,
        stream: &Stream,
        days: [i64; 2],
    ) -> Result<Option<Summary>, LedgerError> {
        let mut windows = self.summaries_of(model, version, stream, days)?.into_iter();
        let Some(mut merged) = windows.next().map(|window| window.summary) else { return Ok(None) };
        for window in windows {
            merged.merge(&window.summary).map_err(|error| LedgerError::damaged("summaries", error))?;
        }
        Ok(Some(merged))
    }

    /// First and last day with records of a version; `None` where it has none.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError> {
        self.read(|reader| reader.days(model, version))
    }

    /// Records of all models that wait for their outcome.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn waiting_records(&self) -> Result<u64, LedgerError> {
        self.read(|reader| reader.waiting_records())
    }

    /// How much the ledger holds of a model.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn counts(&self, model: &str) -> Result<Counts, LedgerError> {
        self.read(|reader| reader.counts(model))
    }

    /// Visits the records that a version scored, as live version or as shadow, with times from
    /// `period[0]` to before `period[1]` (microseconds since 1970), day by day, until told to stop.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn records(
        &self,
        model: &str,
        version: &str,
        period: [i64; 2],
        mut visit: impl FnMut(RawRecord) -> ControlFlow<()>,
    ) -> Result<(), LedgerError> {
        self.read(|reader| reader.records(model, version, period, &mut visit))
    }

    /// Visits the records that `version` answered and `shadow` scored beside it.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn pairs(
        &self,
        model: &str,
        version: &str,
        shadow: &str,
        period: [i64; 2],
        mut visit: impl FnMut(RawPair) -> ControlFlow<()>,
    ) -> Result<(), LedgerError> {
        self.read(|reader| reader.pairs(model, version, shadow, period, &mut visit))
    }

    /// A record by its id, as the version that answered scored it.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn record(&self, model: &str, id: &str) -> Result<Option<RawRecord>, LedgerError> {
        self.read(|reader| reader.record(model, id))
    }

    /// What the outcome of a record was before it was corrected, the oldest first.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn former_outcomes(&self, model: &str, id: &str) -> Result<Vec<RawOutcome>, LedgerError> {
        self.read(|reader| reader.former_outcomes(model, id))
    }

    /// Computes all summaries anew from the raw records and gives what differs: counts exactly,
    /// sums by more than 1e-9.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError> {
        self.read(|reader| reader.verify())
    }

    /// Writes a consistent copy of the ledger to a file while writing goes on. A file that is there
    /// is replaced when the copy is whole.
    ///
    /// # Errors
    /// [`LedgerError::Copy`] where the copy cannot be written, and [`LedgerError::CopiedOtherwise`]
    /// for a PostgreSQL ledger: `pg_dump` copies it, online and consistent.
    pub fn backup(&self, path: &Path) -> Result<(), LedgerError> {
        self.read(|reader| reader.backup(path))
    }

    /// Asks a reader that nobody else uses meanwhile.
    fn read<T>(
        &self,
        question: impl FnOnce(&dyn Reader) -> Result<T, LedgerError>,
    ) -> Result<T, LedgerError> {
        let reader = {
            let mut readers = self.readers();
            match readers.idle.pop() {
                Some(reader) => reader,
                None => readers.first.another()?,
            }
        };
        let answer = question(reader.as_ref())?;
        self.readers().idle.push(reader);
        Ok(answer)
    }

    fn readers(&self) -> MutexGuard<'_, Readers> {
        self.shared.readers.lock().unwrap_or_else(PoisonError::into_inner)
    }
}
