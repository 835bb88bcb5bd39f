//! Finding records and outcomes by their ids.
//!
//! A B-tree over random ids would be written all over with every commit. Here nothing is written
//! for an id when its row comes: the rows lie in order of arrival, and the hashes of the youngest
//! are kept in memory, from where they are written as a sorted run now and then, all at once (a
//! log-structured index: O'Neil, Cheng, Gawlick & O'Neil 1996). After a restart the rows behind
//! the last run are read again. Each run has a filter in memory, so most runs are never looked at.

use std::collections::HashMap;
use std::collections::hash_map::Entry;
use std::hash::{BuildHasherDefault, Hasher};

use rusqlite::{Connection, Row, params};

use super::codes::id_hash;
use super::filter::Filter;
use crate::error::LedgerError;

/// What an index finds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Kind {
    Record,
    Outcome,
}

impl Kind {
    fn code(self) -> i64 {
        match self {
            Self::Record => 0,
            Self::Outcome => 1,
        }
    }

    /// Rows from a number on, each with what its hash is made of.
    fn rows_from(self) -> &'static str {
        match self {
            Self::Record => "SELECT number, model, id FROM record WHERE number >= ? ORDER BY number",
            Self::Outcome => "SELECT number, id_hash FROM outcome WHERE number >= ? ORDER BY number",
        }
    }

    fn hash_of(self, row: &Row) -> rusqlite::Result<i64> {
        match self {
            Self::Record => Ok(id_hash(row.get(1)?, row.get_ref(2)?.as_str()?)),
            Self::Outcome => row.get(1),
        }
    }

    /// Name of the mark that holds the next number.
    pub(crate) fn mark(self) -> &'static str {
        match self {
            Self::Record => "next record",
            Self::Outcome => "next outcome",
        }
    }
}

/// The keys are hashes already.
#[derive(Debug, Clone, Copy, Default)]
struct NoHasher(u64);

impl Hasher for NoHasher {
    fn finish(&self) -> u64 {
        self.0
    }

    fn write(&mut self, bytes: &[u8]) {
        self.0 = bytes.iter().fold(self.0, |state, byte| (state << 8) ^ u64::from(*byte));
    }

    fn write_i64(&mut self, value: i64) {
        self.0 = value.cast_unsigned();
    }
}

/// A run of sorted hashes on disk.
#[derive(Debug)]
struct Run {
    number: i64,
    filter: Filter,
}

/// Finds the numbers of rows by the hashes of their ids.
#[derive(Debug)]
pub(crate) struct IdIndex {
    kind: Kind,
    /// Hashes of rows that are in no run.
    recent: HashMap<i64, i64, BuildHasherDefault<NoHasher>>,
    /// Those whose hash another row of them has too.
    twins: Vec<(i64, i64)>,
    runs: Vec<Run>,
    /// The number that the next row gets; numbers are never given twice.
    next: i64,
    /// What the transaction under way has added.
    added: Vec<(i64, i64)>,
}

impl IdIndex {
    pub(crate) fn new(kind: Kind) -> Self {
        Self {
            kind,
            recent: HashMap::default(),
            twins: Vec::new(),
            runs: Vec::new(),
            next: 1,
            added: Vec::new(),
        }
    }

    /// Takes in what others have written.
    pub(crate) fn catch_up(&mut self, connection: &Connection) -> Result<(), LedgerError> {
        let indexed = self.load_runs(connection)?;
        self.recent.retain(|_, number| *number > indexed);
        self.twins.retain(|(_, number)| *number > indexed);
        self.next = self.next.max(indexed + 1);
        let mut statement = connection.prepare_cached(self.kind.rows_from())?;
        let mut rows = statement.query([self.next])?;
        while let Some(row) = rows.next()? {
            let number: i64 = row.get(0)?;
            self.put(self.kind.hash_of(row)?, number);
            self.next = number + 1;
        }
        let marked: i64 = connection
            .prepare_cached("SELECT coalesce(max(value), 1) FROM mark WHERE name = ?")?
            .query_row([self.kind.mark()], |row| row.get(0))?;
        self.next = self.next.max(marked);
        Ok(())
    }

    /// The number that the next row of this transaction gets.
    pub(crate) fn next_number(&self) -> i64 {
        self.next
    }

    /// Adds the row with the next number.
    pub(crate) fn add(&mut self, hash: i64) {
        self.put(hash, self.next);
        self.added.push((hash, self.next));
        self.next += 1;
    }

    /// The rows that may have an id of this hash, the youngest first. Rows that were removed may be
    /// among them.
    pub(crate) fn candidates(&self, connection: &Connection, hash: i64) -> Result<Vec<i64>, LedgerError> {
        let mut found = Vec::new();
        if let Some(number) = self.recent.get(&hash) {
            found.push(*number);
            found.extend(self.twins.iter().filter(|twin| twin.0 == hash).map(|twin| twin.1));
        }
        for run in self.runs.iter().rev().filter(|run| run.filter.may_hold(hash)) {
            let mut statement =
                connection.prepare_cached("SELECT number FROM run_entry WHERE run = ? AND id_hash = ?")?;
            let mut rows = statement.query([run.number, hash])?;
            while let Some(row) = rows.next()? {
                found.push(row.get(0)?);
            }
        }
        Ok(found)
    }

