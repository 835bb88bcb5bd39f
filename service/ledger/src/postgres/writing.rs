//! A transaction being filled: what jobs change is folded here; rows are written by `difference`.

use std::collections::BTreeMap;
use std::sync::Arc;

use kilter_drift::{SUMMARY_VERSION, Summary};

use super::Cache;
use super::names::Names;
use super::work::Work;
use crate::codes::{summary_from_bytes, summary_to_bytes};
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion, WindowKey};
use crate::store::{Job, Reply};

/// What the state row says when a transaction begins.
#[derive(Debug, Clone, Copy)]
pub(super) struct Taken {
    pub(super) commits: i64,
    pub(super) names: i64,
    pub(super) horizon: i64,
    pub(super) next_record: i64,
    pub(super) next_outcome: i64,
}

/// A transaction being filled.
pub(super) struct Writing<'a, 'c> {
    pub(super) work: Work<'a, 'c>,
    pub(super) cache: &'a mut Cache,
    pub(super) next_record: i64,
    pub(super) next_outcome: i64,
    taken: Taken,
    /// Changes of the number of records and of matched outcomes, by model and day.
    days: BTreeMap<(i64, i64), [i64; 2]>,
}

/// An outcome as it is folded.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Observed {
    pub(super) category: i64,
    pub(super) observed_at: i64,
}

/// Whether a job is of rows that are found by their ids; neighbours of this kind are looked up and
/// written together.
fn is_of_rows(job: &Job) -> bool {
    matches!(job, Job::Records(_) | Job::RecordsWithShadows { .. } | Job::Outcomes(_) | Job::Delete { .. })
}

impl<'a, 'c> Writing<'a, 'c> {
    pub(super) fn new(work: Work<'a, 'c>, cache: &'a mut Cache, taken: Taken) -> Self {
        Self {
            work,
            cache,
            next_record: taken.next_record,
            next_outcome: taken.next_outcome,
            taken,
            days: BTreeMap::new(),
        }
    }

    /// Performs all jobs in their order.
    pub(super) fn perform(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        let mut replies = Vec::with_capacity(jobs.len());
        for group in jobs.chunk_by(|former, next| is_of_rows(former) && is_of_rows(next)) {
            match group {
                [job] if !is_of_rows(job) => replies.push(self.perform_one(job)?),
                group => self.perform_rows(group, &mut replies)?,
            }
        }
        Ok(replies)
    }

    fn perform_one(&mut self, job: &Job) -> Result<Reply, LedgerError> {
        match job {
            Job::Publish { version, who } => self.publish(version, who).map(|()| Reply::Published),
            Job::ChangeVersion { model, change, act } => {
                self.change_version(model, change, act).map(Reply::Changed)
            }
            Job::Prune { before, most_rows } => self.prune(*before, *most_rows).map(Reply::Pruned),
            Job::BeginFile(file) => self.begin_file(file).map(Reply::File),
            Job::FinishFile { model, sha256, finished } => {
                self.finish_file(model, sha256, *finished).map(|()| Reply::Finished)
            }
            Job::Records(_) | Job::RecordsWithShadows { .. } | Job::Outcomes(_) | Job::Delete { .. } => {
                let mut replies = Vec::new();
                self.perform_rows(std::slice::from_ref(job), &mut replies)?;
                replies.pop().ok_or(LedgerError::Closed)
            }
        }
    }

    /// Writes what was changed on the way.
    pub(super) fn finish(mut self) -> Result<(), LedgerError> {
        self.write_summaries()?;
        self.write_days()?;
        let names = self.taken.names + i64::from(self.cache.names.changed);
        let horizon = self.cache.horizon;
        let before = (self.taken.names, self.taken.horizon, self.taken.next_record, self.taken.next_outcome);
        if before != (names, horizon, self.next_record, self.next_outcome) {
            self.work.execute(
                "UPDATE state SET names = $1, horizon = $2, next_record = $3, next_outcome = $4",
                &[&names, &horizon, &self.next_record, &self.next_outcome],
            )?;
        }
        self.cache.names_seen = names;
        self.cache.names.changed = false;
        Ok(())
    }

