//! Computing summaries anew that an earlier program wrote with other sums.

use std::collections::HashMap;

use kilter_drift::SUMMARY_VERSION;
use rusqlite::{Connection, TransactionBehavior, params};

use super::verify::compute_day;
use super::writing::horizon;
use crate::codes::summary_to_bytes;
use crate::error::LedgerError;

/// Computes the summaries of an earlier version anew, day by day, each in a transaction of its own,
/// so that it goes on where it was interrupted. Those of days whose raw records were removed stay as
/// they are, and are not shown.
pub(super) fn rebuild(connection: &mut Connection) -> Result<(), LedgerError> {
    let mut versions = HashMap::new();
    while let Some((model, day)) = next_day(connection)? {
        tracing::info!(day, "summaries of an earlier program are computed anew");
        let transaction = connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
        let mut computed = compute_day(&transaction, &mut versions, (model, day))?;
        transaction.execute(
            "DELETE FROM summary WHERE day = ? AND stream IN ( \
               SELECT stream.number FROM stream JOIN version ON version.number = stream.version \
               WHERE model = ?)",
            [day, model],
        )?;
        for ((stream, day), summary) in computed.summaries() {
            transaction
                .prepare_cached("INSERT INTO summary (stream, day, summary, version) VALUES (?, ?, ?, ?)")?
                .execute(params![stream, day, summary_to_bytes(summary)?, SUMMARY_VERSION])?;
        }
        transaction.commit()?;
    }
    Ok(())
}

/// Model and day of a summary that an earlier program wrote and whose raw records are there.
fn next_day(connection: &Connection) -> Result<Option<(i64, i64)>, LedgerError> {
    let mut statement = connection.prepare_cached(
        "SELECT model, day FROM summary JOIN stream ON stream.number = summary.stream \
         JOIN version ON version.number = stream.version \
         WHERE summary.version < ? AND day >= ? ORDER BY day LIMIT 1",
    )?;
    let mut rows = statement.query([SUMMARY_VERSION.into(), horizon(connection)?])?;
    Ok(rows.next()?.map(|row| Ok::<_, rusqlite::Error>((row.get(0)?, row.get(1)?))).transpose()?)
}
