//! Verifying: all summaries are computed anew from the raw records and compared.

use std::collections::HashMap;
use std::collections::hash_map::Entry;

use kilter_drift::SUMMARY_VERSION;
use postgres::fallible_iterator::FallibleIterator;
use postgres::{IsolationLevel, Row, Transaction};

use super::raw::{ALL, days_of, raw_record};
use super::session::{Parameters, Session, Statements};
use crate::codes::{stream_from_columns, summary_from_bytes, with_nul};
use crate::error::LedgerError;
use crate::fold::{Case, FoldedVersion, Streams};
use crate::recomputed::Recomputed;
use crate::types::{Stream, VerifyDifference};

/// Compares the summaries of all days whose raw records are kept. Each day is read as of one
/// moment, so writing may go on.
pub(super) fn verify(session: &mut Session) -> Result<Vec<VerifyDifference>, LedgerError> {
    let mut models = Vec::new();
    for row in session.query("SELECT number FROM model ORDER BY number", &[])? {
        models.push(row.try_get(0)?);
    }
    let mut versions = HashMap::new();
    let mut differences = Vec::new();
    for model in models {
        for day in days_of(session, model, [i64::MIN, i64::MAX])? {
            differences.extend(verify_day(session, &mut versions, (model, day))?);
        }
    }
    Ok(differences)
}

fn verify_day(
    session: &mut Session,
    versions: &mut HashMap<i64, FoldedVersion>,
    (model, day): (i64, i64),
) -> Result<Vec<VerifyDifference>, LedgerError> {
    let (client, statements) = session.parts()?;
    let mut snapshot =
        client.build_transaction().isolation_level(IsolationLevel::RepeatableRead).read_only(true).start()?;
    let horizon: i64 = snapshot.query_one("SELECT horizon FROM state", &[])?.try_get(0)?;
    if day < horizon {
        return Ok(Vec::new());
    }
    let mut computed = compute_day(&mut snapshot, statements, versions, (model, day))?;
    compare_counts(&mut snapshot, (model, day), &mut computed)?;
    compare_summaries(&mut snapshot, (model, day), &mut computed)?;
    snapshot.commit()?;
    Ok(computed.into_differences())
}

/// Computes the summaries of a day anew from its raw records.
pub(super) fn compute_day(
    snapshot: &mut Transaction,
    statements: &mut Statements,
    versions: &mut HashMap<i64, FoldedVersion>,
    (model, day): (i64, i64),
) -> Result<Recomputed, LedgerError> {
    let streams = load_versions(snapshot, model, versions)?;
    let mut computed = Recomputed::new(day);
    for (sql, as_shadow) in ALL.into_iter().zip([false, true]) {
        let statement = statements.prepared(snapshot, sql)?;
        let parameters: Parameters = &[&day, &model];
        let mut rows = snapshot.query_raw(&statement, parameters.iter().copied())?;
        while let Some(row) = rows.next()? {
            let record = raw_record(&row)?;
            if !as_shadow {
                computed.count(record.outcome.is_some());
            }
            let number: i64 = row.try_get(4)?;
            let (Some(version), Some(streams)) = (versions.get(&number), streams.get(&number)) else {
                return Err(LedgerError::damaged("a record", format!("there is no version {number}")));
            };
            let case = Case {
                id: &record.id,
                time: record.time,
                log_odds: &record.log_odds,
                inputs: &record.inputs,
                segments: &record.segments,
            };
            computed.fold(version, streams, &case, record.outcome.as_ref())?;
        }
    }
    Ok(computed)
}

/// Reads the versions of a model that are not at hand, and the streams of all of them.
fn load_versions(
    snapshot: &mut Transaction,
    model: i64,
    versions: &mut HashMap<i64, FoldedVersion>,
) -> Result<HashMap<i64, Streams>, LedgerError> {
    let mut streams: HashMap<i64, Streams> = HashMap::new();
    for row in snapshot.query("SELECT number FROM version WHERE model = $1", &[&model])? {
        let number = row.try_get(0)?;
        streams.insert(number, Streams::default());
        if let Entry::Vacant(entry) = versions.entry(number) {
            let row = snapshot.query_one("SELECT file FROM version WHERE number = $1", &[&number])?;
            entry.insert(FoldedVersion::new(number, row.try_get(0)?)?);
        }
    }
    let rows = snapshot.query(
        "SELECT version, stream.number, field, value FROM stream JOIN version ON version.number = version \
         WHERE model = $1",
        &[&model],
    )?;
    for row in rows {
        streams.entry(row.try_get(0)?).or_default().insert(stream_of(&row, 2)?, row.try_get(1)?);
    }
    Ok(streams)
}

fn compare_counts(
    snapshot: &mut Transaction,
    (model, day): (i64, i64),
    computed: &mut Recomputed,
) -> Result<(), LedgerError> {
    let counted = snapshot
        .query_opt("SELECT records, matched FROM day WHERE model = $1 AND day = $2", &[&model, &day])?;
    computed.compare_counts(match counted {
        Some(row) => [row.try_get(0)?, row.try_get(1)?],
        None => [0; 2],
    });
    Ok(())
}

fn compare_summaries(
    snapshot: &mut Transaction,
    (model, day): (i64, i64),
    computed: &mut Recomputed,
) -> Result<(), LedgerError> {
    let rows = snapshot.query(
        "SELECT stream.number, fingerprint, field, value, summary FROM version \
         JOIN stream ON stream.version = version.number \
         JOIN summary ON summary.stream = stream.number AND summary.day = $1 \
         WHERE version.model = $2 AND summary.version = $3 ORDER BY stream.number",
        &[&day, &model, &i64::from(SUMMARY_VERSION)],
    )?;
    for row in rows {
        let stored = summary_from_bytes(row.try_get(4)?)?;
        computed.compare(row.try_get(0)?, row.try_get(1)?, stream_of(&row, 2)?, &stored);
    }
    for stream in computed.left() {
        let row = snapshot.query_one(
            "SELECT fingerprint, field, value FROM stream JOIN version ON version.number = stream.version \
             WHERE stream.number = $1",
            &[&stream],
        )?;
        computed.not_stored(row.try_get(0)?, stream_of(&row, 1)?);
    }
    Ok(())
}

/// A stream from the columns field and value.
pub(super) fn stream_of(row: &Row, first: usize) -> Result<Stream, LedgerError> {
    Ok(stream_from_columns(with_nul(row.try_get(first)?), with_nul(row.try_get(first + 1)?)))
}
