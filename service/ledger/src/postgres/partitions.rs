//! Partitions: one for each day of record time, made when the first row of the day comes.

use std::collections::HashSet;

use super::work::Work;
use super::writing::Writing;
use crate::error::LedgerError;

/// Days with partitions of their own, for each table. Rows of further days share one: planning a
/// query takes longer with every partition.
const MOST_DAYS: usize = 1500;

/// A table that is partitioned by day.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub(super) enum Partitioned {
    Record,
    Outcome,
    ShadowScore,
}

impl Partitioned {
    const ALL: [Self; 3] = [Self::Record, Self::Outcome, Self::ShadowScore];

    fn name(self) -> &'static str {
        match self {
            Self::Record => "record",
            Self::Outcome => "outcome",
            Self::ShadowScore => "shadow_score",
        }
    }

    /// Name of the partition of a day.
    fn of_day(self, day: i64) -> String {
        let sign = if day < 0 { "minus_" } else { "" };
        format!("{}_{sign}{}", self.name(), day.unsigned_abs())
    }

    /// Table and day of a partition.
    fn from_name(name: &str) -> Option<(Self, i64)> {
        let day_of = |rest: &str| match rest.strip_prefix("minus_") {
            Some(digits) => digits.parse::<i64>().ok().map(|day| -day),
            None => rest.parse().ok(),
        };
        Self::ALL.into_iter().find_map(|table| {
            let rest = name.strip_prefix(table.name())?.strip_prefix('_')?;
            Some((table, day_of(rest)?))
        })
    }

    fn other_days_are_used(self) -> &'static str {
        match self {
            Self::Record => "SELECT EXISTS (SELECT 1 FROM record_other)",
            Self::Outcome => "SELECT EXISTS (SELECT 1 FROM outcome_other)",
            Self::ShadowScore => "SELECT EXISTS (SELECT 1 FROM shadow_score_other)",
        }
    }
}

impl Writing<'_, '_> {
    /// Makes the partition of a day where there is none.
    pub(super) fn ensure_partition(&mut self, table: Partitioned, day: i64) -> Result<(), LedgerError> {
        let known = match &mut self.cache.names.partitions {
            Some(known) => known,
            None => self.cache.names.partitions.insert(load(&mut self.work)?),
        };
        if known.contains(&(table, day)) {
            return Ok(());
        }
        let days = known.iter().filter(|known| known.0 == table).count();
        // Once rows of other days share a partition, theirs might have to be moved out of it.
        let shared: bool = self.work.query_one(table.other_days_are_used(), &[])?.try_get(0)?;
        if days >= MOST_DAYS || shared {
            return Ok(());
        }
        // Attached and not made in place, because that does not keep readers from the table.
        let (parent, partition) = (table.name(), table.of_day(day));
        self.work.define(&format!(
            "CREATE TABLE {partition} (LIKE {parent} INCLUDING ALL); \
             ALTER TABLE {parent} ATTACH PARTITION {partition} FOR VALUES IN ({day})"
        ))?;
        known.insert((table, day));
        self.cache.names.changed = true;
        Ok(())
    }

    /// Drops the partitions of days before `day`, which are empty. Where somebody reads meanwhile
    /// they stay until the next time.
    pub(super) fn drop_partitions_before(&mut self, day: i64) -> Result<(), LedgerError> {
        let known = match self.cache.names.partitions.take() {
            Some(known) => known,
            None => load(&mut self.work)?,
        };
        let old: Vec<String> =
            known.iter().filter(|known| known.1 < day).map(|(table, day)| table.of_day(*day)).collect();
        self.cache.names.partitions = Some(known);
        if old.is_empty() {
            return Ok(());
        }
        let drop = format!("SET LOCAL lock_timeout = '200ms'; DROP TABLE {}", old.join(", "));
        if self.work.try_to_define(&drop)? {
            self.cache.names.partitions = None;
            self.cache.names.changed = true;
        }
        Ok(())
    }
}

fn load(work: &mut Work) -> Result<HashSet<(Partitioned, i64)>, LedgerError> {
    let rows = work.query(
        "SELECT relname::text FROM pg_class JOIN pg_namespace ON pg_namespace.oid = relnamespace \
         WHERE nspname = 'kilter' AND relispartition AND relkind = 'r'",
        &[],
    )?;
    let mut found = HashSet::new();
    for row in rows {
        found.extend(Partitioned::from_name(row.try_get(0)?));
    }
    Ok(found)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_of_partitions_can_be_read_back() {
        for table in Partitioned::ALL {
            for day in [0, 20_666, -1, -106_751_991] {
                assert_eq!(Partitioned::from_name(&table.of_day(day)), Some((table, day)));
            }
        }
        for name in ["record_other", "shadow_score_other", "record_id", "day"] {
            assert_eq!(Partitioned::from_name(name), None, "{name}");
        }
    }
}
