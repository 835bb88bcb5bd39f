//! The tables, and opening the file.

use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use rusqlite::{Connection, OpenFlags};

use crate::error::LedgerError;

/// Each entry brings the schema one version forward; the first makes it.
const MIGRATIONS: [&str; 1] = [include_str!("schema_1.sql")];
/// The schema version that this build writes.
pub(crate) const SCHEMA_VERSION: u32 = MIGRATIONS.len() as u32;

/// How long a connection waits for another process that writes.
const PATIENCE: Duration = Duration::from_secs(30);

/// Opens the file for writing, makes it where there is none, and brings its schema up to date.
pub(crate) fn open_for_writing(path: &Path) -> Result<Connection, LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let mut connection = Connection::open(path).map_err(failed)?;
    connection.busy_timeout(PATIENCE).map_err(failed)?;
    connection
        .execute_batch(
            "PRAGMA page_size = 8192; PRAGMA journal_mode = WAL; PRAGMA synchronous = FULL; \
             PRAGMA cache_size = -65536; PRAGMA mmap_size = 1073741824; PRAGMA temp_store = MEMORY;",
        )
        .map_err(failed)?;
    // Taken before the version is read, so that two processes do not both migrate.
    let transaction =
        connection.transaction_with_behavior(rusqlite::TransactionBehavior::Immediate).map_err(failed)?;
    let found: u32 =
        transaction.pragma_query_value(None, "user_version", |row| row.get(0)).map_err(failed)?;
    if found > SCHEMA_VERSION {
        return Err(LedgerError::NewerSchema { path: path.to_owned(), found, known: SCHEMA_VERSION });
    }
    for migration in &MIGRATIONS[found as usize..] {
        transaction.execute_batch(migration).map_err(failed)?;
    }
    transaction.pragma_update(None, "user_version", SCHEMA_VERSION).map_err(failed)?;
    transaction.commit().map_err(failed)?;
    connection.set_prepared_statement_cache_capacity(64);
    Ok(connection)
}

/// Opens the file for reading; readers never wait for the writer, nor it for them.
pub(crate) fn open_for_reading(path: &Path) -> Result<Connection, LedgerError> {
    let failed = |source| LedgerError::Open { path: path.to_owned(), source: Arc::new(source) };
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    let connection = Connection::open_with_flags(path, flags).map_err(failed)?;
    connection.busy_timeout(PATIENCE).map_err(failed)?;
    Ok(connection)
}
