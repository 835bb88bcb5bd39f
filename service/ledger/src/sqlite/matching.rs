//! Matching outcomes with their records.

use rusqlite::params;

use super::index::Kind;
use super::rows::{StoredOutcome, StoredRecord};
use super::writing::{Observed, Writing};
use crate::codes::id_hash;
use crate::error::LedgerError;
use crate::fold::day_of;
use crate::types::{NewOutcome, OutcomeState, Outcomes};

/// What there is of the record of an outcome.
struct Found {
    /// Of the outcome in its request.
    position: usize,
    hash: i64,
    record: Option<StoredRecord>,
}

impl Found {
    fn day(&self) -> Option<i64> {
        self.record.as_ref().map(|record| day_of(record.record.time))
    }
}

impl Writing<'_> {
    pub(super) fn outcomes(&mut self, outcomes: &Outcomes) -> Result<Vec<OutcomeState>, LedgerError> {
        let model = self.model(&outcomes.model)?;
        let mut found = self.find_records(model, &outcomes.outcomes)?;
        // Day by day, so that the numbers of a day follow each other; those of one id stay in order.
        found.sort_by_key(|found| (found.day(), found.position));
        let mut states = vec![OutcomeState::Waiting; found.len()];
        for found in found {
            let position = found.position;
            states[position] =
                self.outcome(model, &outcomes.outcomes[position], &found, outcomes.received)?;
        }
        Ok(states)
    }

    /// Finds the records of outcomes: hashes and then numbers are looked up in their order, so that
    /// of a large ledger every page is read once.
    fn find_records(&self, model: i64, outcomes: &[NewOutcome]) -> Result<Vec<Found>, LedgerError> {
        let mut hashes: Vec<(i64, usize)> = outcomes
            .iter()
            .enumerate()
            .map(|(position, outcome)| (id_hash(model, &outcome.id), position))
            .collect();
        hashes.sort_unstable();
        let mut candidates = Vec::with_capacity(hashes.len());
        for (hash, position) in hashes {
            candidates.push((self.cache.records.candidates(self.transaction, hash)?, hash, position));
        }
        candidates.sort_unstable();
        candidates
            .into_iter()
            .map(|(numbers, hash, position)| {
                let record = self.record_among(model, &outcomes[position].id, &numbers)?;
                Ok(Found { position, hash, record })
            })
            .collect()
    }

    fn outcome(
        &mut self,
        model: i64,
        outcome: &NewOutcome,
        Found { hash, record, .. }: &Found,
        received: i64,
    ) -> Result<OutcomeState, LedgerError> {
        let hash = *hash;
        let version = match record {
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
        let former = match record {
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
        if let Some(record) = record {
            self.fold_correction(&version, record, former.as_ref().map(Observed::of), Some(observed))?;
            self.count(model, day_of(record.record.time), [0, i64::from(former.is_none())]);
        }
        Ok(match (record, &former) {
            (_, Some(_)) => OutcomeState::Corrected,
            (Some(_), None) => OutcomeState::Matched,
            (None, None) => OutcomeState::Waiting,
        })
    }

    fn insert_outcome(
        &mut self,
        (model, hash): (i64, i64),
        outcome: &NewOutcome,
        record: Option<&StoredRecord>,
        observed: Observed,
        received: i64,
    ) -> Result<(), LedgerError> {
        let number = self.cache.outcomes.next_number();
        self.transaction
            .prepare_cached(
                "INSERT INTO outcome (number, model, id_hash, category, observed_at, received, record, id) \
                 VALUES (?, ?, ?, ?, ?, ?, ?, ?)",
            )?
            .execute(params![
                number,
                model,
                hash,
                observed.category,
                observed.observed_at,
                received,
                record.map(|record| record.number),
                record.is_none().then_some(&outcome.id),
            ])?;
        self.cache.outcomes.add(hash);
        if let Some(record) = record {
            self.cache.spans.cover(Kind::Outcome, model, day_of(record.record.time), number);
        }
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
}
