//! The embedded store: one SQLite file in write-ahead mode.
//!
//! Records lie in order of arrival; a narrow index on a 64-bit hash of the id finds them again, so
//! random ids scatter over few pages. Other processes may write to the same file: their commits
//! are noticed, and what is cached here is forgotten then.

mod codes;
mod reader;
mod schema;

use std::collections::HashMap;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use kilter_drift::Summary;
use rusqlite::{Connection, OptionalExtension, Row, Transaction, TransactionBehavior, params};

use self::codes::{floats_from_bytes, floats_to_bytes, id_hash, stream_columns, stream_from_columns};
use self::reader::SqliteReader;
use crate::error::LedgerError;
use crate::fold::{Event, FoldedVersion, StoredRecord, WindowKey, Windows};
use crate::store::{Job, Reader, Reply, Store};
use crate::types::{
    FileEntry, FileStart, NewOutcome, NewRecord, OutcomeState, Outcomes, Records, Stream, VersionRow,
    VersionState,
};

/// Summaries kept at hand between commits; beyond it all are forgotten and fetched when needed.
const MOST_CACHED_WINDOWS: usize = 4096;

/// The store.
pub(crate) struct SqliteStore {
    path: PathBuf,
    connection: Connection,
    cache: Cache,
    /// SQLite's counter of commits by other connections, as of the last commit here.
    commits_of_others: i64,
}

/// What the writer keeps at hand between commits.
#[derive(Default)]
struct Cache {
    windows: Windows,
    models: HashMap<String, i64>,
    versions: HashMap<i64, Arc<FoldedVersion>>,
    numbers: HashMap<(i64, String), i64>,
}

impl SqliteStore {
    /// Opens a ledger, made anew where there is none.
    pub(crate) fn open(path: &Path) -> Result<Self, LedgerError> {
        let connection = schema::open_for_writing(path)?;
        Ok(Self { path: path.to_owned(), connection, cache: Cache::default(), commits_of_others: 0 })
    }

    fn write(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        let transaction = self.connection.transaction_with_behavior(TransactionBehavior::Immediate)?;
        let commits: i64 = transaction.pragma_query_value(None, "data_version", |row| row.get(0))?;
        if commits != self.commits_of_others || self.cache.windows.len() > MOST_CACHED_WINDOWS {
            self.cache = Cache::default();
            self.commits_of_others = commits;
        }
        let mut writing = Writing { transaction: &transaction, cache: &mut self.cache };
        let replies = jobs.iter().map(|job| writing.perform(job)).collect::<Result<Vec<_>, _>>()?;
        writing.store_summaries()?;
        transaction.commit()?;
        Ok(replies)
    }
}

impl Store for SqliteStore {
    fn commit(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        let replies = self.write(jobs);
        if replies.is_err() {
            // It may hold what was rolled back.
            self.cache = Cache::default();
        }
        replies
    }

    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError> {
        Ok(Box::new(SqliteReader::open(&self.path)?))
    }
}

/// A transaction being filled.
struct Writing<'a> {
    transaction: &'a Transaction<'a>,
    cache: &'a mut Cache,
}

/// An outcome as it is stored.
struct StoredOutcome {
    number: i64,
    category: String,
    observed_at: i64,
    received: i64,
}

