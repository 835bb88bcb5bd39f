//! What readers ask.

use kilter_drift::SUMMARY_VERSION;

use super::raw::raw_record;
use super::session::Session;
use super::verify::stream_of;
use crate::codes::{id_hash, stream_columns, summary_from_bytes, with_nul, without_nul};
use crate::error::LedgerError;
use crate::types::{
    Act, AuditEntry, Counts, RawOutcome, RawRecord, Stream, VersionRow, VersionState, WindowSummary,
};

/// Numbers of a model and of one of its versions.
pub(super) fn version_of(
    session: &mut Session,
    model: &str,
    version: &str,
) -> Result<Option<(i64, i64)>, LedgerError> {
    let rows = session.query(
        "SELECT model.number, version.number FROM version JOIN model ON model.number = version.model \
         WHERE model.name = $1 AND version.fingerprint = $2",
        &[&without_nul(model), &without_nul(version)],
    )?;
    rows.first().map(|row| Ok((row.try_get(0)?, row.try_get(1)?))).transpose()
}

pub(super) fn model_of(session: &mut Session, model: &str) -> Result<Option<i64>, LedgerError> {
    let rows = session.query("SELECT number FROM model WHERE name = $1", &[&without_nul(model)])?;
    Ok(rows.first().map(|row| row.try_get(0)).transpose()?)
}

pub(super) fn version_rows(
    session: &mut Session,
    state: Option<VersionState>,
) -> Result<Vec<VersionRow>, LedgerError> {
    let rows = session.query(
        "SELECT model.name, fingerprint, file, state, published_at FROM version \
         JOIN model ON model.number = version.model ORDER BY version.number",
        &[],
    )?;
    let mut versions = Vec::new();
    for row in rows {
        let name: &str = row.try_get(3)?;
        let found = VersionState::from_name(name)
            .ok_or_else(|| LedgerError::damaged("a version", format!("state `{name}`")))?;
        if state.is_none_or(|wanted| wanted == found) {
            versions.push(VersionRow {
                model: with_nul(row.try_get(0)?),
                fingerprint: row.try_get(1)?,
                file: row.try_get(2)?,
                state: found,
                published_at: row.try_get(4)?,
            });
        }
    }
    Ok(versions)
}

pub(super) fn audit_lines(session: &mut Session, model: &str) -> Result<Vec<AuditEntry>, LedgerError> {
    let rows = session.query(
        "SELECT at, who, why, what, former.fingerprint, version.fingerprint FROM audit \
         JOIN model ON model.number = audit.model \
         LEFT JOIN version AS former ON former.number = from_version \
         LEFT JOIN version ON version.number = to_version \
         WHERE model.name = $1 ORDER BY audit.number",
        &[&without_nul(model)],
    )?;
    let entry = |row: &postgres::Row| {
        let act = Act { at: row.try_get(0)?, who: with_nul(row.try_get(1)?), why: with_nul(row.try_get(2)?) };
        let (what, from, to) = (row.try_get(3)?, row.try_get(4)?, row.try_get(5)?);
        Ok(AuditEntry { act, model: model.to_owned(), what, from, to })
    };
    rows.iter().map(entry).collect()
}

pub(super) fn windows(
    session: &mut Session,
    version: i64,
    stream: Option<&Stream>,
    days: [i64; 2],
) -> Result<Vec<WindowSummary>, LedgerError> {
    let columns = stream.map(stream_columns).map(|(field, value)| (without_nul(field), without_nul(value)));
    let rows = session.query(
        "SELECT field, value, day, summary FROM stream JOIN summary ON summary.stream = stream.number \
         WHERE stream.version = $1 AND summary.version = $6 AND day BETWEEN $2 AND $3 \
         AND ($4::text IS NULL OR (field = $4 AND value = $5)) \
         ORDER BY day, field COLLATE \"C\", value COLLATE \"C\"",
        &[
            &version,
            &days[0],
            &days[1],
            &columns.as_ref().map(|(field, _)| field),
            &columns.as_ref().map(|(_, value)| value),
            &i64::from(SUMMARY_VERSION),
        ],
    )?;
    rows.iter()
        .map(|row| {
            Ok(WindowSummary {
                stream: stream_of(row, 0)?,
                day: row.try_get(2)?,
                summary: summary_from_bytes(row.try_get(3)?)?,
            })
        })
        .collect()
}

