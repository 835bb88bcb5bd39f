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

use super::filter::Filter;
use crate::codes::{id_hash, integers_from_bytes, integers_to_bytes};
use crate::error::LedgerError;

/// What an index finds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Kind {
    Record,
    Outcome,
}

impl Kind {
    pub(crate) fn code(self) -> i64 {
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

/// Entries of a block: as many as fit a page of the file.
const ENTRIES_PER_BLOCK: usize = 500;
/// A hash and a number, eight bytes each, little-endian.
const BYTES_PER_ENTRY: usize = 16;

/// A run of sorted hashes on disk.
#[derive(Debug)]
struct Run {
    number: i64,
    first_block: i64,
    /// First hash of each block.
    fences: Vec<i64>,
    filter: Filter,
}

impl Run {
    /// Adds the numbers with a hash to `found`.
    fn search(&self, connection: &Connection, hash: i64, found: &mut Vec<i64>) -> Result<(), LedgerError> {
        search_blocks(connection, self.first_block, &self.fences, hash, found)
    }
}

/// Adds the numbers with a hash to `found`. Equal hashes may go on into further blocks.
fn search_blocks(
    connection: &Connection,
    first_block: i64,
    fences: &[i64],
    hash: i64,
    found: &mut Vec<i64>,
) -> Result<(), LedgerError> {
    let first = fences.partition_point(|fence| *fence < hash).saturating_sub(1);
    let end = fences.partition_point(|fence| *fence <= hash);
    let mut statement = connection.prepare_cached("SELECT entries FROM run_block WHERE number = ?")?;
    for block in first..end {
        let mut rows = statement.query([first_block + block as i64])?;
        let Some(row) = rows.next()? else { continue };
        let (entries, _) =
            row.get_ref(0)?.as_blob().map_err(rusqlite::Error::from)?.as_chunks::<BYTES_PER_ENTRY>();
        let from = entries.partition_point(|entry| first_half(entry) < hash);
        found.extend(entries[from..].iter().take_while(|entry| first_half(entry) == hash).map(second_half));
    }
    Ok(())
}

fn first_half(entry: &[u8; BYTES_PER_ENTRY]) -> i64 {
    let [a, b, c, d, e, f, g, h, ..] = *entry;
    i64::from_le_bytes([a, b, c, d, e, f, g, h])
}

fn second_half(entry: &[u8; BYTES_PER_ENTRY]) -> i64 {
    let [.., a, b, c, d, e, f, g, h] = *entry;
    i64::from_le_bytes([a, b, c, d, e, f, g, h])
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
            run.search(connection, hash, &mut found)?;
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
        let mut insert =
            connection.prepare_cached("INSERT INTO run_block (number, entries) VALUES (?, ?)")?;
        let first_block: i64 =
            connection
                .query_row("SELECT coalesce(max(number), 0) + 1 FROM run_block", [], |row| row.get(0))?;
        let mut fences = Vec::with_capacity(entries.len().div_ceil(ENTRIES_PER_BLOCK));
        for (block, number) in entries.chunks(ENTRIES_PER_BLOCK).zip(first_block..) {
            fences.extend(block.first().map(|entry| entry.0));
            let bytes: Vec<u8> = block
                .iter()
                .flat_map(|entry| [entry.0.to_le_bytes(), entry.1.to_le_bytes()])
                .flatten()
                .collect();
            insert.execute(params![number, bytes])?;
        }
        let filter = Filter::of(entries.iter().map(|entry| entry.0));
        connection
            .prepare_cached(
                "INSERT INTO run (kind, last, first_block, fences, filter) VALUES (?, ?, ?, ?, ?)",
            )?
            .execute(params![
                self.kind.code(),
                self.next - 1,
                first_block,
                integers_to_bytes(&fences),
                filter.to_bytes()
            ])?;
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
                None => load_run(connection, number)?,
            };
            self.runs.push(run);
        }
        Ok(last)
    }
}

fn load_run(connection: &Connection, number: i64) -> Result<Run, LedgerError> {
    let mut statement =
        connection.prepare_cached("SELECT first_block, fences, filter FROM run WHERE number = ?")?;
    let (first_block, fences, filter): (i64, Vec<u8>, Vec<u8>) =
        statement.query_row([number], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?)))?;
    let fences = integers_from_bytes(&fences)?;
    Ok(Run { number, first_block, fences, filter: Filter::from_bytes(&filter)? })
}

/// The same as [`IdIndex::candidates`] for a single question, with nothing in memory.
pub(crate) fn search(
    connection: &Connection,
    kind: Kind,
    model: i64,
    id: &str,
) -> Result<Vec<i64>, LedgerError> {
    let hash = id_hash(model, id);
    let (mut found, mut indexed) = (Vec::new(), 0);
    let mut statement =
        connection.prepare_cached("SELECT first_block, fences, last FROM run WHERE kind = ?")?;
    let mut runs = statement.query([kind.code()])?;
    while let Some(run) = runs.next()? {
        let fences = integers_from_bytes(run.get_ref(1)?.as_blob().map_err(rusqlite::Error::from)?)?;
        search_blocks(connection, run.get(0)?, &fences, hash, &mut found)?;
        indexed = indexed.max(run.get(2)?);
    }
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
    let mut statement = connection
        .prepare_cached("SELECT number, first_block, fences FROM run WHERE kind = ? AND last < ?")?;
    let old = statement
        .query_map([kind.code(), first], |row| Ok((row.get(0)?, row.get(1)?, row.get(2)?)))?
        .collect::<Result<Vec<(i64, i64, Vec<u8>)>, _>>()?;
    for (run, first_block, fences) in old {
        let end = first_block + integers_from_bytes(&fences)?.len() as i64;
        connection.execute("DELETE FROM run_block WHERE number >= ? AND number < ?", [first_block, end])?;
        connection.execute("DELETE FROM run WHERE number = ?", [run])?;
    }
    Ok(())
}
