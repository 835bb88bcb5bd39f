//! Removing: single records on request, and old ones by age.

use rusqlite::{Connection, params};

use super::index::{Kind, drop_runs_before};
use super::rows::StoredRecord;
use super::spans::Spans;
use super::writing::{HORIZON, Observed, Writing};
use crate::codes::id_hash;
use crate::error::LedgerError;
use crate::fold::{Case, Event, day_of};
use crate::types::{Act, Pruned};

impl Writing<'_> {
    /// Removes all that is known of some ids, from the summaries too. For each id whether there was
    /// anything.
    pub(super) fn delete(
        &mut self,
        model_name: &str,
        ids: &[String],
        act: &Act,
    ) -> Result<Vec<bool>, LedgerError> {
        let model = self.model(model_name)?;
        self.keep_numbers()?;
        // What is removed is overwritten in the file, too.
        self.transaction.pragma_update(None, "secure_delete", true)?;
        let deleted: Result<Vec<bool>, LedgerError> =
            ids.iter().map(|id| self.delete_one(model, id)).collect();
        self.transaction.pragma_update(None, "secure_delete", false)?;
        let deleted = deleted?;
        self.write_deletion(model, act, deleted.iter().filter(|found| **found).count())?;
        Ok(deleted)
    }

    fn delete_one(&mut self, model: i64, id: &str) -> Result<bool, LedgerError> {
        let hash = id_hash(model, id);
        let Some(record) = self.find_record(model, id, hash)? else {
            let waiting = self.find_waiting(model, id, hash)?;
            if let Some(outcome) = &waiting {
                self.delete_outcome(outcome.number)?;
            }
            return Ok(waiting.is_some());
        };
        let day = day_of(record.record.time);
        let version = self.cache.names.version(self.transaction, record.version)?;
        if let Some(outcome) = self.find_matched(model, record.number, hash)? {
            self.fold_correction(&version, &record, Some(Observed::of(&outcome)), None)?;
            self.delete_outcome(outcome.number)?;
            self.count(model, day, [0, -1]);
        }
        self.fold(&version, &Case::of_record(&record.record), Event::Deleted)?;
        self.delete_shadows(&record)?;
        self.transaction.prepare_cached("DELETE FROM record WHERE number = ?")?.execute([record.number])?;
        self.count(model, day, [-1, 0]);
        Ok(true)
    }

    fn delete_shadows(&mut self, record: &StoredRecord) -> Result<(), LedgerError> {
        for (number, score) in self.shadows_of(record.number)? {
            let version = self.cache.names.version(self.transaction, number)?;
            let case = Case::of_shadow(&record.record.id, record.record.time, &score);
            self.fold(&version, &case, Event::Deleted)?;
        }
        self.transaction
            .prepare_cached("DELETE FROM shadow_score WHERE record = ?")?
            .execute([record.number])?;
        Ok(())
    }

    fn delete_outcome(&self, number: i64) -> Result<(), LedgerError> {
        self.transaction.prepare_cached("DELETE FROM former_outcome WHERE outcome = ?")?.execute([number])?;
        self.transaction.prepare_cached("DELETE FROM outcome WHERE number = ?")?.execute([number])?;
        Ok(())
    }

    /// Removes raw rows of days before `before`, some at a time. From the first time on the
    /// summaries of these days are final, so that they need not agree with what is left of the rows.
    pub(super) fn prune(&mut self, before: i64, most_rows: u32) -> Result<Pruned, LedgerError> {
        let horizon = self.cache.horizon.max(before);
        self.set_mark(HORIZON, horizon)?;
        self.cache.horizon = horizon;
        self.keep_numbers()?;
        let mut pruned = Pruned::default();
        let mut statement = self.transaction.prepare("SELECT number FROM model ORDER BY number")?;
        let models = statement.query_map([], |row| row.get(0))?.collect::<Result<Vec<i64>, _>>()?;
        for model in models {
            let limits = [model, horizon, i64::from(most_rows)];
            let records = self.prune_records(limits)?;
            let outcomes = self.prune_outcomes(
                "SELECT outcome.number FROM span CROSS JOIN outcome \
                 ON outcome.number BETWEEN span.first AND span.last \
                 WHERE span.kind = 1 AND span.model = ?1 AND span.day < ?2 LIMIT ?3",
                limits,
            )?;
            let waiting = self.prune_outcomes(
                "SELECT number FROM outcome \
                 WHERE model = ?1 AND record IS NULL AND received < ?2 * 86400000000 LIMIT ?3",
                limits,
            )?;
            let more = [records, outcomes, waiting].contains(&u64::from(most_rows));
            if !more {
                self.transaction.execute("DELETE FROM span WHERE model = ? AND day < ?", [model, horizon])?;
            }
            pruned.records += records;
            pruned.outcomes += outcomes + waiting;
            pruned.more |= more;
        }
        // What was removed must not grow again.
        self.cache.spans = Spans::default();
        self.drop_runs(Kind::Record, "SELECT min(number) FROM record")?;
        self.drop_runs(Kind::Outcome, "SELECT min(number) FROM outcome")?;
        // So that the next transaction learns which runs there are.
        self.cache.commits_of_others = None;
        Ok(pruned)
    }

    fn prune_records(&self, limits: [i64; 3]) -> Result<u64, LedgerError> {
        let mut statement = self.transaction.prepare_cached(
            "SELECT record.number FROM span CROSS JOIN record \
             ON record.number BETWEEN span.first AND span.last \
             WHERE span.kind = 0 AND span.model = ? AND span.day < ? LIMIT ?",
        )?;
        let numbers = statement.query_map(limits, |row| row.get(0))?.collect::<Result<Vec<i64>, _>>()?;
        let mut shadows = self.transaction.prepare_cached("DELETE FROM shadow_score WHERE record = ?")?;
        let mut record = self.transaction.prepare_cached("DELETE FROM record WHERE number = ?")?;
        for number in &numbers {
            shadows.execute([number])?;
            record.execute([number])?;
        }
        Ok(numbers.len() as u64)
    }

    fn prune_outcomes(&self, which: &str, parameters: [i64; 3]) -> Result<u64, LedgerError> {
        let mut statement = self.transaction.prepare_cached(which)?;
        let numbers = statement.query_map(parameters, |row| row.get(0))?.collect::<Result<Vec<i64>, _>>()?;
        for number in &numbers {
            self.delete_outcome(*number)?;
        }
        Ok(numbers.len() as u64)
    }

    fn drop_runs(&self, kind: Kind, first: &str) -> Result<(), LedgerError> {
        let first: Option<i64> = self.transaction.query_row(first, [], |row| row.get(0))?;
        drop_runs_before(self.transaction, kind, first.unwrap_or(i64::MAX))
    }

    /// Notes which numbers come next, because the rows that tell may be removed.
    fn keep_numbers(&self) -> Result<(), LedgerError> {
        for (kind, index) in [(Kind::Record, &self.cache.records), (Kind::Outcome, &self.cache.outcomes)] {
            self.set_mark(kind.mark(), index.next_number())?;
        }
        Ok(())
    }

    fn set_mark(&self, name: &str, value: i64) -> Result<(), LedgerError> {
        self.transaction.execute(
            "INSERT INTO mark (name, value) VALUES (?, ?) ON CONFLICT DO UPDATE SET value = excluded.value",
            params![name, value],
        )?;
        Ok(())
    }
}

/// Empties the write-ahead log, in which what was deleted may still stand.
pub(super) fn forget_log(connection: &Connection) {
    let emptied: Result<i64, _> =
        connection.query_row("PRAGMA wal_checkpoint(TRUNCATE)", [], |row| row.get(0));
    if !matches!(emptied, Ok(0)) {
        tracing::info!("deleted records stand in the write-ahead log until it is emptied next time");
    }
}
