//! Computing summaries anew that an earlier program wrote with other sums.

use std::collections::HashMap;

use kilter_drift::SUMMARY_VERSION;
use postgres::Transaction;

use super::session::{Session, Statements};
use super::verify::compute_day;
use crate::codes::summary_to_bytes;
use crate::error::LedgerError;
use crate::fold::FoldedVersion;

/// Key of the advisory lock under which one replica does this while the others wait ("kled", 2).
const REBUILD_LOCK: i64 = 0x6B6C_6564_0000_0002;

/// Computes the summaries of an earlier version anew, day by day, each in a transaction of its own,
/// so that it goes on where it was interrupted. Replicas of an earlier program write nothing any more
/// from the beginning on. Summaries of days whose raw records were removed stay as they are, and are
/// not shown.
pub(super) fn rebuild(session: &mut Session) -> Result<(), LedgerError> {
    let known = i64::from(SUMMARY_VERSION);
    let (client, _) = session.parts()?;
    client.execute("UPDATE state SET summary_version = $1 WHERE summary_version < $1", &[&known])?;
    if next_day(session)?.is_none() {
        return Ok(());
    }
    let (client, _) = session.parts()?;
    // Others may take long; waiting for them is not a fault.
    client.batch_execute("SET lock_timeout = 0")?;
    client.execute("SELECT pg_advisory_lock($1)", &[&REBUILD_LOCK])?;
    client.batch_execute("SET lock_timeout = '30s'")?;
    let rebuilt = rebuild_all(session);
    let (client, _) = session.parts()?;
    client.execute("SELECT pg_advisory_unlock($1)", &[&REBUILD_LOCK])?;
    rebuilt
}

fn rebuild_all(session: &mut Session) -> Result<(), LedgerError> {
    let mut versions = HashMap::new();
    while let Some(place) = next_day(session)? {
        tracing::info!(day = place.1, "summaries of an earlier program are computed anew");
        let (client, statements) = session.parts()?;
        let mut transaction = client.transaction()?;
        // Nobody else writes meanwhile, and what the others keep at hand is forgotten.
        transaction.execute("UPDATE state SET commits = commits + 1", &[])?;
        rebuild_day(&mut transaction, statements, &mut versions, place)?;
        transaction.commit()?;
    }
    Ok(())
}

fn rebuild_day(
    transaction: &mut Transaction,
    statements: &mut Statements,
    versions: &mut HashMap<i64, FoldedVersion>,
    (model, day): (i64, i64),
) -> Result<(), LedgerError> {
    let mut computed = compute_day(transaction, statements, versions, (model, day))?;
    transaction.execute(
        "DELETE FROM summary WHERE day = $1 AND stream IN ( \
           SELECT stream.number FROM stream JOIN version ON version.number = stream.version WHERE model = $2)",
        &[&day, &model],
    )?;
    for ((stream, day), summary) in computed.summaries() {
        transaction.execute(
            "INSERT INTO summary (stream, day, summary, version) VALUES ($1, $2, $3, $4)",
            &[&stream, &day, &summary_to_bytes(summary)?, &i64::from(SUMMARY_VERSION)],
        )?;
    }
    Ok(())
}

/// Model and day of a summary that an earlier program wrote and whose raw records are there.
fn next_day(session: &mut Session) -> Result<Option<(i64, i64)>, LedgerError> {
    let rows = session.query(
        "SELECT model, day FROM summary JOIN stream ON stream.number = summary.stream \
         JOIN version ON version.number = stream.version \
         WHERE summary.version < $1 AND day >= (SELECT horizon FROM state) ORDER BY day LIMIT 1",
        &[&i64::from(SUMMARY_VERSION)],
    )?;
    rows.first().map(|row| Ok((row.try_get(0)?, row.try_get(1)?))).transpose()
}
