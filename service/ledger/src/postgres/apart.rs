//! Working in a thread of one's own.
//!
//! The connection waits for the server in a way that panics inside a task of an asynchronous program,
//! and whoever opens or reads a ledger need not know that.

use std::ops::ControlFlow;
use std::sync::mpsc::sync_channel;

use crate::error::LedgerError;

/// Items on their way from the thread that reads them to the one that visits them.
const ITEMS_AHEAD: usize = 256;

/// Does something in a thread of its own and waits for it.
pub(super) fn apart<T: Send>(work: impl FnOnce() -> T + Send) -> T {
    std::thread::scope(|scope| match scope.spawn(work).join() {
        Ok(done) => done,
        Err(panic) => std::panic::resume_unwind(panic),
    })
}

/// Reads in a thread of its own what is visited in this one.
pub(super) fn visit_apart<T: Send>(
    visit: &mut dyn FnMut(T) -> ControlFlow<()>,
    read: impl FnOnce(&mut dyn FnMut(T) -> ControlFlow<()>) -> Result<(), LedgerError> + Send,
) -> Result<(), LedgerError> {
    std::thread::scope(|scope| {
        let (sender, receiver) = sync_channel(ITEMS_AHEAD);
        let reading = scope.spawn(move || {
            read(&mut |item| match sender.send(item) {
                Ok(()) => ControlFlow::Continue(()),
                // Nobody wants more.
                Err(_) => ControlFlow::Break(()),
            })
        });
        for item in receiver {
            if visit(item).is_break() {
                break;
            }
        }
        match reading.join() {
            Ok(read) => read,
            Err(panic) => std::panic::resume_unwind(panic),
        }
    })
}
