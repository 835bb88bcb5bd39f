//! The rows of a fit: read once and kept, or read again for each pass.

use std::collections::BinaryHeap;
use std::ops::ControlFlow;

use kilter_model::{Batch, Column, MISSING_TIME};

use crate::chunk::Chunk;
use crate::error::FitError;
use crate::plan::ColumnPlaces;
use crate::reader::Reader;
use crate::reduce::{BinaryCounter, Merge};
use crate::resolve::Relabel;
use crate::source::RowSource;
use crate::split::draw;

/// How many times are kept to find the one that splits the rows.
const TIMES_KEPT: usize = 1_000_000;

type SourceError = Box<dyn std::error::Error + Send + Sync>;

/// A source of rows whose kind of error does not matter.
pub(crate) trait Rows {
    fn pass(&mut self, visit: &mut dyn FnMut(Batch) -> ControlFlow<()>) -> Result<(), SourceError>;
}

impl<S: RowSource> Rows for S {
    fn pass(&mut self, visit: &mut dyn FnMut(Batch) -> ControlFlow<()>) -> Result<(), SourceError> {
        RowSource::pass(self, visit).map_err(Into::into)
    }
}

/// Reads all rows once and hands on chunks.
pub(crate) fn read_chunks(
    rows: &mut dyn Rows,
    reader: &mut Reader,
    visit: &mut dyn FnMut(Chunk) -> Result<(), FitError>,
) -> Result<(), FitError> {
    reader.begin();
    let mut outcome = Ok(());
    let mut take = |chunk: Chunk, outcome: &mut Result<(), FitError>| {
        *outcome = visit(chunk);
        if outcome.is_err() { ControlFlow::Break(()) } else { ControlFlow::Continue(()) }
    };
    rows.pass(&mut |batch| match reader.read(&batch, &mut |chunk| take(chunk, &mut outcome)) {
        Ok(flow) => flow,
        Err(error) => {
            outcome = Err(error);
            ControlFlow::Break(())
        }
    })
    .map_err(FitError::Read)?;
    outcome?;
    reader.finish().map_or(Ok(()), visit)
}

/// The coded rows of a fit.
pub(crate) struct Table<'a> {
    storage: Storage<'a>,
    threads: usize,
    rows: u64,
}

/// Where the rows are.
enum Storage<'a> {
    /// In memory.
    Kept(Vec<Chunk>),
    /// At their source, to be read again.
    Source { rows: &'a mut dyn Rows, reader: Box<Reader>, relabel: Relabel },
}

impl<'a> Table<'a> {
    /// A table of rows in memory.
    pub(crate) fn in_memory(chunks: Vec<Chunk>, threads: usize) -> Self {
        let rows = chunks.iter().map(|chunk| chunk.rows() as u64).sum();
        Self { storage: Storage::Kept(chunks), threads: threads.max(1), rows }
    }

    /// A table of rows that are read again for each pass; the first pass found `count` of them.
    pub(crate) fn at_source(
        rows: &'a mut dyn Rows,
        reader: Reader,
        relabel: Relabel,
        threads: usize,
        count: u64,
    ) -> Self {
        let storage = Storage::Source { rows, reader: Box::new(reader), relabel };
        Self { storage, threads: threads.max(1), rows: count }
    }

    /// Number of rows.
    pub(crate) fn rows(&self) -> u64 {
        self.rows
    }

    /// Number of threads that sum.
    pub(crate) fn threads(&self) -> usize {
        self.threads
    }

    /// Sums over all rows in one pass. Each chunk is summed by one thread, row by row; the sums of
    /// chunks are merged in a fixed order.
    pub(crate) fn reduce<T: Merge + Send>(
        &mut self,
        sum: impl Fn(&Chunk) -> T + Sync,
    ) -> Result<Option<T>, FitError> {
        let mut counter = BinaryCounter::new();
        let threads = self.threads;
        let (rows, reader, relabel) = match &mut self.storage {
            Storage::Kept(chunks) => {
                for window in chunks.chunks(threads) {
                    sum_window(window, &sum, &mut counter);
                }
                return Ok(counter.finish());
            }
            Storage::Source { rows, reader, relabel } => (rows, reader, relabel),
        };
        let mut now = 0;
        let mut window = Vec::with_capacity(threads);
        read_chunks(*rows, reader, &mut |mut chunk| {
            relabel.apply(&mut chunk);
            now += chunk.rows() as u64;
            window.push(chunk);
            if window.len() == threads {
                sum_window(&window, &sum, &mut counter);
                window.clear();
            }
            Ok(())
        })?;
        sum_window(&window, &sum, &mut counter);
        if now == self.rows {
            Ok(counter.finish())
        } else {
            Err(FitError::Changed { before: self.rows, now })
        }
    }
}

/// Sums the chunks of a window, each on its own thread.
pub(crate) fn sum_window<T: Merge + Send>(
    window: &[Chunk],
    sum: &(impl Fn(&Chunk) -> T + Sync),
    counter: &mut BinaryCounter<T>,
) {
    let Some((first, others)) = window.split_first() else { return };
    std::thread::scope(|scope| {
        let others: Vec<_> = others.iter().map(|chunk| scope.spawn(move || sum(chunk))).collect();
        counter.push(sum(first));
        for other in others {
            match other.join() {
                Ok(sum) => counter.push(sum),
                Err(panic) => std::panic::resume_unwind(panic),
            }
        }
    });
}

/// The last time that belongs to the fit when the latest share of the rows is kept out: the
/// smallest time such that at most this share of the rows that have a time is later. Rows of the
/// same time stay together.
///
/// Up to [`TIMES_KEPT`] rows this is exact; of more rows a random sample of that size decides.
pub(crate) fn last_fitted_time(
    rows: &mut dyn Rows,
    places: &ColumnPlaces,
    latest: f64,
) -> Result<i64, FitError> {
    let mut sample = BinaryHeap::new();
    let mut number = 0;
    rows.pass(&mut |batch| {
        let times = places.time.and_then(|place| batch.columns.get(place)).and_then(Column::times);
        for &time in times.unwrap_or_default() {
            if time != MISSING_TIME {
                sample.push((draw(number, 0), time));
                if sample.len() > TIMES_KEPT {
                    sample.pop();
                }
            }
            number += 1;
        }
        ControlFlow::Continue(())
    })
    .map_err(FitError::Read)?;
    let mut times: Vec<i64> = sample.into_iter().map(|(_, time)| time).collect();
    times.sort_unstable();
    let later = (times.len() as f64 * latest).floor() as usize;
    Ok(times.len().checked_sub(1 + later).map_or(i64::MAX, |index| times[index]))
}
