//! Removing old rows by age.

use super::difference::ByDay;
use super::writing::Writing;
use crate::codes::{id_hash, with_nul};
use crate::error::LedgerError;
use crate::types::Pruned;

const MICROS_PER_DAY: i64 = 86_400_000_000;

impl Writing<'_, '_> {
    /// Removes raw rows of days before `before`, some at a time. From the first time on the
    /// summaries of these days are final, so that they need not agree with what is left of the rows.
    pub(super) fn prune(&mut self, before: i64, most_rows: u32) -> Result<Pruned, LedgerError> {
        let horizon = self.cache.horizon.max(before);
        self.cache.horizon = horizon;
        let limit = i64::from(most_rows);
        let records = self.prune_records(horizon, limit)?;
        let matched = self.prune_matched(horizon, limit)?;
        let waiting = self.prune_waiting(horizon, limit)?;
        let more = [records, matched, waiting].contains(&u64::from(most_rows));
        if !more {
            self.drop_partitions_before(horizon)?;
        }
        Ok(Pruned { records, outcomes: matched + waiting, more })
    }

    fn prune_records(&mut self, horizon: i64, limit: i64) -> Result<u64, LedgerError> {
        let rows = self.work.query(
            "SELECT day, number, model, id FROM record WHERE day < $1 ORDER BY day, number LIMIT $2",
            &[&horizon, &limit],
        )?;
        let mut records = ByDay::new();
        let (mut hashes, mut numbers) = (Vec::with_capacity(rows.len()), Vec::with_capacity(rows.len()));
        for row in &rows {
            let number = row.try_get(1)?;
            records.entry(row.try_get(0)?).or_default().push(number);
            hashes.push(id_hash(row.try_get(2)?, &with_nul(row.try_get(3)?)));
            numbers.push(number);
        }
        self.delete_records(&records, &(hashes, numbers))?;
        Ok(rows.len() as u64)
    }

    fn prune_matched(&mut self, horizon: i64, limit: i64) -> Result<u64, LedgerError> {
        let rows = self.work.query(
            "SELECT day, record, number FROM outcome WHERE day < $1 ORDER BY day, record LIMIT $2",
            &[&horizon, &limit],
        )?;
        let (mut matched, mut forgotten) = (ByDay::new(), Vec::with_capacity(rows.len()));
        for row in &rows {
            matched.entry(row.try_get(0)?).or_default().push(row.try_get(1)?);
            forgotten.push(row.try_get(2)?);
        }
        self.delete_outcomes(&matched, &Vec::new(), &forgotten)?;
        Ok(rows.len() as u64)
    }

    fn prune_waiting(&mut self, horizon: i64, limit: i64) -> Result<u64, LedgerError> {
        let rows = self.work.query(
            "SELECT number FROM waiting_outcome WHERE received < $1 ORDER BY received LIMIT $2",
            &[&horizon.saturating_mul(MICROS_PER_DAY), &limit],
        )?;
        let numbers = rows.iter().map(|row| row.try_get(0)).collect::<Result<Vec<i64>, _>>()?;
        self.delete_outcomes(&ByDay::new(), &numbers, &numbers)?;
        Ok(numbers.len() as u64)
    }
}