impl Writing<'_> {
    fn perform(&mut self, job: &Job) -> Result<Reply, LedgerError> {
        match job {
            Job::Records(records) => self.records(records).map(Reply::Records),
            Job::Outcomes(outcomes) => self.outcomes(outcomes).map(Reply::Outcomes),
            Job::Publish { version, who } => self.publish(version, who).map(|()| Reply::Published),
            Job::BeginFile(file) => self.begin_file(file).map(Reply::File),
            Job::FinishFile { model, sha256, finished } => {
                self.finish_file(model, sha256, *finished).map(|()| Reply::Finished)
            }
        }
    }

    fn records(&mut self, records: &Records) -> Result<Vec<bool>, LedgerError> {
        let model = self.model(&records.model)?;
        let version = self.version_of(model, &records.model, &records.version)?;
        let mut repeated = Vec::with_capacity(records.records.len());
        for record in &records.records {
            repeated.push(!self.record(model, &version, record, records.received)?);
        }
        Ok(repeated)
    }

    /// Keeps a record and folds it, with the outcome that waited for it; `false` where the id was
    /// there already.
    fn record(
        &mut self,
        model: i64,
        version: &FoldedVersion,
        record: &NewRecord,
        received: i64,
    ) -> Result<bool, LedgerError> {
        if self.find_record(model, &record.id)?.is_some() {
            return Ok(false);
        }
        let segments = serde_json::to_string(&record.segments)
            .map_err(|error| LedgerError::damaged("segments", error))?;
        self.transaction
            .prepare_cached(
                "INSERT INTO record (model, version, id_hash, id, time, received, log_odds, inputs, segments) \
                 VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
            )?
            .execute(params![
                model,
                version.number,
                id_hash(&record.id),
                record.id,
                record.time,
                received,
                floats_to_bytes(&record.log_odds),
                floats_to_bytes(&record.inputs),
                segments,
            ])?;
        let stored = StoredRecord {
            id: record.id.clone(),
            version: version.number,
            time: record.time,
            log_odds: record.log_odds.clone(),
            inputs: record.inputs.clone(),
            segments: record.segments.clone(),
        };
        self.fold(version, &stored, Event::Scored)?;
        if let Some(outcome) = self.find_outcome(model, &record.id)?
            && let Some(category) = version.category(&outcome.category)
        {
            self.fold(version, &stored, Event::Outcome { category, observed_at: outcome.observed_at })?;
        }
        Ok(true)
    }

    fn outcomes(&mut self, outcomes: &Outcomes) -> Result<Vec<OutcomeState>, LedgerError> {
        let model = self.model(&outcomes.model)?;
        outcomes.outcomes.iter().map(|outcome| self.outcome(model, outcome, outcomes.received)).collect()
    }

    fn outcome(
        &mut self,
        model: i64,
        outcome: &NewOutcome,
        received: i64,
    ) -> Result<OutcomeState, LedgerError> {
        let record = self.find_record(model, &outcome.id)?;
        let version = match &record {
            Some(record) => Some(self.version(record.version)?),
            None => self.live_version(model)?,
        };
        let Some(version) = version else {
            return Ok(OutcomeState::Refused("no version of the model is live".into()));
        };
        let Some(category) = version.category(&outcome.category) else {
            let known = version.categories.join("`, `");
            return Ok(OutcomeState::Refused(format!(
                "`{}` is no category of the model; it has `{known}`",
                outcome.category
            )));
        };
        let observed_at = outcome.observed_at.unwrap_or(received);
        let event = Event::Outcome { category, observed_at };
        match self.find_outcome(model, &outcome.id)? {
            None => {
                self.insert_outcome(model, outcome, observed_at, received)?;
                let Some(record) = record else { return Ok(OutcomeState::Waiting) };
                self.fold(&version, &record, event)?;
                Ok(OutcomeState::Matched)
            }
            Some(former) if former.category == outcome.category => {
                Ok(if record.is_some() { OutcomeState::Repeated } else { OutcomeState::Waiting })
            }
            Some(former) => {
                self.replace_outcome(&former, outcome, observed_at, received)?;
                if let Some(record) = record {
                    if let Some(category) = version.category(&former.category) {
                        let withdrawn = Event::Withdrawn { category, observed_at: former.observed_at };
                        self.fold(&version, &record, withdrawn)?;
                    }
                    self.fold(&version, &record, event)?;
                }
                Ok(OutcomeState::Corrected)
            }
        }
    }

    fn insert_outcome(
        &self,
        model: i64,
        outcome: &NewOutcome,
        observed_at: i64,
        received: i64,
    ) -> Result<(), LedgerError> {
        self.transaction
            .prepare_cached(
                "INSERT INTO outcome (model, id_hash, id, category, observed_at, received) VALUES (?, ?, ?, ?, ?, ?)",
            )?
            .execute(params![model, id_hash(&outcome.id), outcome.id, outcome.category, observed_at, received])?;
        Ok(())
    }

    fn replace_outcome(
        &self,
        former: &StoredOutcome,
        outcome: &NewOutcome,
        observed_at: i64,
        received: i64,
    ) -> Result<(), LedgerError> {
        self.transaction
            .prepare_cached(
                "INSERT INTO former_outcome (outcome, category, observed_at, received) VALUES (?, ?, ?, ?)",
            )?
            .execute(params![former.number, former.category, former.observed_at, former.received])?;
        self.transaction
            .prepare_cached(
                "UPDATE outcome SET category = ?, observed_at = ?, received = ? WHERE number = ?",
            )?
            .execute(params![outcome.category, observed_at, received, former.number])?;
        Ok(())
    }

    fn publish(&mut self, version: &VersionRow, who: &str) -> Result<(), LedgerError> {
        let model = self.model(&version.model)?;
        let former: Option<i64> = self
            .transaction
            .query_row("SELECT number FROM version WHERE model = ? AND state = 'live'", [model], |row| {
                row.get(0)
            })
            .optional()?;
        if version.state == VersionState::Live {
            self.transaction.execute(
                "UPDATE version SET state = 'retired' WHERE model = ? AND state = 'live'",
                [model],
            )?;
        }
        self.transaction.execute(
            "INSERT INTO version (model, fingerprint, file, state, published_at) VALUES (?, ?, ?, ?, ?) \
             ON CONFLICT (model, fingerprint) DO UPDATE SET state = excluded.state",
            params![model, version.fingerprint, version.file, version.state.name(), version.published_at],
        )?;
        let number = self.version_number(model, &version.model, &version.fingerprint)?;
        self.transaction.execute(
            "INSERT INTO audit (at, who, what, model, from_version, to_version) VALUES (?, ?, ?, ?, ?, ?)",
            params![
                version.published_at,
                who,
                format!("publish as {}", version.state.name()),
                model,
                former,
                number
            ],
        )?;
        Ok(())
    }

    fn begin_file(&mut self, file: &FileStart) -> Result<Option<FileEntry>, LedgerError> {
        let model = self.model(&file.model)?;
        let known = self
            .transaction
            .query_row(
                "SELECT name, claim, result, started, finished FROM file WHERE model = ? AND sha256 = ?",
                params![model, file.sha256],
                |row| {
                    Ok(FileEntry {
                        name: row.get(0)?,
                        claim: row.get(1)?,
                        result: row.get(2)?,
                        started: row.get(3)?,
                        finished: row.get(4)?,
                    })
                },
            )
            .optional()?;
        if known.is_none() {
            self.transaction.execute(
                "INSERT INTO file (model, sha256, name, claim, result, started) VALUES (?, ?, ?, ?, ?, ?)",
                params![model, file.sha256, file.name, file.claim, file.result, file.started],
            )?;
        }
        Ok(known)
    }

    fn finish_file(&mut self, model: &str, sha256: &str, finished: i64) -> Result<(), LedgerError> {
        let model = self.model(model)?;
        self.transaction.execute(
            "UPDATE file SET finished = ? WHERE model = ? AND sha256 = ?",
            params![finished, model, sha256],
        )?;
        Ok(())
    }

    fn fold(
        &mut self,
        version: &FoldedVersion,
        record: &StoredRecord,
        event: Event,
    ) -> Result<(), LedgerError> {
        let transaction = self.transaction;
        self.cache.windows.fold(version, record, event, |key| load_summary(transaction, key))
    }

    fn store_summaries(&mut self) -> Result<(), LedgerError> {
        let mut statement = self.transaction.prepare_cached(
            "INSERT INTO summary (version, day, field, value, scored, outcomes, summary) VALUES (?, ?, ?, ?, ?, ?, ?) \
             ON CONFLICT DO UPDATE SET scored = excluded.scored, outcomes = excluded.outcomes, summary = excluded.summary",
        )?;
        for ((version, day, stream), summary) in self.cache.windows.take_changed() {
            let (field, value) = stream_columns(&stream);
            let text =
                serde_json::to_string(&summary).map_err(|error| LedgerError::damaged("a summary", error))?;
            statement.execute(params![
                version,
                day,
                field,
                value,
                summary.scored(),
                summary.outcomes(),
                text
            ])?;
        }
        Ok(())
    }

    fn find_record(&self, model: i64, id: &str) -> Result<Option<StoredRecord>, LedgerError> {
        let mut statement = self.transaction.prepare_cached(
            "SELECT id, version, time, log_odds, inputs, segments FROM record \
             WHERE id_hash = ? AND id = ? AND model = ?",
        )?;
        let mut rows = statement.query(params![id_hash(id), id, model])?;
        rows.next()?.map(stored_record).transpose()
    }

    fn find_outcome(&self, model: i64, id: &str) -> Result<Option<StoredOutcome>, LedgerError> {
        let outcome = |row: &Row| {
            Ok(StoredOutcome {
                number: row.get(0)?,
                category: row.get(1)?,
                observed_at: row.get(2)?,
                received: row.get(3)?,
            })
        };
        Ok(self
            .transaction
            .prepare_cached(
                "SELECT number, category, observed_at, received FROM outcome \
                 WHERE id_hash = ? AND id = ? AND model = ?",
            )?
            .query_row(params![id_hash(id), id, model], outcome)
            .optional()?)
    }

    /// Number of a model, which gets one where it has none yet.
    fn model(&mut self, name: &str) -> Result<i64, LedgerError> {
        if let Some(&number) = self.cache.models.get(name) {
            return Ok(number);
        }
        self.transaction.execute("INSERT INTO model (name) VALUES (?) ON CONFLICT DO NOTHING", [name])?;
        let number: i64 =
            self.transaction
                .query_row("SELECT number FROM model WHERE name = ?", [name], |row| row.get(0))?;
        self.cache.models.insert(name.to_owned(), number);
        Ok(number)
    }

    fn version_number(&mut self, model: i64, name: &str, fingerprint: &str) -> Result<i64, LedgerError> {
        let key = (model, fingerprint.to_owned());
        if let Some(&number) = self.cache.numbers.get(&key) {
            return Ok(number);
        }
        let number: Option<i64> = self
            .transaction
            .query_row(
                "SELECT number FROM version WHERE model = ? AND fingerprint = ?",
                params![model, fingerprint],
                |row| row.get(0),
            )
            .optional()?;
        let number = number.ok_or_else(|| LedgerError::UnknownVersion {
            model: name.to_owned(),
            version: fingerprint.to_owned(),
        })?;
        self.cache.numbers.insert(key, number);
        Ok(number)
    }

    fn version_of(
        &mut self,
        model: i64,
        name: &str,
        fingerprint: &str,
    ) -> Result<Arc<FoldedVersion>, LedgerError> {
        let number = self.version_number(model, name, fingerprint)?;
        self.version(number)
    }

    fn live_version(&mut self, model: i64) -> Result<Option<Arc<FoldedVersion>>, LedgerError> {
        let number: Option<i64> = self
            .transaction
            .prepare_cached("SELECT number FROM version WHERE model = ? AND state = 'live'")?
            .query_row([model], |row| row.get(0))
            .optional()?;
        number.map(|number| self.version(number)).transpose()
    }

    fn version(&mut self, number: i64) -> Result<Arc<FoldedVersion>, LedgerError> {
        if let Some(version) = self.cache.versions.get(&number) {
            return Ok(version.clone());
        }
        let file: String =
            self.transaction
                .query_row("SELECT file FROM version WHERE number = ?", [number], |row| row.get(0))?;
        let version = Arc::new(FoldedVersion::new(number, &file)?);
        let mut statement = self
            .transaction
            .prepare("SELECT DISTINCT field, value FROM summary WHERE version = ? AND field <> ''")?;
        let streams = statement
            .query_map([number], |row| Ok(stream_from_columns(row.get(0)?, row.get(1)?)))?
            .collect::<Result<Vec<Stream>, _>>()?;
        self.cache.windows.set_values(number, streams);
        self.cache.versions.insert(number, version.clone());
        Ok(version)
    }
}

