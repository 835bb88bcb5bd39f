//! Writing the difference between what the tables hold of ids and what they are to hold.

use std::collections::{BTreeMap, BTreeSet};

use super::entries::{Entries, Entry, KnownOutcome, KnownRecord};
use super::partitions::Partitioned;
use super::work::one;
use super::writing::Writing;
use crate::codes::{segments_to_text, without_nul};
use crate::error::LedgerError;

/// Numbers by day.
pub(super) type ByDay = BTreeMap<i64, Vec<i64>>;

/// An entry as it is to be, where its record is new.
struct New<'e, 'j> {
    entry: &'e Entry<'j>,
    record: &'e KnownRecord<'j>,
}

/// Changed outcomes as columns.
#[derive(Default)]
struct Changed {
    keys: Vec<i64>,
    categories: Vec<i64>,
    observed: Vec<i64>,
    received: Vec<i64>,
}

impl Changed {
    fn push(&mut self, key: i64, outcome: KnownOutcome) {
        self.keys.push(key);
        self.categories.push(outcome.observed.category);
        self.observed.push(outcome.observed.observed_at);
        self.received.push(outcome.received);
    }
}

/// All that is to be written.
#[derive(Default)]
struct Difference<'e, 'j> {
    records: Vec<New<'e, 'j>>,
    lost_records: ByDay,
    /// Hashes and numbers of lost records.
    lost_ids: (Vec<i64>, Vec<i64>),
    /// New outcomes of records, with day and number of the record.
    matched: Vec<(i64, i64, KnownOutcome)>,
    waiting: Vec<(&'e Entry<'j>, KnownOutcome)>,
    changed_matched: BTreeMap<i64, Changed>,
    changed_waiting: Changed,
    /// Numbers of records by day whose outcomes are removed.
    lost_matched: ByDay,
    lost_waiting: Vec<i64>,
    /// Outcomes whose history is removed.
    forgotten: Vec<i64>,
}

impl<'e, 'j> Difference<'e, 'j> {
    fn add(&mut self, entry: &'e Entry<'j>) {
        let stored = entry.stored;
        let number = entry.record.as_ref().map(|record| record.number);
        if let Some((day, lost)) = stored.record.filter(|stored| Some(stored.1) != number) {
            self.lost_records.entry(day).or_default().push(lost);
            self.lost_ids.0.push(entry.hash);
            self.lost_ids.1.push(lost);
        }
        if let Some(record) = entry
            .record
            .as_ref()
            .filter(|record| stored.record.is_none_or(|stored| stored.1 != record.number))
        {
            self.records.push(New { entry, record });
        }
        self.add_outcome(entry);
    }

    /// An outcome lies beside its record, or waits; it moves when the record comes.
    fn add_outcome(&mut self, entry: &'e Entry<'j>) {
        let stored = entry.stored;
        let place = entry.record.as_ref().map(|record| (record.day(), record.number));
        let stays = stored.record == place
            && stored.outcome.map(|outcome| outcome.number) == entry.outcome.map(|outcome| outcome.number);
        if let Some(former) = stored.outcome.filter(|_| !stays) {
            match stored.record {
                Some((day, record)) => self.lost_matched.entry(day).or_default().push(record),
                None => self.lost_waiting.push(former.number),
            }
            if entry.outcome.is_none_or(|outcome| outcome.number != former.number) {
                self.forgotten.push(former.number);
            }
        }
        let Some(outcome) = entry.outcome else { return };
        match (stays, place) {
            (true, _) if stored.outcome == Some(outcome) => {}
            (true, Some((day, record))) => {
                self.changed_matched.entry(day).or_default().push(record, outcome);
            }
            (true, None) => self.changed_waiting.push(outcome.number, outcome),
            (false, Some((day, record))) => self.matched.push((day, record, outcome)),
            (false, None) => self.waiting.push((entry, outcome)),
        }
    }
}