    fn write_summaries(&mut self) -> Result<(), LedgerError> {
        let (mut streams, mut days, mut summaries) = (Vec::new(), Vec::new(), Vec::new());
        for ((stream, day), summary) in self.cache.windows.changed() {
            streams.push(stream);
            days.push(day);
            summaries.push(summary_to_bytes(summary)?);
        }
        if streams.is_empty() {
            return Ok(());
        }
        self.work.execute(
            "INSERT INTO summary (stream, day, summary, version) \
             SELECT *, $4 FROM unnest($1::bigint[], $2::bigint[], $3::bytea[]) \
             ON CONFLICT (stream, day) DO UPDATE SET summary = excluded.summary, version = excluded.version",
            &[&streams, &days, &summaries, &i64::from(SUMMARY_VERSION)],
        )?;
        Ok(())
    }

    fn write_days(&mut self) -> Result<(), LedgerError> {
        let columns: [Vec<i64>; 4] = std::array::from_fn(|column| {
            self.days
                .iter()
                .map(|((model, day), [records, matched])| [*model, *day, *records, *matched][column])
                .collect()
        });
        if columns[0].is_empty() {
            return Ok(());
        }
        self.work.execute(
            "INSERT INTO day (model, day, records, matched) \
             SELECT * FROM unnest($1::bigint[], $2::bigint[], $3::bigint[], $4::bigint[]) \
             ON CONFLICT (model, day) DO UPDATE \
             SET records = day.records + excluded.records, matched = day.matched + excluded.matched",
            &[&columns[0], &columns[1], &columns[2], &columns[3]],
        )?;
        Ok(())
    }

    pub(super) fn model(&mut self, name: &str) -> Result<i64, LedgerError> {
        self.cache.names.model(&mut self.work, name)
    }

    pub(super) fn version(&mut self, number: i64) -> Result<Arc<FoldedVersion>, LedgerError> {
        self.cache.names.version(&mut self.work, number)
    }

    pub(super) fn version_of(
        &mut self,
        model: (i64, &str),
        fingerprint: &str,
    ) -> Result<Arc<FoldedVersion>, LedgerError> {
        let number = self.cache.names.version_number(&mut self.work, model, fingerprint)?;
        self.version(number)
    }

    pub(super) fn names(&mut self) -> (&mut Names, &mut Work<'a, 'c>) {
        (&mut self.cache.names, &mut self.work)
    }

    /// Folds the change of an outcome.
    pub(super) fn fold_change(
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

    /// Folds an outcome in or out, unless it is of a category that the version does not know.
    fn fold_outcome(
        &mut self,
        version: &FoldedVersion,
        case: &Case,
        observed: Observed,
        withdrawn: bool,
    ) -> Result<(), LedgerError> {
        let name = self.cache.names.category_name(&mut self.work, observed.category)?;
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
                None => self.cache.names.add_stream(&mut self.work, version.number, name)?,
            };
            let work = &mut self.work;
            self.cache
                .windows
                .fold((stream, name.detail()), version, case, &terms, event, |key| load_summary(work, key))?;
        }
        Ok(())
    }

    pub(super) fn count(&mut self, model: i64, day: i64, [records, matched]: [i64; 2]) {
        let counts = self.days.entry((model, day)).or_default();
        counts[0] += records;
        counts[1] += matched;
    }
}

fn load_summary(work: &mut Work, (stream, day): WindowKey) -> Result<Option<Summary>, LedgerError> {
    let row =
        work.query_opt("SELECT summary FROM summary WHERE stream = $1 AND day = $2", &[&stream, &day])?;
    row.map(|row| summary_from_bytes(row.try_get(0)?)).transpose()
}
