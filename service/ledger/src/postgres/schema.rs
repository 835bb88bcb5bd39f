//! The tables, and bringing them up to date.

use std::path::PathBuf;

use postgres::Client;

use super::address::PostgresAddress;
use crate::error::LedgerError;

/// Each entry brings the schema one version forward; the first makes it.
pub(super) const MIGRATIONS: [&str; 1] = [include_str!("schema_1.sql")];
/// The schema version that this build writes.
pub(super) const SCHEMA_VERSION: u32 = MIGRATIONS.len() as u32;

/// Key of the advisory lock under which tables are made and changed ("kled", 1).
const MIGRATION_LOCK: i64 = 0x6B6C_6564_0000_0001;

/// Makes the tables where there are none, and brings them up to date. Replicas that start together
/// wait for each other.
pub(super) fn bring_up_to_date(client: &mut Client, address: &PostgresAddress) -> Result<(), LedgerError> {
    if version_of(client, address)? == SCHEMA_VERSION {
        return Ok(());
    }
    let mut transaction = client.transaction()?;
    transaction.execute("SELECT pg_advisory_xact_lock($1)", &[&MIGRATION_LOCK])?;
    // Read again under the lock: another replica may have done it meanwhile.
    let found = version_of(&mut transaction, address)?;
    if found == 0 {
        transaction.batch_execute("CREATE SCHEMA IF NOT EXISTS kilter")?;
    }
    for migration in MIGRATIONS.iter().skip(found as usize) {
        transaction.batch_execute(migration)?;
    }
    transaction.execute("UPDATE state SET schema_version = $1", &[&SCHEMA_VERSION.cast_signed()])?;
    Ok(transaction.commit()?)
}

/// Schema version of the ledger; 0 where there is none.
pub(super) fn version_of(
    client: &mut impl postgres::GenericClient,
    address: &PostgresAddress,
) -> Result<u32, LedgerError> {
    let there: bool = client.query_one("SELECT to_regclass('kilter.state') IS NOT NULL", &[])?.try_get(0)?;
    if !there {
        return Ok(0);
    }
    let found: i32 = client.query_one("SELECT schema_version FROM kilter.state", &[])?.try_get(0)?;
    let found = found.cast_unsigned();
    if found > SCHEMA_VERSION {
        let path = PathBuf::from(address.to_string());
        return Err(LedgerError::NewerSchema { path, found, known: SCHEMA_VERSION });
    }
    Ok(found)
}
