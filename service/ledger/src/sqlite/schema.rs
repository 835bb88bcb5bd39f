//! The tables, and opening the file.

use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use rusqlite::{Connection, OpenFlags, TransactionBehavior};

use crate::error::LedgerError;

/// Each entry brings the schema one version forward; the first makes it.
const MIGRATIONS: [&str; 2] = [include_str!("schema_1.sql"), include_str!("schema_2.sql")];
/// The schema version that this build writes.
const SCHEMA_VERSION: u32 = MIGRATIONS.len() as u32;
/// Marks a file as a ledger, so that no other program's file is taken for one ("kled").
const APPLICATION: u32 = 0x6B6C_6564;

/// Bytes of the file that are read as memory.
const MAPPED_BYTES: i64 = 1 << 34;
/// How long a connection waits for another process that writes.
const PATIENCE: Duration = Duration::from_secs(30);
/// More than there are different statements.
const STATEMENTS_AT_HAND: usize = 64;

/// Opens the file for writing, makes it where there is none, and brings its schema up to date.
pub(crate) fn open_for_writing(path: &Path) -> Result<Connection, LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let mut connection = Connection::open(path).map_err(failed)?;
    connection.busy_timeout(PATIENCE).map_err(failed)?;
    let found = schema_of(&connection, path)?;
    set_up(&connection).map_err(failed)?;
    if found < SCHEMA_VERSION {
        migrate(&mut connection, path)?;
    }
    Ok(connection)
}

/// Opens the file for reading; readers never wait for the writer, nor it for them.
pub(crate) fn open_for_reading(path: &Path) -> Result<Connection, LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    let connection = Connection::open_with_flags(path, flags).map_err(failed)?;
    connection.busy_timeout(PATIENCE).map_err(failed)?;
    connection.pragma_update(None, "mmap_size", MAPPED_BYTES).map_err(failed)?;
    connection.set_prepared_statement_cache_capacity(STATEMENTS_AT_HAND);
    if schema_of(&connection, path)? == 0 {
        return Err(LedgerError::NoLedger { path: path.to_owned() });
    }
    Ok(connection)
}

/// Another connection to a file that is open for writing.
pub(crate) fn open_beside(path: &Path) -> Result<Connection, LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let connection = Connection::open(path).map_err(failed)?;
    connection.busy_timeout(PATIENCE).map_err(failed)?;
    set_up(&connection).map_err(failed)?;
    Ok(connection)
}

/// Every commit is synced to the disk before it is acknowledged (`synchronous = FULL` with a
/// write-ahead log).
fn set_up(connection: &Connection) -> rusqlite::Result<()> {
    connection.execute_batch(
        "PRAGMA page_size = 8192; PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL; \
         PRAGMA cache_size = -65536; PRAGMA temp_store = MEMORY; PRAGMA wal_autocheckpoint = 4000;",
    )?;
    connection.pragma_update(None, "mmap_size", MAPPED_BYTES)?;
    connection.set_prepared_statement_cache_capacity(STATEMENTS_AT_HAND);
    Ok(())
}

fn migrate(connection: &mut Connection, path: &Path) -> Result<(), LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let transaction = connection.transaction_with_behavior(TransactionBehavior::Immediate).map_err(failed)?;
    // Read again under the lock: another process may have done it meanwhile.
    let found = schema_of(&transaction, path)?;
    for migration in MIGRATIONS.iter().skip(found as usize) {
        transaction.execute_batch(migration).map_err(failed)?;
    }
    transaction.pragma_update(None, "user_version", SCHEMA_VERSION).map_err(failed)?;
    transaction.pragma_update(None, "application_id", APPLICATION).map_err(failed)?;
    transaction.commit().map_err(failed)
}

/// Schema version of a ledger; 0 for an empty file.
fn schema_of(connection: &Connection, path: &Path) -> Result<u32, LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let number = |pragma| connection.pragma_query_value(None, pragma, |row| row.get::<_, u32>(0));
    let found = number("user_version").map_err(failed)?;
    let application = number("application_id").map_err(failed)?;
    let tables: i64 =
        connection.query_row("SELECT count(*) FROM sqlite_schema", [], |row| row.get(0)).map_err(failed)?;
    let empty = found == 0 && application == 0 && tables == 0;
    if !empty && (application != APPLICATION || found == 0) {
        return Err(LedgerError::NoLedger { path: path.to_owned() });
    }
    if found > SCHEMA_VERSION {
        return Err(LedgerError::NewerSchema { path: path.to_owned(), found, known: SCHEMA_VERSION });
    }
    Ok(found)
}