pub(super) fn counts_of(session: &mut Session, model: &str) -> Result<Counts, LedgerError> {
    let Some(model) = model_of(session, model)? else { return Ok(Counts::default()) };
    // One query, so that all is of one moment.
    let rows = session.query(
        "SELECT coalesce(sum(records), 0)::bigint, coalesce(sum(matched), 0)::bigint, \
         coalesce(sum(records - matched) FILTER (WHERE day >= (SELECT horizon FROM state)), 0)::bigint, \
         (SELECT count(*) FROM waiting_outcome WHERE model = $1), \
         min(day) FILTER (WHERE records > 0), max(day) FILTER (WHERE records > 0) \
         FROM day WHERE model = $1",
        &[&model],
    )?;
    let Some(row) = rows.first() else { return Ok(Counts::default()) };
    let count = |column: usize| row.try_get::<_, i64>(column).map(i64::cast_unsigned);
    let days: (Option<i64>, Option<i64>) = (row.try_get(4)?, row.try_get(5)?);
    Ok(Counts {
        records: count(0)?,
        matched: count(1)?,
        waiting_records: count(2)?,
        waiting_outcomes: count(3)?,
        days: days.0.zip(days.1).map(|(first, last)| [first, last]),
    })
}

/// A record by its id, from the columns of raw records.
pub(super) fn record_of(
    session: &mut Session,
    model: i64,
    id: &str,
) -> Result<Option<RawRecord>, LedgerError> {
    let places =
        session.query("SELECT day, number FROM record_id WHERE hash = $1", &[&id_hash(model, id)])?;
    for place in places {
        let (day, number): (i64, i64) = (place.try_get(0)?, place.try_get(1)?);
        let rows = session.query(
            "SELECT record.log_odds, record.inputs, record.segments, record.number, record.version, \
             record.received, record.time, record.id, category.name, outcome.observed_at, outcome.received \
             FROM record LEFT JOIN outcome ON outcome.day = $1 AND outcome.record = record.number \
             LEFT JOIN category ON category.number = outcome.category \
             WHERE record.day = $1 AND record.number = $2 AND record.model = $3 AND record.id = $4",
            &[&day, &number, &model, &without_nul(id)],
        )?;
        if let Some(row) = rows.first() {
            return raw_record(row).map(Some);
        }
    }
    Ok(None)
}

pub(super) fn former_of(session: &mut Session, model: i64, id: &str) -> Result<Vec<RawOutcome>, LedgerError> {
    let rows = session.query(
        "SELECT name, former_outcome.observed_at, former_outcome.received FROM former_outcome \
         JOIN category ON category.number = former_outcome.category WHERE outcome IN ( \
           SELECT outcome.number FROM record_id \
           JOIN record ON record.day = record_id.day AND record.number = record_id.number \
           JOIN outcome ON outcome.day = record_id.day AND outcome.record = record_id.number \
           WHERE record_id.hash = $1 AND record.model = $2 AND record.id = $3 \
           UNION ALL \
           SELECT number FROM waiting_outcome WHERE hash = $1 AND model = $2 AND id = $3) \
         ORDER BY former_outcome.number",
        &[&id_hash(model, id), &model, &without_nul(id)],
    )?;
    rows.iter()
        .map(|row| {
            Ok(RawOutcome {
                category: with_nul(row.try_get(0)?),
                observed_at: row.try_get(1)?,
                received: row.try_get(2)?,
            })
        })
        .collect()
}
