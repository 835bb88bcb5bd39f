//! Reading what is committed, on a connection of its own.

use std::collections::BTreeMap;
use std::path::Path;

use rusqlite::{Connection, OptionalExtension, params};

use super::codes::stream_from_columns;
use super::{schema, stored_record, summary_from_text};
use crate::error::LedgerError;
use crate::fold::{Event, FoldedVersion, WindowKey, Windows};
use crate::store::{Reader, difference};
use crate::types::{Stream, VerifyDifference, VersionRow, VersionState, WindowSummary};

/// A reader of the file.
pub(crate) struct SqliteReader {
    connection: Connection,
}

impl SqliteReader {
    pub(crate) fn open(path: &Path) -> Result<Self, LedgerError> {
        Ok(Self { connection: schema::open_for_reading(path)? })
    }

    fn version_number(&self, model: &str, version: &str) -> Result<Option<i64>, LedgerError> {
        Ok(self
            .connection
            .prepare_cached(
                "SELECT version.number FROM version JOIN model ON model.number = version.model \
                 WHERE model.name = ? AND version.fingerprint = ?",
            )?
            .query_row(params![model, version], |row| row.get(0))
            .optional()?)
    }

    /// All summaries of all versions, computed anew from the raw records.
    fn compute_summaries(&self) -> Result<BTreeMap<WindowKey, kilter_drift::Summary>, LedgerError> {
        let mut windows = Windows::default();
        let mut versions = BTreeMap::new();
        let mut statement = self.connection.prepare("SELECT number, file FROM version")?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let (number, file): (i64, String) = (row.get(0)?, row.get(1)?);
            versions.insert(number, FoldedVersion::new(number, &file)?);
            windows.set_values(number, self.stored_values(number)?);
        }
        let mut statement = self.connection.prepare(
            "SELECT record.id, record.version, record.time, log_odds, inputs, segments, category, observed_at \
             FROM record LEFT JOIN outcome ON outcome.id_hash = record.id_hash \
             AND outcome.id = record.id AND outcome.model = record.model",
        )?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let record = stored_record(row)?;
            let version = versions.get(&record.version).ok_or_else(|| {
                LedgerError::damaged(format!("record `{}`", record.id), "its version is not there")
            })?;
            windows.fold(version, &record, Event::Scored, |_| Ok(None))?;
            let outcome: Option<String> = row.get(6)?;
            if let Some(category) = outcome.and_then(|name| version.category(&name)) {
                let event = Event::Outcome { category, observed_at: row.get(7)? };
                windows.fold(version, &record, event, |_| Ok(None))?;
            }
        }
        Ok(windows.into_summaries())
    }

    fn stored_values(&self, version: i64) -> Result<Vec<Stream>, LedgerError> {
        let mut statement = self
            .connection
            .prepare("SELECT DISTINCT field, value FROM summary WHERE version = ? AND field <> ''")?;
        let streams =
            statement.query_map([version], |row| Ok(stream_from_columns(row.get(0)?, row.get(1)?)))?;
        Ok(streams.collect::<Result<Vec<_>, _>>()?)
    }
}

impl Reader for SqliteReader {
    fn versions(&self, state: Option<VersionState>) -> Result<Vec<VersionRow>, LedgerError> {
        let mut statement = self.connection.prepare_cached(
            "SELECT model.name, fingerprint, file, state, published_at FROM version \
             JOIN model ON model.number = version.model ORDER BY version.number",
        )?;
        let mut rows = statement.query([])?;
        let mut versions = Vec::new();
        while let Some(row) = rows.next()? {
            let name: String = row.get(3)?;
            let found = VersionState::from_name(&name)
                .ok_or_else(|| LedgerError::damaged("a version", format!("state `{name}`")))?;
            if state.is_none_or(|wanted| wanted == found) {
                versions.push(VersionRow {
                    model: row.get(0)?,
                    fingerprint: row.get(1)?,
                    file: row.get(2)?,
                    state: found,
                    published_at: row.get(4)?,
                });
            }
        }
        Ok(versions)
    }

    fn summaries(
        &self,
        model: &str,
        version: &str,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError> {
        let Some(number) = self.version_number(model, version)? else { return Ok(Vec::new()) };
        let mut statement = self.connection.prepare_cached(
            "SELECT day, field, value, summary FROM summary WHERE version = ? AND day BETWEEN ? AND ? \
             ORDER BY day, field, value",
        )?;
        let mut rows = statement.query(params![number, days[0], days[1]])?;
        let mut windows = Vec::new();
        while let Some(row) = rows.next()? {
            let text = row.get_ref(3)?.as_str().map_err(|error| LedgerError::damaged("a summary", error))?;
            windows.push(WindowSummary {
                day: row.get(0)?,
                stream: stream_from_columns(row.get(1)?, row.get(2)?),
                summary: summary_from_text(text)?,
            });
        }
        Ok(windows)
    }

    fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError> {
        let Some(number) = self.version_number(model, version)? else { return Ok(None) };
        let days: (Option<i64>, Option<i64>) = self
            .connection
            .prepare_cached("SELECT min(day), max(day) FROM summary WHERE version = ?")?
            .query_row([number], |row| Ok((row.get(0)?, row.get(1)?)))?;
        Ok(days.0.zip(days.1).map(|(first, last)| [first, last]))
    }

    fn waiting_records(&self) -> Result<u64, LedgerError> {
        let waiting: f64 = self
            .connection
            .prepare_cached("SELECT coalesce(sum(scored - outcomes), 0.0) FROM summary WHERE field = ''")?
            .query_row([], |row| row.get(0))?;
        Ok(waiting as u64)
    }

    fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError> {
        // One transaction, so that the records and the summaries are of the same moment.
        let _moment = self.connection.unchecked_transaction()?;
        let mut computed = self.compute_summaries()?;
        let mut differences = Vec::new();
        let mut statement = self.connection.prepare(
            "SELECT version, fingerprint, day, field, value, summary FROM summary \
             JOIN version ON version.number = summary.version",
        )?;
        let mut rows = statement.query([])?;
        while let Some(row) = rows.next()? {
            let key = (row.get(0)?, row.get(2)?, stream_from_columns(row.get(3)?, row.get(4)?));
            let stored = summary_from_text(&row.get::<_, String>(5)?)?;
            let reason = match computed.remove(&key) {
                Some(computed) => difference(&stored, &computed),
                None if stored.is_empty() => None,
                None => Some("there are no records for it".to_owned()),
            };
            if let Some(reason) = reason {
                differences.push(VerifyDifference {
                    version: row.get(1)?,
                    day: key.1,
                    stream: key.2,
                    reason,
                });
            }
        }
        differences.extend(computed.into_keys().map(|(version, day, stream)| VerifyDifference {
            version: version.to_string(),
            day,
            stream,
            reason: "is not stored".into(),
        }));
        Ok(differences)
    }
}
