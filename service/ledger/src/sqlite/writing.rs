//! A transaction being filled: records and outcomes are kept, matched and folded.

use std::collections::BTreeMap;
use std::sync::Arc;

use kilter_drift::{SUMMARY_VERSION, Summary};
use rusqlite::{Connection, OptionalExtension, Transaction, params};

use super::Cache;
use super::rows::{StoredOutcome, StoredRecord, load_outcome, load_record, load_shadows};
use crate::codes::{summary_from_bytes, summary_to_bytes};
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion, WindowKey};
use crate::store::{Job, Reply};
use crate::types::ShadowScore;

/// A transaction being filled.
pub(super) struct Writing<'a> {
    pub(super) transaction: &'a Transaction<'a>,
    pub(super) cache: &'a mut Cache,
    /// Changes of the number of records and of matched outcomes, by model and day.
    days: BTreeMap<(i64, i64), [i64; 2]>,
}

/// An outcome as it is folded.
#[derive(Debug, Clone, Copy)]
pub(super) struct Observed {
    pub(super) category: i64,
    pub(super) observed_at: i64,
}

impl<'a> Writing<'a> {
    pub(super) fn new(transaction: &'a Transaction<'a>, cache: &'a mut Cache) -> Self {
        Self { transaction, cache, days: BTreeMap::new() }
    }

    pub(super) fn perform(&mut self, job: &Job) -> Result<Reply, LedgerError> {
        match job {
            Job::Records(records) => self.records(records, &[]).map(Reply::Records),
            Job::RecordsWithShadows { records, shadows } => {
                self.records(records, shadows).map(Reply::Records)
            }
            Job::Outcomes(outcomes) => self.outcomes(outcomes).map(Reply::Outcomes),
            Job::Publish { version, who } => self.publish(version, who).map(|()| Reply::Published),
            Job::ChangeVersion { model, change, act } => {
                self.change_version(model, change, act).map(Reply::Changed)
            }
            Job::Delete { model, ids, act } => self.delete(model, ids, act).map(Reply::Deleted),
            Job::Prune { before, most_rows } => self.prune(*before, *most_rows).map(Reply::Pruned),
            Job::BeginFile(file) => self.begin_file(file).map(Reply::File),
            Job::FinishFile { model, sha256, finished } => {
                self.finish_file(model, sha256, *finished).map(|()| Reply::Finished)
            }
        }
    }

    /// Writes what was changed on the way.
    pub(super) fn finish(self) -> Result<(), LedgerError> {
        let mut statement = self.transaction.prepare_cached(
            "INSERT INTO summary (stream, day, summary, version) VALUES (?, ?, ?, ?) \
             ON CONFLICT DO UPDATE SET summary = excluded.summary, version = excluded.version",
        )?;
        for ((stream, day), summary) in self.cache.windows.changed() {
            statement.execute(params![stream, day, summary_to_bytes(summary)?, SUMMARY_VERSION])?;
        }
        self.cache.spans.write(self.transaction)?;
        let mut statement = self.transaction.prepare_cached(
            "INSERT INTO day (model, day, records, matched) VALUES (?, ?, ?, ?) ON CONFLICT DO UPDATE \
             SET records = records + excluded.records, matched = matched + excluded.matched",
        )?;
        for ((model, day), [records, matched]) in self.days {
            statement.execute([model, day, records, matched])?;
        }
        Ok(())
    }

    pub(super) fn model(&mut self, name: &str) -> Result<i64, LedgerError> {
        self.cache.names.model(self.transaction, name)
    }

    pub(super) fn version_of(
        &mut self,
        model: (i64, &str),
        fingerprint: &str,
    ) -> Result<Arc<FoldedVersion>, LedgerError> {
        let number = self.cache.names.version_number(self.transaction, model, fingerprint)?;
        self.cache.names.version(self.transaction, number)
    }

    /// Folds the change of a record's outcome for its version and all shadow versions.
    pub(super) fn fold_correction(
        &mut self,
        version: &FoldedVersion,
        record: &StoredRecord,
        former: Option<Observed>,
        observed: Option<Observed>,
    ) -> Result<(), LedgerError> {
        let case = Case::of_record(&record.record);
        self.fold_change(version, &case, former, observed)?;
        for (number, score) in self.shadows_of(record.number)? {
            let version = self.cache.names.version(self.transaction, number)?;
            let case = Case::of_shadow(&record.record.id, record.record.time, &score);
            self.fold_change(&version, &case, former, observed)?;
        }
        Ok(())
    }

    fn fold_change(
        &mut self,
        version: &FoldedVersion,
        case: &Case,
        former: Option<Observed>,
        observed: Option<Observed>,
    ) -> Result<(), LedgerError> {
        if let Some(former) = former {
            self.fold_outcome(version, case, former, true)?;
        }
        if let Some(observed) = observed {
            self.fold_outcome(version, case, observed, false)?;
        }
        Ok(())
    }

