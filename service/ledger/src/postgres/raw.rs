//! Visiting raw records, day by day, each day in one query and so as of one moment.

use std::ops::ControlFlow;

use postgres::Row;
use postgres::fallible_iterator::FallibleIterator;

use super::entries::score_from_row;
use super::session::{Parameters, Session};
use crate::codes::{floats_from_bytes, segments_from_text, with_nul};
use crate::error::LedgerError;
use crate::fold::day_of;
use crate::types::{RawOutcome, RawPair, RawRecord, ShadowScore};

/// Columns of a record as the version that answered scored it, or as a shadow version did, its
/// outcome, and where they come from, for parameter 1 as the day and 2 as the model.
macro_rules! of_day {
    ($scores:literal, $more:literal, $from:literal, $where:literal) => {
        concat!(
            "SELECT ",
            $scores,
            ".log_odds, ",
            $scores,
            ".inputs, ",
            $scores,
            ".segments, record.number, ",
            $scores,
            ".version, record.received, record.time, record.id, category.name, outcome.observed_at, \
             outcome.received ",
            $more,
            " FROM record ",
            $from,
            " LEFT JOIN outcome ON outcome.day = $1 AND outcome.record = record.number \
             LEFT JOIN category ON category.number = outcome.category \
             WHERE record.day = $1 AND record.model = $2 ",
            $where,
            " ORDER BY record.number"
        )
    };
}

/// All records of a day, and what shadow versions made of them.
pub(super) const ALL: [&str; 2] = [
    of_day!("record", "", "", ""),
    of_day!(
        "shadow_score",
        "",
        "JOIN shadow_score ON shadow_score.day = $1 AND shadow_score.record = record.number",
        ""
    ),
];
/// Those of a version in a period, as live version or as shadow.
const OF_VERSION: [&str; 2] = [
    of_day!("record", "", "", "AND record.version = $3 AND record.time >= $4 AND record.time < $5"),
    of_day!(
        "shadow_score",
        "",
        "JOIN shadow_score ON shadow_score.day = $1 AND shadow_score.record = record.number",
        "AND shadow_score.version = $3 AND record.time >= $4 AND record.time < $5"
    ),
];
/// Those that one version answered and another scored beside it.
const PAIRS: &str = of_day!(
    "record",
    ", shadow_score.log_odds, shadow_score.inputs, shadow_score.segments",
    "JOIN shadow_score ON shadow_score.day = $1 AND shadow_score.record = record.number",
    "AND record.version = $3 AND shadow_score.version = $6 AND record.time >= $4 AND record.time < $5"
);

/// Days on which a model has records, ascending.
pub(super) fn days_of(session: &mut Session, model: i64, days: [i64; 2]) -> Result<Vec<i64>, LedgerError> {
    let rows = session.query(
        "SELECT day FROM day WHERE model = $1 AND day BETWEEN $2 AND $3 ORDER BY day",
        &[&model, &days[0], &days[1]],
    )?;
    Ok(rows.iter().map(|row| row.try_get(0)).collect::<Result<_, _>>()?)
}

/// Visits the records that a version scored, as live version or as shadow.
pub(super) fn visit_records(
    session: &mut Session,
    (model, version): (i64, i64),
    period: [i64; 2],
    visit: &mut dyn FnMut(RawRecord) -> ControlFlow<()>,
) -> Result<(), LedgerError> {
    for day in days_of(session, model, days_of_period(period))? {
        for sql in OF_VERSION {
            let parameters: Parameters = &[&day, &model, &version, &period[0], &period[1]];
            if visit_rows(session, sql, parameters, |row| Ok(visit(raw_record(row)?)))?.is_break() {
                return Ok(());
            }
        }
    }
    Ok(())
}

/// Visits the records that a version answered and a shadow version scored beside it.
pub(super) fn visit_pairs(
    session: &mut Session,
    (model, version): (i64, i64),
    shadow: i64,
    period: [i64; 2],
    visit: &mut dyn FnMut(RawPair) -> ControlFlow<()>,
) -> Result<(), LedgerError> {
    for day in days_of(session, model, days_of_period(period))? {
        let parameters: Parameters = &[&day, &model, &version, &period[0], &period[1], &shadow];
        let visited = visit_rows(session, PAIRS, parameters, |row| {
            let shadow = ShadowScore {
                log_odds: floats_from_bytes(row.try_get(11)?)?,
                inputs: floats_from_bytes(row.try_get(12)?)?,
                segments: segments_from_text(row.try_get(13)?)?,
            };
            Ok(visit(RawPair { record: raw_record(row)?, shadow }))
        })?;
        if visited.is_break() {
            return Ok(());
        }
    }
    Ok(())
}

/// Visits rows as they come, so that a day need not fit into memory.
pub(super) fn visit_rows(
    session: &mut Session,
    sql: &'static str,
    parameters: Parameters,
    mut visit: impl FnMut(&Row) -> Result<ControlFlow<()>, LedgerError>,
) -> Result<ControlFlow<()>, LedgerError> {
    let (client, statements) = session.parts()?;
    let statement = statements.prepared(client, sql)?;
    let mut rows = client.query_raw(&statement, parameters.iter().copied())?;
    while let Some(row) = rows.next()? {
        if visit(&row)?.is_break() {
            return Ok(ControlFlow::Break(()));
        }
    }
    Ok(ControlFlow::Continue(()))
}

/// A record from the columns of [`of_day`].
pub(super) fn raw_record(row: &Row) -> Result<RawRecord, LedgerError> {
    let score = score_from_row(row)?;
    let outcome = match row.try_get::<_, Option<String>>(8)? {
        Some(category) => Some(RawOutcome {
            category: with_nul(category),
            observed_at: row.try_get(9)?,
            received: row.try_get(10)?,
        }),
        None => None,
    };
    Ok(RawRecord {
        id: with_nul(row.try_get(7)?),
        time: row.try_get(6)?,
        received: row.try_get(5)?,
        log_odds: score.log_odds,
        inputs: score.inputs,
        segments: score.segments,
        outcome,
    })
}

/// The days that a period touches; its end is not part of it.
fn days_of_period(period: [i64; 2]) -> [i64; 2] {
    [day_of(period[0]), day_of(period[1].saturating_sub(1))]
}
