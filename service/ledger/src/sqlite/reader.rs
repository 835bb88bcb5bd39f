//! Reading what is committed, on a connection of its own.

use std::ops::ControlFlow;
use std::path::{Path, PathBuf};

use kilter_drift::SUMMARY_VERSION;
use rusqlite::{Connection, OptionalExtension, Row, params};

use super::index::{Kind, search};
use super::names::category_name;
use super::rows::{StoredOutcome, StoredRecord, load_outcome, load_record, raw_outcome};
use super::writing::horizon;
use super::{backup, raw, schema, verify};
use crate::codes::{stream_columns, stream_from_columns, summary_from_bytes};
use crate::error::LedgerError;
use crate::store::Reader;
use crate::types::{
    Act, AuditEntry, Counts, RawOutcome, RawPair, RawRecord, Stream, VerifyDifference, VersionRow,
    VersionState, WindowSummary,
};

/// A reader of the file.
pub(crate) struct SqliteReader {
    path: PathBuf,
    connection: Connection,
}

impl SqliteReader {
    pub(crate) fn open(path: &Path) -> Result<Self, LedgerError> {
        Ok(Self { path: path.to_owned(), connection: schema::open_for_reading(path)? })
    }

    fn model(&self, name: &str) -> Result<Option<i64>, LedgerError> {
        Ok(self
            .connection
            .prepare_cached("SELECT number FROM model WHERE name = ?")?
            .query_row([name], |row| row.get(0))
            .optional()?)
    }

    /// Numbers of a model and of one of its versions.
    fn version(&self, model: &str, version: &str) -> Result<Option<(i64, i64)>, LedgerError> {
        Ok(self
            .connection
            .prepare_cached(
                "SELECT model.number, version.number FROM version JOIN model ON model.number = version.model \
                 WHERE model.name = ? AND version.fingerprint = ?",
            )?
            .query_row([model, version], |row| Ok((row.get(0)?, row.get(1)?)))
            .optional()?)
    }

    fn stored_record(&self, model: i64, id: &str) -> Result<Option<StoredRecord>, LedgerError> {
        for number in search(&self.connection, Kind::Record, model, id)? {
            if let Some(record) = load_record(&self.connection, (model, id), number)? {
                return Ok(Some(record));
            }
        }
        Ok(None)
    }

    /// The outcome of a record, or the one that waits for it.
    fn stored_outcome(
        &self,
        (model, id): (i64, &str),
        record: Option<i64>,
    ) -> Result<Option<StoredOutcome>, LedgerError> {
        for number in search(&self.connection, Kind::Outcome, model, id)? {
            let outcome = load_outcome(&self.connection, model, number)?;
            if outcome.as_ref().is_some_and(|outcome| {
                outcome.id.as_deref() == Some(id) || (record.is_some() && outcome.record == record)
            }) {
                return Ok(outcome);
            }
        }
        Ok(None)
    }

    fn raw_outcome(&self, outcome: &StoredOutcome) -> Result<RawOutcome, LedgerError> {
        Ok(RawOutcome {
            category: category_name(&self.connection, outcome.category)?,
            observed_at: outcome.observed_at,
            received: outcome.received,
        })
    }
}

