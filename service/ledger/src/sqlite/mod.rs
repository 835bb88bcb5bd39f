//! The embedded store: one SQLite file in write-ahead mode.
//!
//! Everything that grows with the number of records is appended in order of arrival; ids are found
//! by an index of its own kind (see `index`). Other processes may write to the same file: their
//! commits are noticed, and what is kept at hand here is brought up to date then.

mod backup;
mod checkpoints;

mod files;
mod filter;
mod index;
mod keeping;
mod matching;
mod names;
mod raw;
mod reader;
mod rebuild;
mod removal;
mod rows;
mod schema;
mod spans;
mod verify;
mod versions;
mod writing;

use std::path::{Path, PathBuf};

use rusqlite::{Connection, TransactionBehavior};

pub use self::backup::restore;
use self::checkpoints::Checkpoints;
use self::index::{IdIndex, Kind};
use self::names::Names;
use self::reader::SqliteReader;
use self::spans::Spans;
use self::writing::{Writing, horizon};
use crate::error::LedgerError;
use crate::fold::Windows;
use crate::store::{Job, Reader, Reply, Store};

/// Opens a file that is to be read whole: brought up to date, and closed to other writers until the
/// transaction ends that is begun here.
pub(crate) fn open_to_move(path: &Path) -> Result<Connection, LedgerError> {
    if !path.exists() {
        return Err(LedgerError::NoLedger { path: path.to_owned() });
    }
    let mut connection = schema::open_for_writing(path)?;
    rebuild::rebuild(&mut connection)?;
    connection.execute_batch("BEGIN IMMEDIATE")?;
    Ok(connection)
}

/// Summaries kept at hand between commits; beyond it all are forgotten and fetched when needed.
const MOST_CACHED_WINDOWS: usize = 4096;

/// Rows that are found by memory alone; when there are more, they are written as a run. It takes
/// about 16 MB of memory for records and as much for outcomes, half a second to read again after a
/// restart, and a twentieth of a second to write.
const ROWS_PER_RUN: usize = 500_000;

/// The store.
pub(crate) struct SqliteStore {
    path: PathBuf,
    connection: Connection,
    cache: Cache,
    checkpoints: Checkpoints,
    rows_per_run: usize,
}

/// What the writer keeps at hand between commits.
struct Cache {
    windows: Windows,
    names: Names,
    records: IdIndex,
    outcomes: IdIndex,
    spans: Spans,
    /// First day whose raw records are kept.
    horizon: i64,
    /// SQLite's counter of commits by other connections; `None` before anything was read.
    commits_of_others: Option<i64>,
}

impl Cache {
    fn new() -> Self {
        Self {
            windows: Windows::default(),
            names: Names::default(),
            records: IdIndex::new(Kind::Record),
            outcomes: IdIndex::new(Kind::Outcome),
            spans: Spans::default(),
            horizon: i64::MIN,
            commits_of_others: None,
        }
    }

    /// Takes in what other connections have written since the last time.
    fn catch_up(&mut self, connection: &Connection) -> Result<(), LedgerError> {
        let commits: i64 = connection.pragma_query_value(None, "data_version", |row| row.get(0))?;
        if self.commits_of_others == Some(commits) {
            if self.windows.len() > MOST_CACHED_WINDOWS {
                self.windows = Windows::default();
            }
            return Ok(());
        }
        self.commits_of_others = None;
        self.windows = Windows::default();
        self.names = Names::default();
        self.spans = Spans::default();
        self.records.catch_up(connection)?;
        self.outcomes.catch_up(connection)?;
        self.horizon = horizon(connection)?;
        self.commits_of_others = Some(commits);
        Ok(())
    }

    fn committed(&mut self) {
        self.windows.committed();
        self.records.committed();
        self.outcomes.committed();
    }

    fn rolled_back(&mut self) {
        self.windows.rolled_back();
        self.records.rolled_back();
        self.outcomes.rolled_back();
        // Numbers of names may have been given that are free again, and the horizon may have moved.
        self.names = Names::default();
        self.spans = Spans::default();
        self.commits_of_others = None;
    }
}

impl SqliteStore {
    /// Opens a ledger, made anew where there is none.
    pub(crate) fn open(path: &Path) -> Result<Self, LedgerError> {
        Self::with_runs(path, ROWS_PER_RUN)
    }

    /// Opens a ledger that writes a run for that many rows.
    pub(crate) fn with_runs(path: &Path, rows_per_run: usize) -> Result<Self, LedgerError> {
        let mut connection = schema::open_for_writing(path)?;
        rebuild::rebuild(&mut connection)?;
        let checkpoints = Checkpoints::start(path)?;
        let mut store =
            Self { path: path.to_owned(), connection, cache: Cache::new(), checkpoints, rows_per_run };
        // Read once now, so that the first request need not wait for it.
        let transaction = store.connection.transaction()?;
        store.cache.catch_up(&transaction)?;
        drop(transaction);
        Ok(store)
    }

    /// Lets the file grow by so many pages at most, as if the disk were full then.
    #[cfg(test)]
    pub(crate) fn allow_pages(&self, more: u32) -> Result<(), LedgerError> {
        let pages: u32 = self.connection.pragma_query_value(None, "page_count", |row| row.get(0))?;
        let query = format!("PRAGMA max_page_count = {}", pages + more);
        Ok(self.connection.query_row(&query, [], |_| Ok(()))?)
    }

    fn write(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        let transaction = self.connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
        self.cache.catch_up(&transaction)?;
        let mut writing = Writing::new(&transaction, &mut self.cache);
        let replies = jobs.iter().map(|job| writing.perform(job)).collect::<Result<Vec<_>, _>>()?;
        writing.finish()?;
        transaction.commit()?;
        Ok(replies)
    }

    /// Writes a run of an index whose memory is full.
    fn flush(&mut self, kind: Kind) -> Result<(), LedgerError> {
        let transaction = self.connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
        self.cache.catch_up(&transaction)?;
        let index = match kind {
            Kind::Record => &mut self.cache.records,
            Kind::Outcome => &mut self.cache.outcomes,
        };
        if index.recent() >= self.rows_per_run {
            index.flush(&transaction)?;
            transaction.commit()?;
            index.catch_up(&self.connection)?;
        }
        Ok(())
    }
}

impl Store for SqliteStore {
    fn commit(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        let replies = self.write(jobs);
        match &replies {
            Ok(_) => {
                self.cache.committed();
                self.checkpoints.note();
            }
            Err(_) => self.cache.rolled_back(),
        }
        if replies.is_ok() && jobs.iter().any(|job| matches!(job, Job::Delete { .. })) {
            removal::forget_log(&self.connection);
        }
        replies
    }

    fn maintain(&mut self) -> Result<(), LedgerError> {
        if self.cache.records.recent() >= self.rows_per_run {
            self.flush(Kind::Record)?;
        }
        if self.cache.outcomes.recent() >= self.rows_per_run {
            self.flush(Kind::Outcome)?;
        }
        Ok(())
    }

    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(SqliteReader::open(&self.path)?))
    }
}
