//! A transaction being filled: records and outcomes are kept, matched and folded.

use std::collections::BTreeMap;
use std::sync::Arc;

use kilter_drift::Summary;
use rusqlite::{CachedStatement, Connection, OptionalExtension, Transaction, params};

use super::Cache;
use super::codes::{floats_to_bytes, id_hash, segments_to_text, summary_from_bytes, summary_to_bytes};
use super::rows::{StoredOutcome, StoredRecord, load_outcome, load_record, load_shadows};
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion, WindowKey, day_of};
use crate::store::{Job, Reply};
use crate::types::{NewOutcome, NewRecord, OutcomeState, Outcomes, Records, ShadowScore, ShadowScores};

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

/// What a request keeps of its model while its rows are written.
struct Batch<'a> {
    model: i64,
    version: Arc<FoldedVersion>,
    received: i64,
    insert: CachedStatement<'a>,
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
            "INSERT INTO summary (stream, day, summary) VALUES (?, ?, ?) \
             ON CONFLICT DO UPDATE SET summary = excluded.summary",
        )?;
        for ((stream, day), summary) in self.cache.windows.changed() {
            statement.execute(params![stream, day, summary_to_bytes(summary)?])?;
        }
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

    fn records(&mut self, records: &Records, shadows: &[ShadowScores]) -> Result<Vec<bool>, LedgerError> {
        let model = self.model(&records.model)?;
        let version = self.version_of((model, &records.model), &records.version)?;
        let shadows = shadows
            .iter()
            .map(|shadow| Ok((self.version_of((model, &records.model), &shadow.version)?, &shadow.scores)))
            .collect::<Result<Vec<_>, LedgerError>>()?;
        let insert = self.transaction.prepare_cached(
            "INSERT INTO record (number, model, version, day, time, received, id, log_odds, inputs, segments) \
             VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        )?;
        let mut batch = Batch { model, version, received: records.received, insert };
        let mut repeated = Vec::with_capacity(records.records.len());
        for (position, record) in records.records.iter().enumerate() {
            let scores = shadows.iter().filter_map(|(version, scores)| {
                scores.get(position).and_then(Option::as_ref).map(|score| (version.as_ref(), score))
            });
            repeated.push(!self.record(&mut batch, record, scores)?);
        }
        Ok(repeated)
    }

    /// Keeps a record and folds it, with the outcome that waited for it; `false` where the id was
    /// there already.
    fn record<'s>(
        &mut self,
        batch: &mut Batch,
        record: &NewRecord,
        shadows: impl Iterator<Item = (&'s FoldedVersion, &'s ShadowScore)>,
    ) -> Result<bool, LedgerError> {
        let hash = id_hash(batch.model, &record.id);
        if self.find_record(batch.model, &record.id, hash)?.is_some() {
            return Ok(false);
        }
        let number = self.insert_record(batch, record, hash)?;
        let case = Case::of_record(record);
        self.count(batch.model, case.day(), [1, 0]);
        self.fold(&batch.version, &case, Event::Scored)?;
        let waiting = self.find_waiting(batch.model, &record.id, hash)?;
        let observed = waiting.as_ref().map(Observed::of);
        if let Some(observed) = observed {
            self.fold_outcome(&batch.version, &case, observed, false)?;
        }
        for (version, score) in shadows {
            self.insert_shadow(number, version, score)?;
            let case = Case::of_shadow(&record.id, record.time, score);
            self.fold(version, &case, Event::Scored)?;
            if let Some(observed) = observed {
                self.fold_outcome(version, &case, observed, false)?;
            }
        }
        if let Some(outcome) = waiting {
            self.count(batch.model, case.day(), [0, 1]);
            self.transaction
                .prepare_cached("UPDATE outcome SET record = ?, day = ?, id = NULL WHERE number = ?")?
                .execute([number, case.day(), outcome.number])?;
        }
        Ok(true)
    }

    fn insert_record(
        &mut self,
        batch: &mut Batch,
        record: &NewRecord,
        hash: i64,
    ) -> Result<i64, LedgerError> {
        let number = self.cache.records.next_number();
        batch.insert.execute(params![
            number,
            batch.model,
            batch.version.number,
            day_of(record.time),
            record.time,
            batch.received,
            record.id,
            floats_to_bytes(&record.log_odds),
            floats_to_bytes(&record.inputs),
            segments_to_text(&record.segments)?,
        ])?;
        self.cache.records.add(hash);
        Ok(number)
    }

    fn insert_shadow(
        &mut self,
        record: i64,
        version: &FoldedVersion,
        score: &ShadowScore,
    ) -> Result<(), LedgerError> {
        self.cache.names.note_shadows();
        self.transaction
            .prepare_cached(
                "INSERT INTO shadow_score (record, version, log_odds, inputs, segments) VALUES (?, ?, ?, ?, ?)",
            )?
            .execute(params![
                record,
                version.number,
                floats_to_bytes(&score.log_odds),
                floats_to_bytes(&score.inputs),
                segments_to_text(&score.segments)?,
            ])?;
        Ok(())
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
        let hash = id_hash(model, &outcome.id);
        let record = self.find_record(model, &outcome.id, hash)?;
        let version = match &record {
            Some(record) => Some(self.cache.names.version(self.transaction, record.version)?),
            None => self.cache.names.live(self.transaction, model)?,
        };
        let Some(version) = version else {
            return Ok(OutcomeState::Refused("no version of the model is live".into()));
        };
        if version.category(&outcome.category).is_none() {
            let known = version.frame.categories().join("`, `");
            let reason = format!("`{}` is no category of the model; it has `{known}`", outcome.category);
            return Ok(OutcomeState::Refused(reason));
        }
        let category = self.cache.names.category(self.transaction, model, &outcome.category)?;
        let observed = Observed { category, observed_at: outcome.observed_at.unwrap_or(received) };
        let former = match &record {
            Some(record) => self.find_matched(model, record.number, hash)?,
            None => self.find_waiting(model, &outcome.id, hash)?,
        };
        if former.as_ref().is_some_and(|former| former.category == category) {
            return Ok(OutcomeState::Repeated);
        }
        if let Some(former) = &former {
            self.replace_outcome(former, observed, received)?;
        } else {
            self.insert_outcome((model, hash), outcome, record.as_ref(), observed, received)?;
        }
        if let Some(record) = &record {
            self.fold_correction(&version, record, former.as_ref().map(Observed::of), Some(observed))?;
            self.count(model, day_of(record.record.time), [0, i64::from(former.is_none())]);
        }
        Ok(match (&record, &former) {
            (_, Some(_)) => OutcomeState::Corrected,
            (Some(_), None) => OutcomeState::Matched,
            (None, None) => OutcomeState::Waiting,
        })
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
    fn fold_outcome(
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

    fn insert_outcome(
        &mut self,
        (model, hash): (i64, i64),
        outcome: &NewOutcome,
        record: Option<&StoredRecord>,
        observed: Observed,
        received: i64,
    ) -> Result<(), LedgerError> {
        self.transaction
            .prepare_cached(
                "INSERT INTO outcome (number, model, id_hash, category, observed_at, received, record, day, id) \
                 VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
            )?
            .execute(params![
                self.cache.outcomes.next_number(),
                model,
                hash,
                observed.category,
                observed.observed_at,
                received,
                record.map(|record| record.number),
                record.map(|record| day_of(record.record.time)),
                record.is_none().then_some(&outcome.id),
            ])?;
        self.cache.outcomes.add(hash);
        Ok(())
    }

    fn replace_outcome(
        &self,
        former: &StoredOutcome,
        observed: Observed,
        received: i64,
    ) -> Result<(), LedgerError> {
        self.transaction
            .prepare_cached(
                "INSERT INTO former_outcome (outcome, category, observed_at, received) VALUES (?, ?, ?, ?)",
            )?
            .execute([former.number, former.category, former.observed_at, former.received])?;
        self.transaction
            .prepare_cached(
                "UPDATE outcome SET category = ?, observed_at = ?, received = ? WHERE number = ?",
            )?
            .execute([observed.category, observed.observed_at, received, former.number])?;
        Ok(())
    }

    pub(super) fn find_record(
        &self,
        model: i64,
        id: &str,
        hash: i64,
    ) -> Result<Option<StoredRecord>, LedgerError> {
        for number in self.cache.records.candidates(self.transaction, hash)? {
            if let Some(record) = load_record(self.transaction, (model, id), number)? {
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
