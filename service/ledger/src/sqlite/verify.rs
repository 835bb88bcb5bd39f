//! Verifying: all summaries are computed anew from the raw records and compared.

use std::collections::HashMap;
use std::collections::hash_map::Entry;

use kilter_drift::SUMMARY_VERSION;
use rusqlite::{Connection, OptionalExtension};

use super::names::{load_streams, load_version};
use super::raw::{RECORDS_OF_DAY, days_of, outcomes_of};
use super::rows::{RECORD_COLUMNS, load_shadows, stored_record};
use super::writing::horizon;
use crate::codes::{stream_from_columns, summary_from_bytes};
use crate::error::LedgerError;
use crate::fold::{Case, FoldedVersion};
use crate::recomputed::Recomputed;
use crate::types::VerifyDifference;

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

impl Verification<'_> {
    fn verify_day(&mut self, model: i64, day: i64) -> Result<(), LedgerError> {
        let snapshot = self.connection.unchecked_transaction()?;
        if day < horizon(&snapshot)? {
            return Ok(());
        }
        let mut computed = compute_day(&snapshot, &mut self.versions, (model, day))?;
        compare_counts(&snapshot, (model, day), &mut computed)?;
        compare_summaries(&snapshot, (model, day), &mut computed)?;
        self.differences.extend(computed.into_differences());
        Ok(())
    }
}

/// Computes the summaries of a day anew from its raw records.
pub(super) fn compute_day(
    snapshot: &Connection,
    versions: &mut HashMap<i64, FoldedVersion>,
    (model, day): (i64, i64),
) -> Result<Recomputed, LedgerError> {
    let outcomes = outcomes_of(snapshot, model, day)?;
    let mut computed = Recomputed::new(day);
    let mut streams = HashMap::new();
    let mut statement = snapshot.prepare_cached(&format!("SELECT {RECORD_COLUMNS} {RECORDS_OF_DAY}"))?;
    let mut rows = statement.query([model, day])?;
    while let Some(row) = rows.next()? {
        let stored = stored_record(row)?;
        let outcome = outcomes.get(&stored.number);
        computed.count(outcome.is_some());
        let mut fold = |number: i64, case: &Case| {
            let version = match versions.entry(number) {
                Entry::Occupied(entry) => entry.into_mut(),
                Entry::Vacant(entry) => entry.insert(load_version(snapshot, number)?),
            };
            let streams = match streams.entry(number) {
                Entry::Occupied(entry) => entry.into_mut(),
                Entry::Vacant(entry) => entry.insert(load_streams(snapshot, number)?),
            };
            computed.fold(version, streams, case, outcome)
        };
        fold(stored.version, &Case::of_record(&stored.record))?;
        for (version, score) in load_shadows(snapshot, stored.number)? {
            fold(version, &Case::of_shadow(&stored.record.id, stored.record.time, &score))?;
        }
    }
    Ok(computed)
}

fn compare_counts(
    snapshot: &Connection,
    (model, day): (i64, i64),
    computed: &mut Recomputed,
) -> Result<(), LedgerError> {
    let counted: [i64; 2] = snapshot
        .prepare_cached("SELECT records, matched FROM day WHERE model = ? AND day = ?")?
        .query_row([model, day], |row| Ok([row.get(0)?, row.get(1)?]))
        .optional()?
        .unwrap_or_default();
    computed.compare_counts(counted);
    Ok(())
}

fn compare_summaries(
    snapshot: &Connection,
    (model, day): (i64, i64),
    computed: &mut Recomputed,
) -> Result<(), LedgerError> {
    let mut statement = snapshot.prepare_cached(
        "SELECT stream.number, fingerprint, field, value, summary FROM version \
         JOIN stream ON stream.version = version.number \
         JOIN summary ON summary.stream = stream.number AND day = ? \
         WHERE model = ? AND summary.version = ? ORDER BY stream.number",
    )?;
    let mut rows = statement.query([day, model, SUMMARY_VERSION.into()])?;
    while let Some(row) = rows.next()? {
        let stored = summary_from_bytes(row.get_ref(4)?.as_blob().map_err(rusqlite::Error::from)?)?;
        let stream = stream_from_columns(row.get(2)?, row.get(3)?);
        computed.compare(row.get(0)?, &row.get::<_, String>(1)?, stream, &stored);
    }
    for stream in computed.left() {
        let (version, stream): (String, _) = snapshot.query_row(
            "SELECT fingerprint, field, value FROM stream JOIN version ON version.number = stream.version \
             WHERE stream.number = ?",
            [stream],
            |row| Ok((row.get(0)?, stream_from_columns(row.get(1)?, row.get(2)?))),
        )?;
        computed.not_stored(&version, stream);
    }
    Ok(())
}
