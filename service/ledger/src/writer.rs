//! The writer: one thread that commits what is waiting together.

use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::sync::mpsc::{Receiver, SyncSender, TrySendError, sync_channel};
use std::thread::JoinHandle;

use crate::error::LedgerError;
use crate::ledger::Settings;
use crate::store::{Job, Reply, Store};

/// What is called when a request is on disk, or has failed.
pub(crate) type Done = Box<dyn FnOnce(Result<Reply, LedgerError>) + Send>;

/// A request on its way to the writer.
struct Request {
    job: Job,
    done: Done,
}

/// The way to the writer. When it is dropped, what is queued is written, and the writer ends.
pub(crate) struct Writer {
    sender: Option<SyncSender<Request>>,
    thread: Option<JoinHandle<()>>,
    /// Rows that are queued.
    rows: Arc<AtomicUsize>,
    most_rows: usize,
}

impl Writer {
    pub(crate) fn start(store: Box<dyn Store>, settings: Settings) -> Result<Self, LedgerError> {
        let (sender, receiver) = sync_channel(settings.longest_queue);
        let rows = Arc::new(AtomicUsize::new(0));
        let queued = rows.clone();
        let thread = std::thread::Builder::new()
            .name("ledger-writer".into())
            .spawn(move || write_all(store, &receiver, &queued, settings.rows_per_commit))
            .map_err(|error| LedgerError::Thread { reason: error.to_string() })?;
        Ok(Self { sender: Some(sender), thread: Some(thread), rows, most_rows: settings.most_rows_queued })
    }

    /// Queues a job, or refuses it at once.
    pub(crate) fn submit(&self, job: Job, done: Done) -> Result<(), LedgerError> {
        let sender = self.sender.as_ref().ok_or(LedgerError::Closed)?;
        let size = job.size();
        let waiting = self.rows.fetch_add(size, Ordering::Relaxed);
        // A request that is larger than what may wait is taken when nothing else waits.
        let refused = if waiting > 0 && waiting + size > self.most_rows {
            LedgerError::Busy
        } else {
            match sender.try_send(Request { job, done }) {
                Ok(()) => return Ok(()),
                Err(TrySendError::Full(_)) => LedgerError::Busy,
                Err(TrySendError::Disconnected(_)) => LedgerError::Closed,
            }
        };
        self.rows.fetch_sub(size, Ordering::Relaxed);
        Err(refused)
    }

    /// Queues a job, and waits for a place where the queue is full.
    pub(crate) fn wait_to_submit(&self, job: Job, done: Done) -> Result<(), LedgerError> {
        let sender = self.sender.as_ref().ok_or(LedgerError::Closed)?;
        self.rows.fetch_add(job.size(), Ordering::Relaxed);
        sender.send(Request { job, done }).map_err(|_| LedgerError::Closed)
    }
}

impl Drop for Writer {
    fn drop(&mut self) {
        // Without a sender the writer ends when its queue is empty.
        drop(self.sender.take());
        let Some(thread) = self.thread.take() else { return };
        // The last handle may be dropped by the writer itself, in a callback.
        if thread.thread().id() != std::thread::current().id() && thread.join().is_err() {
            tracing::error!("the ledger's writer had panicked");
        }
    }
}

/// Takes requests as they come and commits those that are waiting together.
fn write_all(
    mut store: Box<dyn Store>,
    receiver: &Receiver<Request>,
    queued: &AtomicUsize,
    rows_per_commit: usize,
) {
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
        queued.fetch_sub(rows, Ordering::Relaxed);
        commit(store.as_mut(), &jobs, waiting);
        if let Err(error) = store.maintain() {
            tracing::warn!(%error, "housekeeping of the ledger failed and is tried again later: {error}");
        }
    }
}

/// Commits jobs together. Where that fails, each is tried by itself, so that one that cannot be
/// written does not take the others with it; unless it is the store that cannot be reached.
fn commit(store: &mut dyn Store, jobs: &[Job], waiting: Vec<Done>) {
    match store.commit(jobs) {
        Ok(replies) => waiting.into_iter().zip(replies).for_each(|(done, reply)| done(Ok(reply))),
        Err(error) if jobs.len() == 1 || error.is_of_the_store() => {
            for done in waiting {
                done(Err(error.clone()));
            }
        }
        Err(_) => {
            for (job, done) in jobs.iter().zip(waiting) {
                let reply = store.commit(std::slice::from_ref(job));
                done(reply.and_then(|replies| replies.into_iter().next().ok_or(LedgerError::Closed)));
            }
        }
    }
}
