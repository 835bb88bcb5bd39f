//! Carrying what is in the write-ahead log over to the file, beside the writer.
//!
//! SQLite does this within a commit when the log has grown; that commit then waits for the disk. A
//! connection of its own does it all the time instead, so that little is left for a commit. Nothing
//! is acknowledged or lost by it: what is in the log is on disk.

use std::path::Path;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, RecvTimeoutError, Sender, channel};
use std::thread::JoinHandle;
use std::time::Duration;

use rusqlite::Connection;

use super::schema;
use crate::error::LedgerError;

/// Pause between two rounds.
const PAUSE: Duration = Duration::from_millis(200);

/// The thread that carries over; it ends when this is dropped.
pub(super) struct Checkpoints {
    written: Arc<AtomicBool>,
    stop: Option<Sender<()>>,
    thread: Option<JoinHandle<()>>,
}

impl Checkpoints {
    pub(super) fn start(path: &Path) -> Result<Self, LedgerError> {
        let connection = schema::open_beside(path)?;
        let written = Arc::new(AtomicBool::new(false));
        let (stop, stopped) = channel();
        let noticed = written.clone();
        let thread = std::thread::Builder::new()
            .name("ledger-checkpoints".into())
            .spawn(move || carry_over(&connection, &noticed, &stopped))
            .map_err(|error| LedgerError::Thread { reason: error.to_string() })?;
        Ok(Self { written, stop: Some(stop), thread: Some(thread) })
    }

    /// Something was written.
    pub(super) fn note(&self) {
        self.written.store(true, Ordering::Relaxed);
    }
}

impl Drop for Checkpoints {
    fn drop(&mut self) {
        drop(self.stop.take());
        if self.thread.take().is_some_and(|thread| thread.join().is_err()) {
            tracing::error!("the ledger's checkpoints had panicked");
        }
    }
}

fn carry_over(connection: &Connection, written: &AtomicBool, stopped: &Receiver<()>) {
    while stopped.recv_timeout(PAUSE) == Err(RecvTimeoutError::Timeout) {
        if !written.swap(false, Ordering::Relaxed) {
            continue;
        }
        if let Err(error) = connection.query_row("PRAGMA wal_checkpoint(PASSIVE)", [], |_| Ok(())) {
            tracing::warn!(%error, "the write-ahead log could not be carried over: {error}");
        }
    }
}