    pub(crate) fn committed(&mut self) {
        self.added.clear();
    }

    pub(crate) fn rolled_back(&mut self) {
        if let Some((_, first)) = self.added.first() {
            self.next = *first;
        }
        for (hash, number) in self.added.drain(..) {
            if self.recent.get(&hash) == Some(&number) {
                self.recent.remove(&hash);
            }
            self.twins.retain(|twin| *twin != (hash, number));
        }
    }

    /// Rows that are in no run.
    pub(crate) fn recent(&self) -> usize {
        self.recent.len() + self.twins.len()
    }

    /// Writes what is in no run as a run, in a transaction of its own. To be followed by
    /// [`IdIndex::catch_up`].
    pub(crate) fn flush(&self, connection: &Connection) -> Result<(), LedgerError> {
        let mut entries: Vec<(i64, i64)> = self
            .recent
            .iter()
            .map(|(hash, number)| (*hash, *number))
            .chain(self.twins.iter().copied())
            .collect();
        entries.sort_unstable();
        let filter = Filter::of(entries.iter().map(|entry| entry.0));
        connection
            .prepare_cached("INSERT INTO run (kind, last, filter) VALUES (?, ?, ?)")?
            .execute(params![self.kind.code(), self.next - 1, filter.to_bytes()])?;
        let run = connection.last_insert_rowid();
        let mut insert =
            connection.prepare_cached("INSERT INTO run_entry (run, id_hash, number) VALUES (?, ?, ?)")?;
        for (hash, number) in entries {
            insert.execute([run, hash, number])?;
        }
        Ok(())
    }

    fn put(&mut self, hash: i64, number: i64) {
        match self.recent.entry(hash) {
            Entry::Occupied(_) => self.twins.push((hash, number)),
            Entry::Vacant(entry) => {
                entry.insert(number);
            }
        }
    }

    /// Brings the list of runs up to date; the last number that is in one.
    fn load_runs(&mut self, connection: &Connection) -> Result<i64, LedgerError> {
        let mut known: HashMap<i64, Run> = self.runs.drain(..).map(|run| (run.number, run)).collect();
        let mut last = 0;
        let mut statement =
            connection.prepare_cached("SELECT number, last FROM run WHERE kind = ? ORDER BY number")?;
        let mut rows = statement.query([self.kind.code()])?;
        while let Some(row) = rows.next()? {
            let (number, last_of_run): (i64, i64) = (row.get(0)?, row.get(1)?);
            last = last.max(last_of_run);
            let run = match known.remove(&number) {
                Some(run) => run,
                None => Run { number, filter: load_filter(connection, number)? },
            };
            self.runs.push(run);
        }
        Ok(last)
    }
}

fn load_filter(connection: &Connection, run: i64) -> Result<Filter, LedgerError> {
    let bytes: Vec<u8> = connection
        .prepare_cached("SELECT filter FROM run WHERE number = ?")?
        .query_row([run], |row| row.get(0))?;
    Filter::from_bytes(&bytes)
}

/// The same as [`IdIndex::candidates`] for a single question, with nothing in memory.
pub(crate) fn search(
    connection: &Connection,
    kind: Kind,
    model: i64,
    id: &str,
) -> Result<Vec<i64>, LedgerError> {
    let hash = id_hash(model, id);
    let mut statement = connection.prepare_cached(
        "SELECT number FROM run_entry WHERE run IN (SELECT number FROM run WHERE kind = ?) AND id_hash = ?",
    )?;
    let in_runs = statement.query_map([kind.code(), hash], |row| row.get(0))?;
    let mut found = in_runs.collect::<Result<Vec<i64>, _>>()?;
    let indexed: i64 = connection
        .prepare_cached("SELECT coalesce(max(last), 0) FROM run WHERE kind = ?")?
        .query_row([kind.code()], |row| row.get(0))?;
    let mut statement = connection.prepare_cached(kind.rows_from())?;
    let mut rows = statement.query([indexed + 1])?;
    while let Some(row) = rows.next()? {
        if kind.hash_of(row)? == hash {
            found.push(row.get(0)?);
        }
    }
    Ok(found)
}

/// Removes the runs whose rows have all been removed.
pub(crate) fn drop_runs_before(connection: &Connection, kind: Kind, first: i64) -> Result<(), LedgerError> {
    connection.execute(
        "DELETE FROM run_entry WHERE run IN (SELECT number FROM run WHERE kind = ? AND last < ?)",
        [kind.code(), first],
    )?;
    connection.execute("DELETE FROM run WHERE kind = ? AND last < ?", [kind.code(), first])?;
    Ok(())
}