    pub(super) fn shadows_of(&mut self, record: i64) -> Result<Vec<(i64, ShadowScore)>, LedgerError> {
        if self.cache.names.has_shadows(self.transaction)? {
            load_shadows(self.transaction, record)
        } else {
            Ok(Vec::new())
        }
    }

    /// Folds an outcome in or out, unless it is of a category that the version does not know.
    pub(super) fn fold_outcome(
        &mut self,
        version: &FoldedVersion,
        case: &Case,
        observed: Observed,
        withdrawn: bool,
    ) -> Result<(), LedgerError> {
        let name = self.cache.names.category_name(self.transaction, observed.category)?;
        let Some(category) = version.category(&name) else { return Ok(()) };
        let observed_at = observed.observed_at;
        let event = if withdrawn {
            Event::Withdrawn { category, observed_at }
        } else {
            Event::Outcome { category, observed_at }
        };
        self.fold(version, case, event)
    }

    /// Folds an event into the windows of all streams of a case. Windows of days whose raw records
    /// were removed are final.
    pub(super) fn fold(
        &mut self,
        version: &FoldedVersion,
        case: &Case,
        event: Event,
    ) -> Result<(), LedgerError> {
        if case.day() < self.cache.horizon {
            return Ok(());
        }
        let terms = if event.needs_terms() { version.terms(case.inputs) } else { Vec::new() };
        for (name, number) in self.cache.names.streams(version.number).of(version, case) {
            let stream = match number {
                Some(number) => number,
                None => self.cache.names.add_stream(self.transaction, version.number, name)?,
            };
            let transaction = self.transaction;
            self.cache.windows.fold((stream, name.detail()), version, case, &terms, event, |key| {
                load_summary(transaction, key)
            })?;
        }
        Ok(())
    }

    pub(super) fn count(&mut self, model: i64, day: i64, [records, matched]: [i64; 2]) {
        let counts = self.days.entry((model, day)).or_default();
        counts[0] += records;
        counts[1] += matched;
    }

    pub(super) fn find_record(
        &self,
        model: i64,
        id: &str,
        hash: i64,
    ) -> Result<Option<StoredRecord>, LedgerError> {
        let candidates = self.cache.records.candidates(self.transaction, hash)?;
        self.record_among(model, id, &candidates)
    }

    /// The record with an id among those whose ids have its hash.
    pub(super) fn record_among(
        &self,
        model: i64,
        id: &str,
        candidates: &[i64],
    ) -> Result<Option<StoredRecord>, LedgerError> {
        for number in candidates {
            if let Some(record) = load_record(self.transaction, (model, id), *number)? {
                return Ok(Some(record));
            }
        }
        Ok(None)
    }

    /// The outcome that waits for a record.
    pub(super) fn find_waiting(
        &self,
        model: i64,
        id: &str,
        hash: i64,
    ) -> Result<Option<StoredOutcome>, LedgerError> {
        self.find_outcome(model, hash, |outcome| outcome.id.as_deref() == Some(id))
    }

    /// The outcome of a record.
    pub(super) fn find_matched(
        &self,
        model: i64,
        record: i64,
        hash: i64,
    ) -> Result<Option<StoredOutcome>, LedgerError> {
        self.find_outcome(model, hash, |outcome| outcome.record == Some(record))
    }

    fn find_outcome(
        &self,
        model: i64,
        hash: i64,
        wanted: impl Fn(&StoredOutcome) -> bool,
    ) -> Result<Option<StoredOutcome>, LedgerError> {
        for number in self.cache.outcomes.candidates(self.transaction, hash)? {
            let outcome = load_outcome(self.transaction, model, number)?;
            if outcome.as_ref().is_some_and(&wanted) {
                return Ok(outcome);
            }
        }
        Ok(None)
    }
}

impl Observed {
    pub(super) fn of(outcome: &StoredOutcome) -> Self {
        Self { category: outcome.category, observed_at: outcome.observed_at }
    }
}

fn load_summary(connection: &Connection, (stream, day): WindowKey) -> Result<Option<Summary>, LedgerError> {
    let bytes: Option<Vec<u8>> = connection
        .prepare_cached("SELECT summary FROM summary WHERE stream = ? AND day = ?")?
        .query_row([stream, day], |row| row.get(0))
        .optional()?;
    bytes.map(|bytes| summary_from_bytes(&bytes)).transpose()
}

/// Name of the mark of the first day whose raw records are kept.
pub(super) const HORIZON: &str = "first day";

/// First day whose raw records are kept.
pub(super) fn horizon(connection: &Connection) -> Result<i64, LedgerError> {
    let day: Option<i64> = connection
        .prepare_cached("SELECT value FROM mark WHERE name = ?")?
        .query_row([HORIZON], |row| row.get(0))
        .optional()?;
    Ok(day.unwrap_or(i64::MIN))
}
