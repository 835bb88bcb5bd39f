//! Copies of the whole file: online, consistent, and whole or not there.

use std::fs::{File, rename};
use std::path::{Path, PathBuf};

use rusqlite::backup::{Backup, StepResult};
use rusqlite::{Connection, ffi};

use super::schema;
use crate::error::LedgerError;

/// Copies all pages in one step: that is one reading transaction, so the copy is of one moment,
/// and the writer need not wait for it.
const ALL_PAGES: std::ffi::c_int = -1;

/// Writes a consistent copy while writing goes on. A file at `path` is replaced.
pub(super) fn backup(connection: &Connection, path: &Path) -> Result<(), LedgerError> {
    let aside = beside(path);
    let failed = |error: &dyn std::fmt::Display| LedgerError::Copy {
        path: path.to_owned(),
        reason: error.to_string(),
    };
    remove(&aside).map_err(|error| failed(&error))?;
    copy(connection, &aside).map_err(|error| failed(&error))?;
    let written = File::open(&aside).and_then(|file| file.sync_all());
    written
        .and_then(|()| rename(&aside, path))
        .and_then(|()| sync_folder(path))
        .map_err(|error| failed(&error))
}

/// Makes a ledger of a copy. The copy is checked first, and a ledger that is there already is not
/// touched.
///
/// # Errors
/// [`LedgerError::Copy`] where `ledger` exists, or the copy is torn or cannot be read;
/// [`LedgerError::NewerSchema`] where a later program wrote it.
pub fn restore(copy: &Path, ledger: &Path) -> Result<(), LedgerError> {
    let failed = |reason: String| LedgerError::Copy { path: ledger.to_owned(), reason };
    if ledger.exists() {
        return Err(failed("there is a ledger already; move it away first".into()));
    }
    let connection = schema::open_for_reading(copy)?;
    let checked: String = connection
        .query_row("PRAGMA quick_check(1)", [], |row| row.get(0))
        .map_err(|error| failed(format!("`{}` cannot be read: {error}", copy.display())))?;
    if checked != "ok" {
        return Err(failed(format!("`{}` is damaged: {checked}", copy.display())));
    }
    backup(&connection, ledger)
}

fn copy(connection: &Connection, path: &Path) -> rusqlite::Result<()> {
    let mut target = Connection::open(path)?;
    let step = Backup::new(connection, &mut target)?.step(ALL_PAGES)?;
    if step != StepResult::Done {
        return Err(rusqlite::Error::SqliteFailure(ffi::Error::new(ffi::SQLITE_BUSY), None));
    }
    // One file is easier to carry than one with its write-ahead log; opening it as a ledger turns
    // the log on again.
    target.query_row("PRAGMA journal_mode = DELETE", [], |_| Ok(()))?;
    target.close().map_err(|(_, error)| error)
}

/// The name under which a file is written until it is whole.
fn beside(path: &Path) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(".partial");
    PathBuf::from(name)
}

fn remove(path: &Path) -> std::io::Result<()> {
    match std::fs::remove_file(path) {
        Err(error) if error.kind() != std::io::ErrorKind::NotFound => Err(error),
        _ => Ok(()),
    }
}

/// Makes a new name durable.
fn sync_folder(path: &Path) -> std::io::Result<()> {
    match path.parent() {
        Some(folder) if folder.as_os_str().is_empty() => File::open(".")?.sync_all(),
        Some(folder) => File::open(folder)?.sync_all(),
        None => Ok(()),
    }
}
