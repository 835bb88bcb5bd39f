//! The store for a fleet: a PostgreSQL data base that several replicas write to at once.
//!
//! Who writes takes the one row of the table `state` first, so there is one writer at a time, and
//! each group of requests costs a fixed number of round trips: what is known of all ids is read,
//! changed in memory, and the difference is sent by COPY. Summaries are kept at hand as long as
//! nobody else has committed. Tables of raw rows are partitioned by day of record time.
//!
//! A connection that is lost is made again with growing pauses. Where it was lost while a commit was
//! under way, the server is asked what became of the transaction before anything is done again.

mod address;
mod apart;
mod applying;
mod copy;
mod difference;
mod encryption;
mod entries;
mod files;
mod moved_tables;
mod moving;
mod names;
mod partitions;
mod questions;
mod raw;
mod reader;
mod rebuild;
mod removal;
mod schema;
mod session;
mod verify;
mod versions;
mod work;
mod writing;

use std::time::{Duration, Instant};

use kilter_drift::SUMMARY_VERSION;
use postgres::Transaction;

pub use self::address::PostgresAddress;
use self::apart::apart;
pub use self::moving::{Moved, move_from_sqlite};
use self::names::Names;
use self::reader::PostgresReader;
use self::session::{Role, Session, Statements, is_chance, is_lost, lost};
pub(crate) use self::session::{describe, is_of_the_server};
use self::work::Work;
use self::writing::{Taken, Writing};
use crate::error::LedgerError;
use crate::fold::Windows;
use crate::store::{Job, Reader, Reply, Store};

/// How long a data base that cannot be reached is tried again.
const PATIENCE: Duration = Duration::from_secs(30);

/// Pause before asking again about a transaction that is still under way.
const PAUSE: Duration = Duration::from_millis(50);

/// Summaries kept at hand between commits; beyond it all are forgotten and fetched when needed.
const MOST_CACHED_WINDOWS: usize = 4096;

/// The store.
pub(crate) struct PostgresStore {
    address: PostgresAddress,
    patience: Duration,
    session: Option<Session>,
    cache: Cache,
}

/// What the writer keeps at hand between commits.
#[derive(Debug, Default)]
struct Cache {
    windows: Windows,
    names: Names,
    /// First day whose raw records are kept.
    horizon: i64,
    /// Counts of commits and of changes of names up to which this is known; `None` before anything
    /// was read.
    commits: Option<i64>,
    names_seen: i64,
}

impl Cache {
    /// Takes in what other replicas have written since the last time.
    fn catch_up(&mut self, taken: &Taken) {
        // The count includes the transaction under way.
        if self.commits != Some(taken.commits - 1) || self.windows.len() > MOST_CACHED_WINDOWS {
            self.windows = Windows::default();
        }
        if self.commits.is_none() || self.names_seen != taken.names {
            self.names.changed_by_others();
        }
        self.names_seen = taken.names;
        self.horizon = taken.horizon;
        self.commits = Some(taken.commits);
    }

    fn rolled_back(&mut self) {
        // Names may have been given that are free again.
        *self = Self::default();
    }
}

impl PostgresStore {
    /// Opens a ledger, made anew where there is none.
    pub(crate) fn open(address: &PostgresAddress) -> Result<Self, LedgerError> {
        Self::with_patience(address, PATIENCE)
    }

    /// Opens a ledger whose data base is tried again for so long where it cannot be reached.
    pub(crate) fn with_patience(address: &PostgresAddress, patience: Duration) -> Result<Self, LedgerError> {
        let session = apart(|| {
            let mut session = Session::connect(address, Role::Writer, patience)?;
            schema::bring_up_to_date(session.parts()?.0, address)?;
            rebuild::rebuild(&mut session)?;
            Ok::<_, LedgerError>(session)
        })?;
        Ok(Self { address: address.clone(), patience, session: Some(session), cache: Cache::default() })
    }

    /// The connection, made again where it was lost.
    fn session(&mut self) -> Result<&mut Session, LedgerError> {
        let session = match self.session.take() {
            Some(session) => session,
            None => Session::connect(&self.address, Role::Writer, self.patience)?,
        };
        Ok(self.session.insert(session))
    }

    fn attempt(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        self.session()?;
        let session = self.session.as_mut().ok_or(LedgerError::Closed)?;
        let (client, statements) = session.parts()?;
        let mut transaction = client.transaction()?;
        let (taken, transaction_id) = take_state(&mut transaction, statements)?;
        self.cache.catch_up(&taken);
        let mut writing = Writing::new(Work::new(&mut transaction, statements), &mut self.cache, taken);
        let replies = writing.perform(jobs)?;
        writing.finish()?;
        match transaction.commit() {
            Ok(()) => Ok(replies),
            Err(error) if is_lost(&error) => {
                tracing::warn!(%error, "the connection was lost during a commit; asking what became of it");
                self.session = None;
                if self.was_committed(&transaction_id)? { Ok(replies) } else { Err(error.into()) }
            }
            Err(error) => Err(error.into()),
        }
    }

    /// What became of a transaction whose commit was not answered.
    fn was_committed(&mut self, transaction_id: &str) -> Result<bool, LedgerError> {
        let begun = Instant::now();
        while begun.elapsed() < self.patience {
            let asked = self.session()?.query("SELECT pg_xact_status($1::text::xid8)", &[&transaction_id]);
            let status: Option<String> = match asked {
                Ok(rows) => rows.first().map_or(Ok(None), |row| row.try_get(0))?,
                Err(error) if lost(&error) => {
                    self.session = None;
                    continue;
                }
                // Another server in its place need not know the transaction.
                Err(_) => return Err(LedgerError::Unknown),
            };
            match status.as_deref() {
                Some("committed") => return Ok(true),
                Some("aborted") => return Ok(false),
                Some("in progress") => std::thread::sleep(PAUSE),
                _ => break,
            }
        }
        Err(LedgerError::Unknown)
    }
}

/// Takes the state row, which others wait for until the transaction ends; and the number of the
/// transaction.
fn take_state(
    transaction: &mut Transaction,
    statements: &mut Statements,
) -> Result<(Taken, String), LedgerError> {
    let row = Work::new(transaction, statements).query_one(
        "UPDATE state SET commits = commits + 1 \
         RETURNING commits, names, horizon, next_record, next_outcome, pg_current_xact_id()::text, \
         summary_version",
        &[],
    )?;
    if row.try_get::<_, i64>(6)? > i64::from(SUMMARY_VERSION) {
        return Err(LedgerError::LaterProgram);
    }
    let taken = Taken {
        commits: row.try_get(0)?,
        names: row.try_get(1)?,
        horizon: row.try_get(2)?,
        next_record: row.try_get(3)?,
        next_outcome: row.try_get(4)?,
    };
    Ok((taken, row.try_get(5)?))
}

impl Store for PostgresStore {
    fn commit(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        let begun = Instant::now();
        loop {
            let error = match self.attempt(jobs) {
                Ok(replies) => {
                    self.cache.windows.committed();
                    return Ok(replies);
                }
                Err(error) => error,
            };
            self.cache.rolled_back();
            let LedgerError::Database(source) = &error else { return Err(error) };
            if is_lost(source) {
                self.session = None;
            } else if !is_chance(source) {
                return Err(error);
            }
            if begun.elapsed() > self.patience {
                return Err(error);
            }
        }
    }

    fn maintain(&mut self) -> Result<(), LedgerError> {
        Ok(())
    }

    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(PostgresReader::connect(&self.address, self.patience)?))
    }
}