fn load_summary(
    connection: &Connection,
    (version, day, stream): &WindowKey,
) -> Result<Option<Summary>, LedgerError> {
    let (field, value) = stream_columns(stream);
    let text: Option<String> = connection
        .prepare_cached(
            "SELECT summary FROM summary WHERE version = ? AND day = ? AND field = ? AND value = ?",
        )?
        .query_row(params![version, day, field, value], |row| row.get(0))
        .optional()?;
    text.map(|text| summary_from_text(&text)).transpose()
}

fn summary_from_text(text: &str) -> Result<Summary, LedgerError> {
    serde_json::from_str(text).map_err(|error| LedgerError::damaged("a summary", error))
}

/// A record from the columns id, version, time, log_odds, inputs, segments.
fn stored_record(row: &Row) -> Result<StoredRecord, LedgerError> {
    let segments: String = row.get(5)?;
    let bytes = |column: usize| -> Result<Vec<f64>, LedgerError> {
        floats_from_bytes(
            row.get_ref(column)?.as_blob().map_err(|error| LedgerError::damaged("a record", error))?,
        )
    };
    Ok(StoredRecord {
        id: row.get(0)?,
        version: row.get(1)?,
        time: row.get(2)?,
        log_odds: bytes(3)?,
        inputs: bytes(4)?,
        segments: serde_json::from_str(&segments).map_err(|error| LedgerError::damaged("segments", error))?,
    })
}
