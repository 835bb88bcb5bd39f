//! What is known of the ids that a group of jobs names: read in few queries, changed in memory, and
//! written as the difference.

use std::borrow::Cow;
use std::collections::{BTreeMap, HashMap};

use postgres::Row;

use super::writing::{Observed, Writing};
use crate::codes::{floats_from_bytes, id_hash, segments_from_text, with_nul};
use crate::error::LedgerError;
use crate::fold::day_of;
use crate::store::Job;
use crate::types::{NewRecord, ShadowScore};

/// A record as the versions scored it.
#[derive(Debug)]
pub(super) struct KnownRecord<'j> {
    pub(super) number: i64,
    pub(super) version: i64,
    pub(super) received: i64,
    pub(super) record: Cow<'j, NewRecord>,
    /// What shadow versions made of it, each with the number of the version.
    pub(super) shadows: Vec<(i64, Cow<'j, ShadowScore>)>,
}

impl KnownRecord<'_> {
    pub(super) fn day(&self) -> i64 {
        day_of(self.record.time)
    }
}

/// An outcome; of the record of its entry, or waiting for it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct KnownOutcome {
    pub(super) number: i64,
    pub(super) observed: Observed,
    pub(super) received: i64,
}

/// What the tables hold of an id.
#[derive(Debug, Default, Clone, Copy)]
pub(super) struct Stored {
    /// Day and number of the record.
    pub(super) record: Option<(i64, i64)>,
    pub(super) outcome: Option<KnownOutcome>,
}

/// An id.
#[derive(Debug)]
pub(super) struct Entry<'j> {
    pub(super) model: i64,
    pub(super) id: &'j str,
    pub(super) hash: i64,
    /// As it was before.
    pub(super) stored: Stored,
    /// As it is to be.
    pub(super) record: Option<KnownRecord<'j>>,
    pub(super) outcome: Option<KnownOutcome>,
}

/// All ids of a group of jobs.
#[derive(Debug, Default)]
pub(super) struct Entries<'j> {
    pub(super) ids: Vec<Entry<'j>>,
    /// For each job the entries of its ids, in their order.
    pub(super) of_jobs: Vec<Vec<usize>>,
    index: HashMap<(i64, &'j str), usize>,
    /// What outcomes were before they were corrected: number of the outcome, and what it was.
    pub(super) former: Vec<KnownOutcome>,
}

impl<'j> Entries<'j> {
    /// Reads what is known of the ids of all jobs.
    pub(super) fn load(writing: &mut Writing, jobs: &'j [Job]) -> Result<Self, LedgerError> {
        let mut entries = Self::default();
        for job in jobs {
            match job {
                Job::Records(records) | Job::RecordsWithShadows { records, .. } => {
                    let model = writing.model(&records.model)?;
                    entries.add(model, records.records.iter().map(|record| record.id.as_str()));
                }
                Job::Outcomes(outcomes) => {
                    let model = writing.model(&outcomes.model)?;
                    entries.add(model, outcomes.outcomes.iter().map(|outcome| outcome.id.as_str()));
                }
                Job::Delete { model, ids, .. } => {
                    let model = writing.model(model)?;
                    entries.add(model, ids.iter().map(String::as_str));
                }
                _ => entries.of_jobs.push(Vec::new()),
            }
        }
        let mut hashes: Vec<i64> = entries.ids.iter().map(|entry| entry.hash).collect();
        hashes.sort_unstable();
        let found = entries.load_records(writing, &hashes)?;
        if writing.cache.names.has_shadows(&mut writing.work)? {
            entries.load_shadows(writing, &found)?;
        }
        entries.load_waiting(writing, &hashes)?;
        Ok(entries)
    }

    fn add(&mut self, model: i64, ids: impl Iterator<Item = &'j str>) {
        let of_job = ids
            .map(|id| {
                *self.index.entry((model, id)).or_insert_with(|| {
                    self.ids.push(Entry {
                        model,
                        id,
                        hash: id_hash(model, id),
                        stored: Stored::default(),
                        record: None,
                        outcome: None,
                    });
                    self.ids.len() - 1
                })
            })
            .collect();
        self.of_jobs.push(of_job);
    }

    fn entry(&mut self, model: i64, id: &str) -> Option<(usize, &mut Entry<'j>)> {
        let position = *self.index.get(&(model, id))?;
        Some((position, &mut self.ids[position]))
    }