impl Reader for SqliteReader {
    fn another(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(Self::open(&self.path)?))
    }

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

    fn audit(&self, model: &str) -> Result<Vec<AuditEntry>, LedgerError> {
        let mut statement = self.connection.prepare_cached(
            "SELECT at, who, why, what, former.fingerprint, version.fingerprint FROM audit \
             JOIN model ON model.number = audit.model \
             LEFT JOIN version AS former ON former.number = from_version \
             LEFT JOIN version ON version.number = to_version \
             WHERE model.name = ? ORDER BY audit.number",
        )?;
        let entry = |row: &Row| {
            Ok(AuditEntry {
                act: Act { at: row.get(0)?, who: row.get(1)?, why: row.get(2)? },
                model: model.to_owned(),
                what: row.get(3)?,
                from: row.get(4)?,
                to: row.get(5)?,
            })
        };
        Ok(statement.query_map([model], entry)?.collect::<Result<_, _>>()?)
    }

    fn streams(&self, model: &str, version: &str) -> Result<Vec<Stream>, LedgerError> {
        let Some((_, version)) = self.version(model, version)? else { return Ok(Vec::new()) };
        let mut statement = self
            .connection
            .prepare_cached("SELECT field, value FROM stream WHERE version = ? ORDER BY field, value")?;
        let streams =
            statement.query_map([version], |row| Ok(stream_from_columns(row.get(0)?, row.get(1)?)))?;
        Ok(streams.collect::<Result<_, _>>()?)
    }

    fn summaries(
        &self,
        model: &str,
        version: &str,
        stream: Option<&Stream>,
        days: [i64; 2],
    ) -> Result<Vec<WindowSummary>, LedgerError> {
        let Some((_, version)) = self.version(model, version)? else { return Ok(Vec::new()) };
        let columns = stream.map(stream_columns);
        let mut statement = self.connection.prepare_cached(
            "SELECT day, field, value, summary FROM stream JOIN summary ON summary.stream = stream.number \
             WHERE stream.version = ?1 AND summary.version = ?6 AND day BETWEEN ?2 AND ?3 \
             AND (?4 IS NULL OR (field = ?4 AND value = ?5)) ORDER BY day, field, value",
        )?;
        let parameters = params![
            version,
            days[0],
            days[1],
            columns.map(|(field, _)| field),
            columns.map(|(_, value)| value),
            SUMMARY_VERSION
        ];
        let mut rows = statement.query(parameters)?;
        let mut windows = Vec::new();
        while let Some(row) = rows.next()? {
            windows.push(WindowSummary {
                day: row.get(0)?,
                stream: stream_from_columns(row.get(1)?, row.get(2)?),
                summary: summary_from_bytes(row.get_ref(3)?.as_blob().map_err(rusqlite::Error::from)?)?,
            });
        }
        Ok(windows)
    }

    fn days(&self, model: &str, version: &str) -> Result<Option<[i64; 2]>, LedgerError> {
        let Some((_, version)) = self.version(model, version)? else { return Ok(None) };
        let days: (Option<i64>, Option<i64>) = self
            .connection
            .prepare_cached(
                "SELECT min(day), max(day) FROM stream JOIN summary ON summary.stream = stream.number \
                 WHERE stream.version = ? AND field = ''",
            )?
            .query_row([version], |row| Ok((row.get(0)?, row.get(1)?)))?;
        Ok(days.0.zip(days.1).map(|(first, last)| [first, last]))
    }

    fn waiting_records(&self) -> Result<u64, LedgerError> {
        let waiting: i64 = self
            .connection
            .prepare_cached("SELECT coalesce(sum(records - matched), 0) FROM day WHERE day >= ?")?
            .query_row([horizon(&self.connection)?], |row| row.get(0))?;
        Ok(waiting.cast_unsigned())
    }

    fn counts(&self, model: &str) -> Result<Counts, LedgerError> {
        let Some(model) = self.model(model)? else { return Ok(Counts::default()) };
        let snapshot = self.connection.unchecked_transaction()?;
        let mut counts = snapshot
            .prepare_cached(
                "SELECT coalesce(sum(records), 0), coalesce(sum(matched), 0), \
                 coalesce(sum(records - matched) FILTER (WHERE day >= ?2), 0), \
                 min(day) FILTER (WHERE records > 0), max(day) FILTER (WHERE records > 0) \
                 FROM day WHERE model = ?1",
            )?
            .query_row([model, horizon(&snapshot)?], |row| {
                let days: (Option<i64>, Option<i64>) = (row.get(3)?, row.get(4)?);
                Ok(Counts {
                    records: row.get::<_, i64>(0)?.cast_unsigned(),
                    matched: row.get::<_, i64>(1)?.cast_unsigned(),
                    waiting_records: row.get::<_, i64>(2)?.cast_unsigned(),
                    waiting_outcomes: 0,
                    days: days.0.zip(days.1).map(|(first, last)| [first, last]),
                })
            })?;
        let waiting: i64 = snapshot
            .prepare_cached("SELECT count(*) FROM outcome WHERE model = ? AND record IS NULL")?
            .query_row([model], |row| row.get(0))?;
        counts.waiting_outcomes = waiting.cast_unsigned();
        Ok(counts)
    }

    fn records(
        &self,
        model: &str,
        version: &str,
        period: [i64; 2],
        visit: &mut dyn FnMut(RawRecord) -> ControlFlow<()>,
    ) -> Result<(), LedgerError> {
        let Some(numbers) = self.version(model, version)? else { return Ok(()) };
        raw::visit_records(&self.connection, numbers, period, visit)
    }

    fn pairs(
        &self,
        model: &str,
        version: &str,
        shadow: &str,
        period: [i64; 2],
        visit: &mut dyn FnMut(RawPair) -> ControlFlow<()>,
    ) -> Result<(), LedgerError> {
        let (Some(numbers), Some((_, shadow))) =
            (self.version(model, version)?, self.version(model, shadow)?)
        else {
            return Ok(());
        };
        raw::visit_pairs(&self.connection, numbers, shadow, period, visit)
    }

    fn record(&self, model: &str, id: &str) -> Result<Option<RawRecord>, LedgerError> {
        let Some(model) = self.model(model)? else { return Ok(None) };
        let _snapshot = self.connection.unchecked_transaction()?;
        let Some(stored) = self.stored_record(model, id)? else { return Ok(None) };
        let outcome = self.stored_outcome((model, id), Some(stored.number))?;
        let outcome = outcome.map(|outcome| self.raw_outcome(&outcome)).transpose()?;
        Ok(Some(stored.into_raw(outcome)))
    }

    fn former_outcomes(&self, model: &str, id: &str) -> Result<Vec<RawOutcome>, LedgerError> {
        let Some(model) = self.model(model)? else { return Ok(Vec::new()) };
        let _snapshot = self.connection.unchecked_transaction()?;
        let record = self.stored_record(model, id)?.map(|record| record.number);
        let Some(outcome) = self.stored_outcome((model, id), record)? else { return Ok(Vec::new()) };
        let mut statement = self.connection.prepare_cached(
            "SELECT name, observed_at, received FROM former_outcome \
             JOIN category ON category.number = former_outcome.category \
             WHERE outcome = ? ORDER BY former_outcome.number",
        )?;
        let former = statement.query_map([outcome.number], |row| raw_outcome(row, 0))?;
        Ok(former.collect::<Result<_, _>>()?)
    }

    fn verify(&self) -> Result<Vec<VerifyDifference>, LedgerError> {
        verify::verify(&self.connection)
    }

    fn backup(&self, path: &Path) -> Result<(), LedgerError> {
        backup::backup(&self.connection, path)
    }
}
