//! The handle: one writer thread with group commit, readers beside it.

use std::fmt;
use std::sync::mpsc::{Receiver, SyncSender, TrySendError, sync_channel};
use std::sync::{Arc, Mutex, PoisonError};
use std::thread::JoinHandle;

use crate::error::LedgerError;
use crate::sqlite::SqliteStore;
use crate::store::{Job, Reader, Reply, Store};
use crate::types::{VerifyDifference, VersionRow, VersionState, WindowSummary};
use crate::url::LedgerUrl;

/// Settings of a ledger.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Settings {
    /// Requests that wait for the writer at one time; more are answered [`LedgerError::Busy`].
    pub longest_queue: usize,
    /// Rows that one commit takes at most, unless a single request has more.
    pub rows_per_commit: usize,
}

impl Default for Settings {
    fn default() -> Self {
        Self { longest_queue: 1024, rows_per_commit: 20_000 }
    }
}

/// What is called when a request is on disk, or has failed.
type Done = Box<dyn FnOnce(Result<Reply, LedgerError>) + Send>;

/// A request on its way to the writer.
struct Request {
    job: Job,
    done: Done,
}

/// The ledger. Clones share the writer; when the last is dropped, what is queued is written and
/// the writer ends.
#[derive(Clone)]
pub struct Ledger {
    shared: Arc<Shared>,
}

struct Shared {
    sender: Option<SyncSender<Request>>,
    reader: Mutex<Box<dyn Reader>>,
    writer: Option<JoinHandle<()>>,
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
        }
    }

    /// A ledger on a store.
    ///
    /// # Errors
    /// Where the store cannot be read, or no thread can be started.
    pub fn with_store(store: Box<dyn Store>, settings: Settings) -> Result<Self, LedgerError> {
        let reader = Mutex::new(store.reader()?);
        let (sender, receiver) = sync_channel(settings.longest_queue);
        let writer = std::thread::Builder::new()
            .name("ledger-writer".into())
            .spawn(move || write_all(store, &receiver, settings.rows_per_commit))
            .map_err(|error| LedgerError::damaged("no writer thread", error))?;
        Ok(Self { shared: Arc::new(Shared { sender: Some(sender), reader, writer: Some(writer) }) })
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
        let sender = self.shared.sender.as_ref().ok_or(LedgerError::Closed)?;
        sender.try_send(Request { job, done: Box::new(done) }).map_err(|refused| match refused {
            TrySendError::Full(_) => LedgerError::Busy,
            TrySendError::Disconnected(_) => LedgerError::Closed,
        })
    }

    /// Hands a job to the writer and waits until it is on disk.
    ///
    /// # Errors
    /// Where the job failed; nothing of it is kept then. A full queue is waited for.
    pub fn write(&self, job: Job) -> Result<Reply, LedgerError> {
        let sender = self.shared.sender.as_ref().ok_or(LedgerError::Closed)?;
        let (answer, wait) = sync_channel(1);
        let done: Done = Box::new(move |reply| {
            // Nobody waits any more where the caller has gone.
            let _ = answer.send(reply);
        });
        sender.send(Request { job, done }).map_err(|_| LedgerError::Closed)?;
        wait.recv().map_err(|_| LedgerError::Closed)?
    }

    /// All versions in a state, the oldest first; all versions without one.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn versions(&self, state: Option<VersionState>) -> Result<Vec<VersionRow>, LedgerError> {
        self.read(|reader| reader.versions(state))
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
        self.read(|reader| reader.summaries(model, version, days))
    }

    /// First and last day with records of a version; `None` where it has none.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError> {
        self.read(|reader| reader.days(model, version))
    }

    /// Records that wait for their outcome.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn waiting_records(&self) -> Result<u64, LedgerError> {
        self.read(|reader| reader.waiting_records())
    }

    /// Computes all summaries anew from the raw records and gives what differs: counts exactly,
    /// sums by more than 1e-9.
    ///
    /// # Errors
    /// Where the ledger cannot be read.
    pub fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError> {
        self.read(|reader| reader.verify())
    }

    fn read<T>(
        &self,
        question: impl FnOnce(&dyn Reader) -> Result<T, LedgerError>,
    ) -> Result<T, LedgerError> {
        let reader = self.shared.reader.lock().unwrap_or_else(PoisonError::into_inner);
        question(reader.as_ref())
    }
}

impl Drop for Shared {
    fn drop(&mut self) {
        // Without a sender the writer ends when its queue is empty.
        drop(self.sender.take());
        if let Some(writer) = self.writer.take()
            && writer.join().is_err()
        {
            tracing::error!("the ledger's writer had panicked");
        }
    }
}

/// Takes requests as they come and commits those that are waiting together.
fn write_all(mut store: Box<dyn Store>, receiver: &Receiver<Request>, rows_per_commit: usize) {
    while let Ok(first) = receiver.recv() {
        let mut rows = first.job.size();
        let (mut jobs, mut waiting) = (vec![first.job], vec![first.done]);
        while rows < rows_per_commit
            && let Ok(next) = receiver.try_recv()
        {
            rows += next.job.size();
            jobs.push(next.job);
            waiting.push(next.done);
        }
        commit(store.as_mut(), &jobs, waiting);
    }
}

/// Commits jobs together. Where that fails, each is tried by itself, so that one that cannot be
/// written does not take the others with it.
fn commit(store: &mut dyn Store, jobs: &[Job], waiting: Vec<Done>) {
    match store.commit(jobs) {
        Ok(replies) => waiting.into_iter().zip(replies).for_each(|(done, reply)| done(Ok(reply))),
        Err(error) if jobs.len() == 1 => waiting.into_iter().for_each(|done| done(Err(error.clone()))),
        Err(_) => {
            for (job, done) in jobs.iter().zip(waiting) {
                let reply = store.commit(std::slice::from_ref(job));
                done(reply.and_then(|replies| replies.into_iter().next().ok_or(LedgerError::Closed)));
            }
        }
    }
}
