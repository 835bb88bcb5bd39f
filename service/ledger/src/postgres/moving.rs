//! Moving a ledger from a SQLite file into an empty PostgreSQL data base: every row with its number,
//! in one transaction.

use std::path::Path;

use postgres::Transaction;
use rusqlite::Connection;
use rusqlite::types::ValueRef;

use super::address::PostgresAddress;
use super::apart::apart;
use super::copy::Copy;
use super::moved_tables::{TABLES, Table};
use super::partitions::Partitioned;
use super::session::{Role, Session, Statements};
use super::verify::verify;
use super::work::Work;
use super::writing::Writing;
use super::{Cache, PATIENCE, rebuild, schema, take_state};
use crate::codes::{id_hash, without_nul};
use crate::error::LedgerError;
use crate::fold::day_of;
use crate::sqlite::open_to_move;
use crate::types::VerifyDifference;

/// What was moved.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Moved {
    /// Records.
    pub records: u64,
    /// Outcomes, those that wait for their record among them.
    pub outcomes: u64,
    /// Versions of models.
    pub versions: u64,
    /// Window summaries.
    pub summaries: u64,
    /// Where the summaries in the new ledger are not what its records give. There is nothing here
    /// unless the old ledger had it, too.
    pub differences: Vec<VerifyDifference>,
}

/// Numbers go on behind those that were moved.
const GO_ON: &str = "\
    SELECT setval(pg_get_serial_sequence('model', 'number'), coalesce(max(number), 1)) FROM model; \
    SELECT setval(pg_get_serial_sequence('version', 'number'), coalesce(max(number), 1)) FROM version; \
    SELECT setval(pg_get_serial_sequence('audit', 'number'), coalesce(max(number), 1)) FROM audit; \
    SELECT setval(pg_get_serial_sequence('category', 'number'), coalesce(max(number), 1)) FROM category; \
    SELECT setval(pg_get_serial_sequence('stream', 'number'), coalesce(max(number), 1)) FROM stream; \
    SELECT setval(pg_get_serial_sequence('former_outcome', 'number'), coalesce(max(number), 1)) \
    FROM former_outcome;";

/// Moves a ledger from a SQLite file into a PostgreSQL data base that holds none: every record,
/// outcome, version, summary and line of the audit trail. The file stays as it is. Stop whoever writes
/// to it before: what is written afterwards is not moved.
///
/// All is done in one transaction, so that after a failure the data base is as it was. The rows that
/// arrived are counted before it ends, and the summaries are verified afterwards.
///
/// # Errors
/// [`LedgerError::NoLedger`] and [`LedgerError::Open`] for what cannot be read,
/// [`LedgerError::Connect`] and [`LedgerError::NotEmpty`] for where it cannot be moved to, and
/// [`LedgerError::NotAllMoved`].
pub fn move_from_sqlite(file: &Path, to: &PostgresAddress) -> Result<Moved, LedgerError> {
    apart(|| move_all(file, to))
}

fn move_all(file: &Path, to: &PostgresAddress) -> Result<Moved, LedgerError> {
    let source = open_to_move(file)?;
    let mut session = Session::connect(to, Role::Writer, PATIENCE)?;
    schema::bring_up_to_date(session.parts()?.0, to)?;
    rebuild::rebuild(&mut session)?;
    let (client, statements) = session.parts()?;
    let mut transaction = client.transaction()?;
    let mut moved = move_rows(&source, &mut transaction, statements, to)?;
    transaction.commit()?;
    // A table that was filled is planned for as an empty one until it is looked at.
    session
        .parts()?
        .0
        .batch_execute("ANALYZE record, outcome, shadow_score, record_id, waiting_outcome, summary")?;
    let mut reader = Session::connect(to, Role::Reader, PATIENCE)?;
    moved.differences = verify(&mut reader)?;
    Ok(moved)
}