impl Writing<'_, '_> {
    /// Writes what jobs have changed of their ids.
    pub(super) fn write_difference(&mut self, entries: &Entries) -> Result<(), LedgerError> {
        let mut difference = Difference::default();
        entries.ids.iter().for_each(|entry| difference.add(entry));
        difference.records.sort_unstable_by_key(|new| (new.record.day(), new.record.number));
        difference.matched.sort_unstable_by_key(|(day, record, _)| (*day, *record));
        self.make_partitions(&difference)?;
        self.delete_records(&difference.lost_records, &difference.lost_ids)?;
        self.delete_outcomes(&difference.lost_matched, &difference.lost_waiting, &difference.forgotten)?;
        self.change_outcomes(&difference)?;
        self.copy_records(&difference.records)?;
        self.copy_shadows(&difference.records)?;
        self.copy_outcomes(&difference)?;
        self.copy_former(&entries.former)
    }

    fn make_partitions(&mut self, difference: &Difference) -> Result<(), LedgerError> {
        let mut wanted = BTreeSet::new();
        for New { record, .. } in &difference.records {
            wanted.insert((record.day(), Partitioned::Record));
            if !record.shadows.is_empty() {
                wanted.insert((record.day(), Partitioned::ShadowScore));
            }
        }
        wanted.extend(difference.matched.iter().map(|(day, _, _)| (*day, Partitioned::Outcome)));
        wanted.into_iter().try_for_each(|(day, table)| self.ensure_partition(table, day))
    }

    /// Removes records, their ids and what shadow versions made of them.
    pub(super) fn delete_records(
        &mut self,
        records: &ByDay,
        (hashes, numbers): &(Vec<i64>, Vec<i64>),
    ) -> Result<(), LedgerError> {
        for (day, numbers) in records {
            self.work.execute("DELETE FROM record WHERE day = $1 AND number = ANY ($2)", &[day, numbers])?;
            self.work
                .execute("DELETE FROM shadow_score WHERE day = $1 AND record = ANY ($2)", &[day, numbers])?;
        }
        if !hashes.is_empty() {
            self.work.execute(
                "DELETE FROM record_id USING unnest($1::bigint[], $2::bigint[]) AS lost (hash, number) \
                 WHERE record_id.hash = lost.hash AND record_id.number = lost.number",
                &[hashes, numbers],
            )?;
        }
        Ok(())
    }

    /// Removes outcomes, matched ones by day and number of their records, and the history of those
    /// that are forgotten.
    pub(super) fn delete_outcomes(
        &mut self,
        matched: &ByDay,
        waiting: &Vec<i64>,
        forgotten: &Vec<i64>,
    ) -> Result<(), LedgerError> {
        for (day, records) in matched {
            self.work.execute("DELETE FROM outcome WHERE day = $1 AND record = ANY ($2)", &[day, records])?;
        }
        if !waiting.is_empty() {
            self.work.execute("DELETE FROM waiting_outcome WHERE number = ANY ($1)", &one(waiting))?;
        }
        if !forgotten.is_empty() {
            self.work.execute("DELETE FROM former_outcome WHERE outcome = ANY ($1)", &one(forgotten))?;
        }
        Ok(())
    }

    fn change_outcomes(&mut self, difference: &Difference) -> Result<(), LedgerError> {
        for (day, changed) in &difference.changed_matched {
            self.work.execute(
                "UPDATE outcome SET category = changed.category, observed_at = changed.observed_at, \
                 received = changed.received \
                 FROM unnest($2::bigint[], $3::bigint[], $4::bigint[], $5::bigint[]) \
                 AS changed (record, category, observed_at, received) \
                 WHERE outcome.day = $1 AND outcome.record = changed.record",
                &[day, &changed.keys, &changed.categories, &changed.observed, &changed.received],
            )?;
        }
        let changed = &difference.changed_waiting;
        if !changed.keys.is_empty() {
            self.work.execute(
                "UPDATE waiting_outcome SET category = changed.category, observed_at = changed.observed_at, \
                 received = changed.received \
                 FROM unnest($1::bigint[], $2::bigint[], $3::bigint[], $4::bigint[]) \
                 AS changed (number, category, observed_at, received) \
                 WHERE waiting_outcome.number = changed.number",
                &[&changed.keys, &changed.categories, &changed.observed, &changed.received],
            )?;
        }
        Ok(())
    }

