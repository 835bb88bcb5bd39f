//! Verifying: all summaries are computed anew from the raw records and compared.

use std::collections::HashMap;
use std::collections::hash_map::Entry;

use rusqlite::{Connection, OptionalExtension};

use super::codes::{stream_from_columns, summary_from_bytes};
use super::names::{load_streams, load_version};
use super::raw::{OutcomesOfDay, RECORDS_OF_DAY, days_of, outcomes_of};
use super::rows::{RECORD_COLUMNS, load_shadows, stored_record};
use super::writing::horizon;
use crate::compare::difference;
use crate::error::LedgerError;
use crate::fold::{Case, Event, FoldedVersion, Streams, Windows};
use crate::types::{RawOutcome, Stream, VerifyDifference};

/// Compares the summaries of all days whose raw records are kept. Each day is read as of one
/// moment, so writing may go on.
pub(super) fn verify(connection: &Connection) -> Result<Vec<VerifyDifference>, LedgerError> {
    let models = connection
        .prepare("SELECT number FROM model ORDER BY number")?
        .query_map([], |row| row.get(0))?
        .collect::<Result<Vec<i64>, _>>()?;
    let mut verification = Verification { connection, versions: HashMap::new(), differences: Vec::new() };
    for model in models {
        for day in days_of(connection, model, [horizon(connection)?, i64::MAX])? {
            verification.verify_day(model, day)?;
        }
    }
    Ok(verification.differences)
}

struct Verification<'a> {
    connection: &'a Connection,
    versions: HashMap<i64, FoldedVersion>,
    differences: Vec<VerifyDifference>,
}

/// A day as its raw records give it.
#[derive(Default)]
struct ComputedDay {
    windows: Windows,
    streams: HashMap<i64, Streams>,
    records: i64,
}

impl Verification<'_> {
    fn verify_day(&mut self, model: i64, day: i64) -> Result<(), LedgerError> {
        let snapshot = self.connection.unchecked_transaction()?;
        if day < horizon(&snapshot)? {
            return Ok(());
        }
        let outcomes = outcomes_of(&snapshot, model, day)?;
        let mut computed = ComputedDay::default();
        let mut statement = snapshot.prepare_cached(&format!("SELECT {RECORD_COLUMNS} {RECORDS_OF_DAY}"))?;
        let mut rows = statement.query([model, day])?;
        while let Some(row) = rows.next()? {
            let stored = stored_record(row)?;
            computed.records += 1;
            let outcome = outcomes.get(&stored.number);
            self.fold(&mut computed, stored.version, &Case::of_record(&stored.record), outcome)?;
            for (version, score) in load_shadows(&snapshot, stored.number)? {
                let case = Case::of_shadow(&stored.record.id, stored.record.time, &score);
                self.fold(&mut computed, version, &case, outcome)?;
            }
        }
        self.compare_counts(&snapshot, (model, day), &computed, &outcomes)?;
        self.compare_summaries(&snapshot, (model, day), computed)
    }

    fn fold(
        &mut self,
        computed: &mut ComputedDay,
        number: i64,
        case: &Case,
        outcome: Option<&RawOutcome>,
    ) -> Result<(), LedgerError> {
        let version = match self.versions.entry(number) {
            Entry::Occupied(entry) => entry.into_mut(),
            Entry::Vacant(entry) => entry.insert(load_version(self.connection, number)?),
        };
        let streams = match computed.streams.entry(number) {
            Entry::Occupied(entry) => entry.into_mut(),
            Entry::Vacant(entry) => entry.insert(load_streams(self.connection, number)?),
        };
        let outcome = outcome.and_then(|outcome| {
            let category = version.category(&outcome.category)?;
            Some(Event::Outcome { category, observed_at: outcome.observed_at })
        });
        let terms = if outcome.is_some() { version.terms(case.inputs) } else { Vec::new() };
        for (name, stream) in streams.of(version, case) {
            let Some(stream) = stream else {
                self.differences.push(VerifyDifference {
                    version: fingerprint(self.connection, number)?,
                    day: case.day(),
                    stream: name.to_stream(),
                    reason: format!("record `{}` is in no summary", case.id),
                });
                continue;
            };
            for event in std::iter::once(Event::Scored).chain(outcome) {
                computed.windows.fold((stream, name.detail()), version, case, &terms, event, |_| Ok(None))?;
            }
        }
        Ok(())
    }

    fn compare_counts(
        &mut self,
        snapshot: &Connection,
        (model, day): (i64, i64),
        computed: &ComputedDay,
        outcomes: &OutcomesOfDay,
    ) -> Result<(), LedgerError> {
        let counted: [i64; 2] = snapshot
            .prepare_cached("SELECT records, matched FROM day WHERE model = ? AND day = ?")?
            .query_row([model, day], |row| Ok([row.get(0)?, row.get(1)?]))
            .optional()?
            .unwrap_or_default();
        let found = [computed.records, outcomes.len() as i64];
        if counted != found {
            self.differences.push(VerifyDifference {
                version: String::new(),
                day,
                stream: Stream::All,
                reason: format!(
                    "{} records with {} outcomes are counted, {} with {} are there",
                    counted[0], counted[1], found[0], found[1]
                ),
            });
        }
        Ok(())
    }

    fn compare_summaries(
        &mut self,
        snapshot: &Connection,
        (model, day): (i64, i64),
        mut computed: ComputedDay,
    ) -> Result<(), LedgerError> {
        let mut statement = snapshot.prepare_cached(
            "SELECT stream.number, fingerprint, field, value, summary FROM version \
             JOIN stream ON stream.version = version.number \
             JOIN summary ON summary.stream = stream.number AND day = ? \
             WHERE model = ? ORDER BY stream.number",
        )?;
        let mut rows = statement.query([day, model])?;
        while let Some(row) = rows.next()? {
            let stored = summary_from_bytes(row.get_ref(4)?.as_blob().map_err(rusqlite::Error::from)?)?;
            let reason = match computed.windows.remove((row.get(0)?, day)) {
                Some(computed) => difference(&stored, &computed),
                None if stored.is_empty() => None,
                None => Some("there are no records for it".to_owned()),
            };
            if let Some(reason) = reason {
                let stream = stream_from_columns(row.get(2)?, row.get(3)?);
                self.differences.push(VerifyDifference { version: row.get(1)?, day, stream, reason });
            }
        }
        for (stream, _) in computed.windows.keys() {
            let (version, stream) = snapshot.query_row(
                "SELECT fingerprint, field, value FROM stream JOIN version ON version.number = stream.version \
                 WHERE stream.number = ?",
                [stream],
                |row| Ok((row.get(0)?, stream_from_columns(row.get(1)?, row.get(2)?))),
            )?;
            let reason = "is not stored".to_owned();
            self.differences.push(VerifyDifference { version, day, stream, reason });
        }
        Ok(())
    }
}

fn fingerprint(connection: &Connection, version: i64) -> Result<String, LedgerError> {
    Ok(connection
        .query_row("SELECT fingerprint FROM version WHERE number = ?", [version], |row| row.get(0))?)
}