fn move_rows(
    source: &Connection,
    transaction: &mut Transaction,
    statements: &mut Statements,
    to: &PostgresAddress,
) -> Result<Moved, LedgerError> {
    let (taken, _) = take_state(transaction, statements)?;
    if transaction.query_one("SELECT EXISTS (SELECT 1 FROM model)", &[])?.try_get(0)? {
        return Err(LedgerError::NotEmpty { ledger: to.to_string() });
    }
    let mut cache = Cache::default();
    cache.catch_up(&taken);
    let mut writing = Writing::new(Work::new(transaction, statements), &mut cache, taken);
    make_partitions(source, &mut writing)?;
    let mut rows = Vec::with_capacity(TABLES.len());
    for table in &TABLES {
        rows.push(move_table(source, &mut writing.work, table)?);
    }
    move_ids(source, &mut writing.work)?;
    writing.work.define(GO_ON)?;
    let mark = |name: &str, otherwise: &str| -> rusqlite::Result<i64> {
        let sql =
            format!("SELECT max((SELECT coalesce(max(value), ?1) FROM mark WHERE name = ?2), {otherwise})");
        source.query_row(&sql, rusqlite::params![i64::MIN, name], |row| row.get(0))
    };
    writing.cache.horizon = mark("first day", "?1")?;
    writing.next_record = mark("next record", "(SELECT coalesce(max(number), 0) + 1 FROM record)")?;
    writing.next_outcome = mark("next outcome", "(SELECT coalesce(max(number), 0) + 1 FROM outcome)")?;
    writing.cache.names.changed = true;
    for (table, sent) in TABLES.iter().zip(&rows) {
        let arrived = writing.work.query_one(table.count, &[])?.try_get::<_, i64>(0)?.cast_unsigned();
        if arrived != *sent {
            return Err(LedgerError::NotAllMoved { table: table.name, sent: *sent, arrived });
        }
    }
    writing.finish()?;
    let rows_of = |name: &str| {
        TABLES.iter().zip(&rows).filter(|(table, _)| table.name == name).map(|(_, rows)| *rows).sum::<u64>()
    };
    Ok(Moved {
        records: rows_of("record"),
        outcomes: rows_of("outcome") + rows_of("waiting_outcome"),
        versions: rows_of("version"),
        summaries: rows_of("summary"),
        differences: Vec::new(),
    })
}

fn make_partitions(source: &Connection, writing: &mut Writing) -> Result<(), LedgerError> {
    let has_shadows: bool =
        source.query_row("SELECT EXISTS (SELECT 1 FROM shadow_score)", [], |row| row.get(0))?;
    let mut statement = source.prepare("SELECT DISTINCT day FROM span WHERE kind = 0 ORDER BY day")?;
    let days = statement.query_map([], |row| row.get(0))?.collect::<Result<Vec<i64>, _>>()?;
    for day in days {
        writing.ensure_partition(Partitioned::Record, day)?;
        writing.ensure_partition(Partitioned::Outcome, day)?;
        if has_shadows {
            writing.ensure_partition(Partitioned::ShadowScore, day)?;
        }
    }
    Ok(())
}

/// Moves the rows of a table and counts them.
fn move_table(source: &Connection, work: &mut Work, table: &Table) -> Result<u64, LedgerError> {
    let mut statement = source.prepare(table.select)?;
    let mut rows = statement.query([])?;
    let mut copy = work.copy(table.copy, table.columns)?;
    let mut moved = 0;
    while let Some(row) = rows.next()? {
        copy.row()?;
        for column in 0..usize::from(table.columns) {
            if column == 0 && table.day_first {
                copy.number(day_of(row.get(0)?));
            } else {
                put(&mut copy, row.get_ref(column)?)?;
            }
        }
        moved += 1;
    }
    copy.finish()?;
    Ok(moved)
}

fn put(copy: &mut Copy, value: ValueRef) -> Result<(), LedgerError> {
    match value {
        ValueRef::Null => copy.null(),
        ValueRef::Integer(number) => copy.number(number),
        ValueRef::Text(text) => {
            let text = std::str::from_utf8(text).map_err(|error| LedgerError::damaged("a text", error))?;
            copy.bytes(without_nul(text).as_bytes())
        }
        ValueRef::Blob(bytes) => copy.bytes(bytes),
        // No column holds such numbers.
        ValueRef::Real(number) => return Err(LedgerError::damaged("a row", format!("a number {number}"))),
    };
    Ok(())
}

/// Where records are by the hashes of their ids. An index over all of them is made faster at once than
/// row by row.
fn move_ids(source: &Connection, work: &mut Work) -> Result<(), LedgerError> {
    work.define("DROP INDEX record_id_by_hash")?;
    let mut statement = source.prepare("SELECT model, id, time, number FROM record")?;
    let mut rows = statement.query([])?;
    let mut copy = work.copy("COPY record_id (hash, day, number) FROM STDIN (FORMAT binary)", 3)?;
    while let Some(row) = rows.next()? {
        let id = row.get_ref(1)?.as_str().map_err(rusqlite::Error::from)?;
        copy.row()?.number(id_hash(row.get(0)?, id)).number(day_of(row.get(2)?)).number(row.get(3)?);
    }
    copy.finish()?;
    work.define("CREATE INDEX record_id_by_hash ON record_id (hash)")
}
