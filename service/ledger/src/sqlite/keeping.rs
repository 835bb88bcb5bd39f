//! Keeping records, with what shadow versions made of them.

use std::sync::Arc;

use rusqlite::{CachedStatement, params};

use super::index::Kind;
use super::writing::{Observed, Writing};
use crate::codes::{floats_to_bytes, id_hash, segments_to_text};
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion, day_of};
use crate::types::{NewRecord, Records, ShadowScore, ShadowScores};

/// What a request keeps of its model while its rows are written.
struct Batch<'a> {
    model: i64,
    version: Arc<FoldedVersion>,
    received: i64,
    insert: CachedStatement<'a>,
}

impl Writing<'_> {
    pub(super) fn records(
        &mut self,
        records: &Records,
        shadows: &[ShadowScores],
    ) -> Result<Vec<bool>, LedgerError> {
        let model = self.model(&records.model)?;
        let version = self.version_of((model, &records.model), &records.version)?;
        let shadows = shadows
            .iter()
            .map(|shadow| Ok((self.version_of((model, &records.model), &shadow.version)?, &shadow.scores)))
            .collect::<Result<Vec<_>, LedgerError>>()?;
        let insert = self.transaction.prepare_cached(
            "INSERT INTO record (number, model, version, time, received, id, log_odds, inputs, segments) \
             VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
        )?;
        let mut batch = Batch { model, version, received: records.received, insert };
        let mut new = self.find_new(model, &records.records)?;
        let mut repeated = vec![true; records.records.len()];
        // Day by day, so that the numbers of a day follow each other.
        new.sort_unstable_by_key(|(_, position)| (day_of(records.records[*position].time), *position));
        for (hash, position) in new {
            let scores = shadows.iter().filter_map(|(version, scores)| {
                scores.get(position).and_then(Option::as_ref).map(|score| (version.as_ref(), score))
            });
            self.record(&mut batch, &records.records[position], hash, scores)?;
            repeated[position] = false;
        }
        Ok(repeated)
    }

    /// Hashes and positions of the records whose ids are not there yet; of those that have one id
    /// the first. Hashes are looked up in their order, so that of a large ledger every page is read
    /// once.
    fn find_new(&self, model: i64, records: &[NewRecord]) -> Result<Vec<(i64, usize)>, LedgerError> {
        let mut hashes: Vec<(i64, usize)> = records
            .iter()
            .enumerate()
            .map(|(position, record)| (id_hash(model, &record.id), position))
            .collect();
        hashes.sort_unstable();
        let mut new: Vec<(i64, usize)> = Vec::with_capacity(hashes.len());
        for (hash, position) in hashes {
            let id = &records[position].id;
            let mut before = new.iter().rev().take_while(|before| before.0 == hash);
            let repeated = before.any(|before| records[before.1].id == *id)
                || self.find_record(model, id, hash)?.is_some();
            if !repeated {
                new.push((hash, position));
            }
        }
        Ok(new)
    }

    /// Keeps a record and folds it, with the outcome that waited for it.
    fn record<'s>(
        &mut self,
        batch: &mut Batch,
        record: &NewRecord,
        hash: i64,
        shadows: impl Iterator<Item = (&'s FoldedVersion, &'s ShadowScore)>,
    ) -> Result<(), LedgerError> {
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
            self.cache.spans.cover(Kind::Outcome, batch.model, case.day(), outcome.number);
            self.transaction
                .prepare_cached("UPDATE outcome SET record = ?, id = NULL WHERE number = ?")?
                .execute([number, outcome.number])?;
        }
        Ok(())
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
            record.time,
            batch.received,
            record.id,
            floats_to_bytes(&record.log_odds),
            floats_to_bytes(&record.inputs),
            segments_to_text(&record.segments)?,
        ])?;
        self.cache.records.add(hash);
        self.cache.spans.cover(Kind::Record, batch.model, day_of(record.time), number);
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
}
