//! Rows of the tables, read back.

use rusqlite::{Connection, Row};

use crate::codes::{floats_from_bytes, segments_from_text};
use crate::error::LedgerError;
use crate::types::{NewRecord, RawOutcome, RawRecord, ShadowScore};

/// A record as the version that answered scored it.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct StoredRecord {
    pub(crate) number: i64,
    pub(crate) version: i64,
    pub(crate) received: i64,
    pub(crate) record: NewRecord,
}

impl StoredRecord {
    /// The record for whoever reads raw ones.
    pub(crate) fn into_raw(self, outcome: Option<RawOutcome>) -> RawRecord {
        let NewRecord { id, time, log_odds, inputs, segments } = self.record;
        RawRecord { id, time, received: self.received, log_odds, inputs, segments, outcome }
    }
}

/// Columns that [`stored_record`] reads, in its order.
pub(crate) const RECORD_COLUMNS: &str = "record.number, record.version, record.received, record.id, \
     record.time, record.log_odds, record.inputs, record.segments";

/// A record from its columns.
pub(crate) fn stored_record(row: &Row) -> Result<StoredRecord, LedgerError> {
    let score = shadow_score(row, 5)?;
    let record = NewRecord {
        id: row.get(3)?,
        time: row.get(4)?,
        log_odds: score.log_odds,
        inputs: score.inputs,
        segments: score.segments,
    };
    Ok(StoredRecord { number: row.get(0)?, version: row.get(1)?, received: row.get(2)?, record })
}

/// Log-odds, inputs and segments from three columns.
pub(crate) fn shadow_score(row: &Row, first: usize) -> Result<ShadowScore, LedgerError> {
    let floats = |column: usize| -> Result<Vec<f64>, LedgerError> {
        floats_from_bytes(row.get_ref(column)?.as_blob().map_err(rusqlite::Error::from)?)
    };
    let segments = row.get_ref(first + 2)?.as_str().map_err(rusqlite::Error::from)?;
    Ok(ShadowScore {
        log_odds: floats(first)?,
        inputs: floats(first + 1)?,
        segments: segments_from_text(segments)?,
    })
}

/// An outcome as it is kept.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct StoredOutcome {
    pub(crate) number: i64,
    pub(crate) category: i64,
    pub(crate) observed_at: i64,
    pub(crate) received: i64,
    /// Number of its record, where that has come.
    pub(crate) record: Option<i64>,
    /// Id of the record that it waits for.
    pub(crate) id: Option<String>,
}

/// An outcome by its number; `None` where it was removed or is of another model.
pub(crate) fn load_outcome(
    connection: &Connection,
    model: i64,
    number: i64,
) -> Result<Option<StoredOutcome>, LedgerError> {
    let mut statement = connection.prepare_cached(
        "SELECT category, observed_at, received, record, id FROM outcome WHERE number = ? AND model = ?",
    )?;
    let mut rows = statement.query([number, model])?;
    let Some(row) = rows.next()? else { return Ok(None) };
    Ok(Some(StoredOutcome {
        number,
        category: row.get(0)?,
        observed_at: row.get(1)?,
        received: row.get(2)?,
        record: row.get(3)?,
        id: row.get(4)?,
    }))
}

/// A record by its number; `None` where it was removed or has another id.
pub(crate) fn load_record(
    connection: &Connection,
    (model, id): (i64, &str),
    number: i64,
) -> Result<Option<StoredRecord>, LedgerError> {
    let mut statement = connection.prepare_cached(
        "SELECT record.number, record.version, record.received, record.id, record.time, record.log_odds, \
         record.inputs, record.segments, record.model FROM record WHERE number = ?",
    )?;
    let mut rows = statement.query([number])?;
    let Some(row) = rows.next()? else { return Ok(None) };
    let same =
        row.get::<_, i64>(8)? == model && row.get_ref(3)?.as_str().map_err(rusqlite::Error::from)? == id;
    if same { stored_record(row).map(Some) } else { Ok(None) }
}

/// What shadow versions made of a record, each with the number of the version.
pub(crate) fn load_shadows(
    connection: &Connection,
    record: i64,
) -> Result<Vec<(i64, ShadowScore)>, LedgerError> {
    let mut statement = connection.prepare_cached(
        "SELECT log_odds, inputs, segments, version FROM shadow_score WHERE record = ? ORDER BY version",
    )?;
    let mut rows = statement.query([record])?;
    let mut shadows = Vec::new();
    while let Some(row) = rows.next()? {
        shadows.push((row.get(3)?, shadow_score(row, 0)?));
    }
    Ok(shadows)
}

/// An outcome for whoever reads raw ones, from the columns name of the category, observed_at and
/// received.
pub(crate) fn raw_outcome(row: &Row, first: usize) -> rusqlite::Result<RawOutcome> {
    Ok(RawOutcome {
        category: row.get(first)?,
        observed_at: row.get(first + 1)?,
        received: row.get(first + 2)?,
    })
}
