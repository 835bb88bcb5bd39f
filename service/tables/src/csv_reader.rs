//! CSV into batches. Every cell is read as text and converted by the one converter that posted
//! records use too, so the same text gives the same bits wherever it comes in.

use std::io::{self, BufRead, BufReader, Read};
use std::path::{Path, PathBuf};

use csv::{ByteRecord, StringRecord};

use crate::error::TableError;
use crate::reader::{ReadOptions, Source, deliver_all, places};
use crate::rows::{Rows, TableBatch, TextCells};

/// Separators that are looked for in the head, the likeliest first.
const SEPARATORS: [u8; 4] = [b',', b';', b'\t', b'|'];
const BYTE_ORDER_MARK: &[u8] = b"\xEF\xBB\xBF";

type Stream = BufReader<Box<dyn Read + Send>>;

/// A CSV file being read.
pub(crate) struct CsvSource {
    path: PathBuf,
    reader: csv::Reader<Stream>,
    names: Vec<String>,
    places: Vec<Option<usize>>,
    options: ReadOptions,
    /// Bytes before the first that the CSV reader saw.
    skipped: u64,
    /// Where lines end in a carriage return and a line feed, the CSV reader sees the line feed as
    /// the beginning of the next record, and its line numbers are one behind.
    lines_behind: u64,
}

impl CsvSource {
    pub(crate) fn open(
        path: &Path,
        stream: Box<dyn Read + Send>,
        options: ReadOptions,
    ) -> Result<Self, TableError> {
        let mut stream = BufReader::with_capacity(1 << 18, stream);
        let start = stream.fill_buf().map_err(|error| unreadable(path, &error))?;
        if start.is_empty() {
            return Err(TableError::Empty { path: path.to_owned() });
        }
        let skipped = if start.starts_with(BYTE_ORDER_MARK) { BYTE_ORDER_MARK.len() } else { 0 };
        let separator = options.separator.unwrap_or_else(|| separator_of(&start[skipped..]));
        let lines_behind = u64::from(ends_with_return(&start[skipped..]));
        stream.consume(skipped);
        let mut reader = csv::ReaderBuilder::new().delimiter(separator).flexible(true).from_reader(stream);
        let head = reader.byte_headers().map_err(|error| csv_error(path, &error))?.clone();
        let names: Vec<String> =
            text_of(path, head, skipped as u64)?.iter().map(|name| name.trim().to_owned()).collect();
        let places = places(path, &options.columns, &names)?;
        Ok(Self {
            path: path.to_owned(),
            reader,
            names,
            places,
            options,
            skipped: skipped as u64,
            lines_behind,
        })
    }

    /// Reads one batch; `None` at the end.
    fn batch(&mut self, first_row: u64) -> Result<Option<TableBatch>, TableError> {
        let mut cells = TextCells::new(&self.options.columns, self.options.batch_rows);
        let (mut lines, mut rows) = (Vec::new(), Vec::new());
        let mut bytes = ByteRecord::new();
        while cells.rows() < self.options.batch_rows {
            if !self.reader.read_byte_record(&mut bytes).map_err(|error| csv_error(&self.path, &error))? {
                break;
            }
            lines.push(bytes.position().map_or(0, csv::Position::line) + self.lines_behind);
            let record = text_of(&self.path, bytes, self.skipped)?;
            if record.len() == self.names.len() {
                cells.push_row(|place| self.places[place].and_then(|place| record.get(place)));
            } else {
                cells.push_bad_row(ragged(&record, self.names.len()));
            }
            if self.options.carry {
                rows.push(record);
                bytes = ByteRecord::new();
            } else {
                bytes = record.into_byte_record();
            }
        }
        if cells.rows() == 0 {
            return Ok(None);
        }
        let rows = if self.options.carry { Rows::Cells(rows) } else { Rows::NotCarried };
        Ok(Some(TableBatch { first_row, batch: cells.finish(), lines, rows }))
    }
}

impl Source for CsvSource {
    fn column_names(&self) -> &[String] {
        &self.names
    }

    fn run(mut self: Box<Self>, deliver: &mut dyn FnMut(Result<TableBatch, TableError>) -> bool) {
        deliver_all(|first_row| self.batch(first_row), deliver);
    }
}

/// What is wrong with a row of too few or too many cells. The cells beyond the head have no column
/// to be kept in, so they are kept here.
fn ragged(record: &StringRecord, needed: usize) -> String {
    let beyond: Vec<&str> = record.iter().skip(needed).collect();
    let kept = if beyond.is_empty() {
        String::new()
    } else {
        format!("; beyond it stands `{}`", beyond.join("`, `"))
    };
    format!("has {} cells, the head has {needed}{kept}", record.len())
}

/// The separator that stands most often in the head.
fn separator_of(start: &[u8]) -> u8 {
    let head = start.split(|byte| *byte == b'\n').next().unwrap_or_default();
    let cells = |separator: u8| head.split(|byte| *byte == separator).count();
    SEPARATORS.into_iter().rev().max_by_key(|separator| cells(*separator)).unwrap_or(b',')
}

/// The record as text; the error names the first byte that is no UTF-8.
fn text_of(path: &Path, record: ByteRecord, skipped: u64) -> Result<StringRecord, TableError> {
    StringRecord::from_byte_record(record).map_err(|error| {
        let fault = error.utf8_error().clone();
        let record = error.into_byte_record();
        // Cells lie one after another with a separator between; quotes before the cell shift the
        // place by a few bytes at most.
        let before: usize = record.iter().take(fault.field()).map(|cell| cell.len() + 1).sum();
        let start = record.position().map_or(0, csv::Position::byte) + skipped;
        TableError::Encoding {
            path: path.to_owned(),
            position: start + (before + fault.valid_up_to()) as u64,
        }
    })
}

fn csv_error(path: &Path, error: &csv::Error) -> TableError {
    match error.kind() {
        csv::ErrorKind::Io(cause) => unreadable(path, cause),
        _ => TableError::malformed(path, "CSV", error),
    }
}

/// A failure to read: of the disk, or of a compressed file that is spoilt or cut short.
fn unreadable(path: &Path, cause: &io::Error) -> TableError {
    match cause.kind() {
        io::ErrorKind::InvalidData | io::ErrorKind::InvalidInput | io::ErrorKind::UnexpectedEof => {
            TableError::malformed(path, "CSV", format!("{cause}; it may be spoilt or cut short"))
        }
        kind => TableError::read(path, kind.into()),
    }
}

/// Whether the first line ends in a carriage return and a line feed.
fn ends_with_return(start: &[u8]) -> bool {
    start.split_inclusive(|byte| *byte == b'\n').next().is_some_and(|line| line.ends_with(b"\r\n"))
}
