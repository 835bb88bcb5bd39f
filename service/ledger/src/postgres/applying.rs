//! Applying jobs to what is known of their ids, and folding what that changes.

use std::borrow::Cow;
use std::sync::Arc;

use super::entries::{Entries, Entry, KnownOutcome, KnownRecord};
use super::writing::{Observed, Writing};
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion};
use crate::store::{Job, Reply};
use crate::types::{NewOutcome, OutcomeState, Outcomes, Records, ShadowScore, ShadowScores};

impl Writing<'_, '_> {
    /// Performs jobs of rows, which are looked up and written together.
    pub(super) fn perform_rows(&mut self, jobs: &[Job], replies: &mut Vec<Reply>) -> Result<(), LedgerError> {
        let mut entries = Entries::load(self, jobs)?;
        for (position, job) in jobs.iter().enumerate() {
            replies.push(match job {
                Job::Records(records) => self.records(&mut entries, position, records, &[])?,
                Job::RecordsWithShadows { records, shadows } => {
                    self.records(&mut entries, position, records, shadows)?
                }
                Job::Outcomes(outcomes) => self.outcomes(&mut entries, position, outcomes)?,
                Job::Delete { model, act, .. } => {
                    let deleted = self.delete(&mut entries, position)?;
                    let model = self.model(model)?;
                    self.write_deletion(model, act, deleted.iter().filter(|found| **found).count())?;
                    Reply::Deleted(deleted)
                }
                _ => continue,
            });
        }
        self.write_difference(&entries)
    }