    /// Reads records with their outcomes; for each day the numbers of those that were found.
    fn load_records(
        &mut self,
        writing: &mut Writing,
        hashes: &[i64],
    ) -> Result<BTreeMap<i64, HashMap<i64, usize>>, LedgerError> {
        let mut days: BTreeMap<i64, Vec<i64>> = BTreeMap::new();
        let rows = writing.work.query(
            "SELECT day, number FROM unnest($1::bigint[]) AS wanted (hash) JOIN record_id USING (hash)",
            &[&hashes],
        )?;
        for row in rows {
            days.entry(row.try_get(0)?).or_default().push(row.try_get(1)?);
        }
        let mut found: BTreeMap<i64, HashMap<i64, usize>> = BTreeMap::new();
        for (day, mut numbers) in days {
            numbers.sort_unstable();
            let rows = writing.work.query(
                "SELECT record.log_odds, record.inputs, record.segments, record.number, record.version, \
                 record.received, record.time, record.model, record.id, \
                 outcome.number, outcome.category, outcome.observed_at, outcome.received \
                 FROM unnest($2::bigint[]) AS wanted (number) \
                 JOIN record ON record.day = $1 AND record.number = wanted.number \
                 LEFT JOIN outcome ON outcome.day = $1 AND outcome.record = wanted.number",
                &[&day, &numbers],
            )?;
            for row in rows {
                let id = with_nul(row.try_get(8)?);
                // Another id may have the same hash.
                let Some((position, entry)) = self.entry(row.try_get(7)?, &id) else { continue };
                let score = score_from_row(&row)?;
                let number = row.try_get(3)?;
                let record = NewRecord {
                    id,
                    time: row.try_get(6)?,
                    log_odds: score.log_odds,
                    inputs: score.inputs,
                    segments: score.segments,
                };
                let outcome = match row.try_get::<_, Option<i64>>(9)? {
                    Some(number) => Some(outcome_from_row(&row, number, 10)?),
                    None => None,
                };
                entry.stored = Stored { record: Some((day, number)), outcome };
                entry.outcome = outcome;
                entry.record = Some(KnownRecord {
                    number,
                    version: row.try_get(4)?,
                    received: row.try_get(5)?,
                    record: Cow::Owned(record),
                    shadows: Vec::new(),
                });
                found.entry(day).or_default().insert(number, position);
            }
        }
        Ok(found)
    }

    fn load_shadows(
        &mut self,
        writing: &mut Writing,
        found: &BTreeMap<i64, HashMap<i64, usize>>,
    ) -> Result<(), LedgerError> {
        for (day, numbers) in found {
            let wanted: Vec<i64> = numbers.keys().copied().collect();
            let rows = writing.work.query(
                "SELECT log_odds, inputs, segments, record, version FROM unnest($2::bigint[]) AS wanted (number) \
                 JOIN shadow_score ON shadow_score.day = $1 AND shadow_score.record = wanted.number \
                 ORDER BY record, version",
                &[day, &wanted],
            )?;
            for row in rows {
                let entry = numbers.get(&row.try_get(3)?).map(|position| &mut self.ids[*position]);
                if let Some(record) = entry.and_then(|entry| entry.record.as_mut()) {
                    record.shadows.push((row.try_get(4)?, Cow::Owned(score_from_row(&row)?)));
                }
            }
        }
        Ok(())
    }

    fn load_waiting(&mut self, writing: &mut Writing, hashes: &[i64]) -> Result<(), LedgerError> {
        let rows = writing.work.query(
            "SELECT model, id, number, category, observed_at, received \
             FROM unnest($1::bigint[]) AS wanted (hash) JOIN waiting_outcome USING (hash)",
            &[&hashes],
        )?;
        for row in rows {
            let id = with_nul(row.try_get(1)?);
            let outcome = outcome_from_row(&row, row.try_get(2)?, 3)?;
            if let Some((_, entry)) = self.entry(row.try_get(0)?, &id) {
                entry.stored.outcome = Some(outcome);
                entry.outcome = Some(outcome);
            }
        }
        Ok(())
    }
}

/// Log-odds, inputs and segments from the first three columns.
pub(super) fn score_from_row(row: &Row) -> Result<ShadowScore, LedgerError> {
    Ok(ShadowScore {
        log_odds: floats_from_bytes(row.try_get(0)?)?,
        inputs: floats_from_bytes(row.try_get(1)?)?,
        segments: segments_from_text(row.try_get(2)?)?,
    })
}

/// Category, time of observation and of receipt from three columns.
fn outcome_from_row(row: &Row, number: i64, first: usize) -> Result<KnownOutcome, LedgerError> {
    let observed = Observed { category: row.try_get(first)?, observed_at: row.try_get(first + 1)? };
    Ok(KnownOutcome { number, observed, received: row.try_get(first + 2)? })
}