    fn copy_records(&mut self, new: &[New]) -> Result<(), LedgerError> {
        if new.is_empty() {
            return Ok(());
        }
        let mut copy = self.work.copy(
            "COPY record (day, number, model, version, time, received, id, log_odds, inputs, segments) \
             FROM STDIN (FORMAT binary)",
            10,
        )?;
        for New { entry, record: known } in new {
            let record = &known.record;
            copy.row()?
                .number(known.day())
                .number(known.number)
                .number(entry.model)
                .number(known.version)
                .number(record.time)
                .number(known.received)
                .bytes(without_nul(&record.id).as_bytes())
                .floats(&record.log_odds)
                .floats(&record.inputs)
                .bytes(segments_to_text(&record.segments)?.as_bytes());
        }
        copy.finish()?;
        // In the order of their hashes, so that every page of the index is visited once.
        let mut ids: Vec<[i64; 3]> =
            new.iter().map(|new| [new.entry.hash, new.record.day(), new.record.number]).collect();
        ids.sort_unstable();
        let mut copy = self.work.copy("COPY record_id (hash, day, number) FROM STDIN (FORMAT binary)", 3)?;
        for [hash, day, number] in ids {
            copy.row()?.number(hash).number(day).number(number);
        }
        copy.finish()
    }

    fn copy_shadows(&mut self, new: &[New]) -> Result<(), LedgerError> {
        if new.iter().all(|new| new.record.shadows.is_empty()) {
            return Ok(());
        }
        let mut copy = self.work.copy(
            "COPY shadow_score (day, record, version, log_odds, inputs, segments) FROM STDIN (FORMAT binary)",
            6,
        )?;
        for record in new.iter().map(|new| new.record) {
            for (version, score) in &record.shadows {
                copy.row()?
                    .number(record.day())
                    .number(record.number)
                    .number(*version)
                    .floats(&score.log_odds)
                    .floats(&score.inputs)
                    .bytes(segments_to_text(&score.segments)?.as_bytes());
            }
        }
        copy.finish()
    }

    fn copy_outcomes(&mut self, difference: &Difference) -> Result<(), LedgerError> {
        if !difference.matched.is_empty() {
            let mut copy = self.work.copy(
                "COPY outcome (day, record, number, category, observed_at, received) FROM STDIN (FORMAT binary)",
                6,
            )?;
            for (day, record, outcome) in &difference.matched {
                copy.row()?
                    .number(*day)
                    .number(*record)
                    .number(outcome.number)
                    .number(outcome.observed.category)
                    .number(outcome.observed.observed_at)
                    .number(outcome.received);
            }
            copy.finish()?;
        }
        if difference.waiting.is_empty() {
            return Ok(());
        }
        let mut copy = self.work.copy(
            "COPY waiting_outcome (number, model, hash, id, category, observed_at, received) \
             FROM STDIN (FORMAT binary)",
            7,
        )?;
        for (entry, outcome) in &difference.waiting {
            copy.row()?
                .number(outcome.number)
                .number(entry.model)
                .number(entry.hash)
                .bytes(without_nul(entry.id).as_bytes())
                .number(outcome.observed.category)
                .number(outcome.observed.observed_at)
                .number(outcome.received);
        }
        copy.finish()
    }

    fn copy_former(&mut self, former: &[KnownOutcome]) -> Result<(), LedgerError> {
        if former.is_empty() {
            return Ok(());
        }
        let mut copy = self.work.copy(
            "COPY former_outcome (outcome, category, observed_at, received) FROM STDIN (FORMAT binary)",
            4,
        )?;
        for outcome in former {
            copy.row()?
                .number(outcome.number)
                .number(outcome.observed.category)
                .number(outcome.observed.observed_at)
                .number(outcome.received);
        }
        copy.finish()
    }
}