    fn records<'j>(
        &mut self,
        entries: &mut Entries<'j>,
        job: usize,
        records: &'j Records,
        shadows: &'j [ShadowScores],
    ) -> Result<Reply, LedgerError> {
        let model = self.model(&records.model)?;
        let version = self.version_of((model, &records.model), &records.version)?;
        let shadows = shadows
            .iter()
            .map(|shadow| Ok((self.version_of((model, &records.model), &shadow.version)?, &shadow.scores)))
            .collect::<Result<Vec<_>, LedgerError>>()?;
        let mut repeated = Vec::with_capacity(records.records.len());
        for (position, record) in records.records.iter().enumerate() {
            let entry = &mut entries.ids[entries.of_jobs[job][position]];
            repeated.push(entry.record.is_some());
            if entry.record.is_some() {
                continue;
            }
            let scores: Vec<(Arc<FoldedVersion>, &ShadowScore)> = shadows
                .iter()
                .filter_map(|(version, scores)| {
                    scores.get(position).and_then(Option::as_ref).map(|score| (version.clone(), score))
                })
                .collect();
            let known = KnownRecord {
                number: self.next_record,
                version: version.number,
                received: records.received,
                record: Cow::Borrowed(record),
                shadows: scores
                    .iter()
                    .map(|(version, score)| (version.number, Cow::Borrowed(*score)))
                    .collect(),
            };
            self.next_record += 1;
            self.fold_record(&version, &scores, &known, entry.outcome)?;
            self.count(model, known.day(), [1, i64::from(entry.outcome.is_some())]);
            entry.record = Some(known);
        }
        Ok(Reply::Records(repeated))
    }

    /// Folds a new record, with the outcome that waited for it.
    fn fold_record(
        &mut self,
        version: &FoldedVersion,
        shadows: &[(Arc<FoldedVersion>, &ShadowScore)],
        known: &KnownRecord,
        waiting: Option<KnownOutcome>,
    ) -> Result<(), LedgerError> {
        let observed = waiting.map(|outcome| outcome.observed);
        let case = Case::of_record(&known.record);
        self.fold(version, &case, Event::Scored)?;
        self.fold_change(version, &case, None, observed)?;
        for (version, score) in shadows {
            self.cache.names.note_shadows();
            let case = Case::of_shadow(&known.record.id, known.record.time, score);
            self.fold(version, &case, Event::Scored)?;
            self.fold_change(version, &case, None, observed)?;
        }
        Ok(())
    }

    fn outcomes(
        &mut self,
        entries: &mut Entries,
        job: usize,
        outcomes: &Outcomes,
    ) -> Result<Reply, LedgerError> {
        let mut states = Vec::with_capacity(outcomes.outcomes.len());
        for (position, outcome) in outcomes.outcomes.iter().enumerate() {
            let entry = &mut entries.ids[entries.of_jobs[job][position]];
            let former = entry.outcome;
            let state = self.outcome(entry, outcome, outcomes.received)?;
            if state == OutcomeState::Corrected {
                entries.former.extend(former);
            }
            states.push(state);
        }
        Ok(Reply::Outcomes(states))
    }

    fn outcome(
        &mut self,
        entry: &mut Entry,
        outcome: &NewOutcome,
        received: i64,
    ) -> Result<OutcomeState, LedgerError> {
        let version = if let Some(record) = &entry.record {
            Some(self.version(record.version)?)
        } else {
            let (names, work) = self.names();
            names.live(work, entry.model)?
        };
        let Some(version) = version else {
            return Ok(OutcomeState::Refused("no version of the model is live".into()));
        };
        if version.category(&outcome.category).is_none() {
            let known = version.frame.categories().join("`, `");
            let reason = format!("`{}` is no category of the model; it has `{known}`", outcome.category);
            return Ok(OutcomeState::Refused(reason));
        }
        let (names, work) = self.names();
        let category = names.category(work, entry.model, &outcome.category)?;
        let observed = Observed { category, observed_at: outcome.observed_at.unwrap_or(received) };
        let former = entry.outcome;
        if former.is_some_and(|former| former.observed.category == category) {
            return Ok(OutcomeState::Repeated);
        }
        let number = former.map_or(self.next_outcome, |former| former.number);
        self.next_outcome += i64::from(former.is_none());
        entry.outcome = Some(KnownOutcome { number, observed, received });
        if let Some(record) = &entry.record {
            let former = former.map(|former| former.observed);
            self.fold_correction(&version, record, former, Some(observed))?;
            self.count(entry.model, record.day(), [0, i64::from(former.is_none())]);
        }
        Ok(match (&entry.record, former) {
            (_, Some(_)) => OutcomeState::Corrected,
            (Some(_), None) => OutcomeState::Matched,
            (None, None) => OutcomeState::Waiting,
        })
    }

    /// Folds the change of a record's outcome for its version and all shadow versions.
    fn fold_correction(
        &mut self,
        version: &FoldedVersion,
        known: &KnownRecord,
        former: Option<Observed>,
        observed: Option<Observed>,
    ) -> Result<(), LedgerError> {
        self.fold_change(version, &Case::of_record(&known.record), former, observed)?;
        for (number, score) in &known.shadows {
            let version = self.version(*number)?;
            let case = Case::of_shadow(&known.record.id, known.record.time, score);
            self.fold_change(&version, &case, former, observed)?;
        }
        Ok(())
    }

    /// Forgets ids; for each whether there was anything.
    fn delete(&mut self, entries: &mut Entries, job: usize) -> Result<Vec<bool>, LedgerError> {
        let mut deleted = Vec::with_capacity(entries.of_jobs[job].len());
        for position in entries.of_jobs[job].clone() {
            let entry = &mut entries.ids[position];
            let outcome = entry.outcome.take();
            let record = entry.record.take();
            deleted.push(record.is_some() || outcome.is_some());
            if let Some(outcome) = outcome {
                entries.former.retain(|former| former.number != outcome.number);
            }
            let Some(known) = record else { continue };
            let model = entry.model;
            let version = self.version(known.version)?;
            self.fold_correction(&version, &known, outcome.map(|outcome| outcome.observed), None)?;
            self.fold(&version, &Case::of_record(&known.record), Event::Deleted)?;
            for (number, score) in &known.shadows {
                let version = self.version(*number)?;
                let case = Case::of_shadow(&known.record.id, known.record.time, score);
                self.fold(&version, &case, Event::Deleted)?;
            }
            self.count(model, known.day(), [-1, -i64::from(outcome.is_some())]);
        }
        Ok(deleted)
    }
}
