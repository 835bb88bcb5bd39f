//! Visiting raw records, day by day, each day as of one moment. Between days others may write, so
//! that a long visit does not keep the write-ahead log from being emptied.

use std::collections::HashMap;
use std::ops::ControlFlow;

use rusqlite::{Connection, Row};

use super::rows::{RECORD_COLUMNS, raw_outcome, shadow_score, stored_record};
use crate::error::LedgerError;
use crate::fold::day_of;
use crate::types::{RawOutcome, RawPair, RawRecord, ShadowScore};

/// Outcomes of the records of a day, by the number of the record.
pub(super) type OutcomesOfDay = HashMap<i64, RawOutcome>;

/// Where the records of a model and a day are.
pub(super) const RECORDS_OF_DAY: &str = "FROM span CROSS JOIN record ON record.number BETWEEN span.first \
     AND span.last WHERE span.kind = 0 AND span.model = ? AND span.day = ?";
/// Where they are together with what shadow versions made of them.
const RECORDS_AND_SHADOWS_OF_DAY: &str = "FROM span CROSS JOIN record ON record.number BETWEEN span.first \
     AND span.last CROSS JOIN shadow_score ON shadow_score.record = record.number \
     WHERE span.kind = 0 AND span.model = ? AND span.day = ?";

/// Days on which a model has raw records, ascending.
pub(super) fn days_of(connection: &Connection, model: i64, days: [i64; 2]) -> Result<Vec<i64>, LedgerError> {
    let mut statement = connection
        .prepare_cached("SELECT day FROM day WHERE model = ? AND day BETWEEN ? AND ? ORDER BY day")?;
    let found = statement.query_map([model, days[0], days[1]], |row| row.get(0))?;
    Ok(found.collect::<Result<_, _>>()?)
}

/// Outcomes of the records of one day.
pub(super) fn outcomes_of(
    connection: &Connection,
    model: i64,
    day: i64,
) -> Result<OutcomesOfDay, LedgerError> {
    let mut statement = connection.prepare_cached(
        "SELECT record, name, observed_at, received FROM span \
         CROSS JOIN outcome ON outcome.number BETWEEN span.first AND span.last \
         JOIN category ON category.number = outcome.category \
         WHERE span.kind = 1 AND span.model = ? AND span.day = ?",
    )?;
    let found = statement.query_map([model, day], |row| Ok((row.get(0)?, raw_outcome(row, 1)?)))?;
    Ok(found.collect::<Result<_, _>>()?)
}

/// Visits the records that a version scored, as live version or as shadow.
pub(super) fn visit_records(
    connection: &Connection,
    (model, version): (i64, i64),
    period: [i64; 2],
    visit: &mut dyn FnMut(RawRecord) -> ControlFlow<()>,
) -> Result<(), LedgerError> {
    let own = format!("SELECT {RECORD_COLUMNS} {RECORDS_OF_DAY} AND record.version = ?");
    let beside = format!(
        "SELECT {RECORD_COLUMNS}, shadow_score.log_odds, shadow_score.inputs, shadow_score.segments \
         {RECORDS_AND_SHADOWS_OF_DAY} AND shadow_score.version = ?"
    );
    for day in days_of(connection, model, days_of_period(period))? {
        let snapshot = connection.unchecked_transaction()?;
        let outcomes = outcomes_of(&snapshot, model, day)?;
        for (query, as_shadow) in [(&own, false), (&beside, true)] {
            let mut statement = snapshot.prepare_cached(query)?;
            let mut rows = statement.query([model, day, version])?;
            while let Some(row) = rows.next()? {
                let Some(mut record) = record_in(row, period, &outcomes)? else { continue };
                if as_shadow {
                    let ShadowScore { log_odds, inputs, segments } = shadow_score(row, SHADOW_COLUMNS)?;
                    record = RawRecord { log_odds, inputs, segments, ..record };
                }
                if visit(record).is_break() {
                    return Ok(());
                }
            }
        }
    }
    Ok(())
}

/// First of the columns of a shadow score behind those of a record.
const SHADOW_COLUMNS: usize = 8;

/// Visits the records that a version answered and a shadow version scored beside it.
pub(super) fn visit_pairs(
    connection: &Connection,
    (model, version): (i64, i64),
    shadow: i64,
    period: [i64; 2],
    visit: &mut dyn FnMut(RawPair) -> ControlFlow<()>,
) -> Result<(), LedgerError> {
    let query = format!(
        "SELECT {RECORD_COLUMNS}, shadow_score.log_odds, shadow_score.inputs, shadow_score.segments \
         {RECORDS_AND_SHADOWS_OF_DAY} AND record.version = ? AND shadow_score.version = ?"
    );
    for day in days_of(connection, model, days_of_period(period))? {
        let snapshot = connection.unchecked_transaction()?;
        let outcomes = outcomes_of(&snapshot, model, day)?;
        let mut statement = snapshot.prepare_cached(&query)?;
        let mut rows = statement.query([model, day, version, shadow])?;
        while let Some(row) = rows.next()? {
            let Some(record) = record_in(row, period, &outcomes)? else { continue };
            let shadow = shadow_score(row, SHADOW_COLUMNS)?;
            if visit(RawPair { record, shadow }).is_break() {
                return Ok(());
            }
        }
    }
    Ok(())
}

/// The days that a period touches; its end is not part of it.
fn days_of_period(period: [i64; 2]) -> [i64; 2] {
    [day_of(period[0]), day_of(period[1].saturating_sub(1))]
}

/// A record with its outcome, if its time is in the period.
fn record_in(
    row: &Row,
    period: [i64; 2],
    outcomes: &OutcomesOfDay,
) -> Result<Option<RawRecord>, LedgerError> {
    let stored = stored_record(row)?;
    if !(period[0]..period[1]).contains(&stored.record.time) {
        return Ok(None);
    }
    let outcome = outcomes.get(&stored.number).cloned();
    Ok(Some(stored.into_raw(outcome)))
}
