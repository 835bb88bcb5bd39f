//! Opening tables and reading them batch by batch, one batch ahead on a thread of its own.

use std::fs::File;
use std::io::{BufReader, Read};
use std::path::{Path, PathBuf};
use std::sync::mpsc::{Receiver, sync_channel};

use kilter_model::{ColumnSpec, near_miss};

use crate::columnar::ColumnarSource;
use crate::csv_reader::CsvSource;
use crate::error::TableError;
use crate::format::Format;
use crate::ndjson::NdjsonSource;
use crate::rows::TableBatch;

/// How a table is read.
#[derive(Debug, Clone)]
pub struct ReadOptions {
    /// The columns to deliver, typed.
    pub columns: Vec<ColumnSpec>,
    /// Whether the rows are carried along as they came, to be written again.
    pub carry: bool,
    /// Rows per batch at most.
    pub batch_rows: usize,
    /// What stands between the cells of a CSV file: found out from its head where not given.
    pub separator: Option<u8>,
}

impl Default for ReadOptions {
    fn default() -> Self {
        Self { columns: Vec::new(), carry: false, batch_rows: 50_000, separator: None }
    }
}

/// Something that delivers batches until there are no more.
pub(crate) trait Source: Send {
    /// Names of the columns of the table.
    fn column_names(&self) -> &[String];
    /// Hands over batches until `deliver` says that nobody wants more.
    fn run(self: Box<Self>, deliver: &mut dyn FnMut(Result<TableBatch, TableError>) -> bool);
}

/// Delivers batch after batch until there are no more, one fails, or nobody wants more. `batch`
/// reads the batch that begins with a row.
pub(crate) fn deliver_all(
    mut batch: impl FnMut(u64) -> Result<Option<TableBatch>, TableError>,
    deliver: &mut dyn FnMut(Result<TableBatch, TableError>) -> bool,
) {
    let mut first_row = 0;
    while let Some(read) = batch(first_row).transpose() {
        let failed = read.is_err();
        first_row += read.as_ref().map_or(0, |read| read.batch.rows as u64);
        if !deliver(read) || failed {
            return;
        }
    }
}

/// A table being read: an iterator over its batches.
#[derive(Debug)]
pub struct TableReader {
    path: PathBuf,
    column_names: Vec<String>,
    batches: Receiver<Result<TableBatch, TableError>>,
}

impl TableReader {
    /// Opens a table and checks its columns before the first row.
    ///
    /// # Errors
    /// Where the file cannot be read, is empty, is not what its name says, or lacks a required
    /// column.
    pub fn open(path: &Path, options: ReadOptions) -> Result<Self, TableError> {
        let format = Format::of_path(path)?;
        let mut file = File::open(path).map_err(|error| TableError::read(path, error))?;
        let about = file.metadata().map_err(|error| TableError::read(path, error))?;
        if about.is_dir() {
            return Err(TableError::read(path, std::io::ErrorKind::IsADirectory.into()));
        }
        let mut first = [0; 1];
        if about.is_file() && file.read(&mut first).map_err(|error| TableError::read(path, error))? == 0 {
            return Err(TableError::Empty { path: path.to_owned() });
        }
        match format {
            Format::Parquet | Format::Arrow => {
                Self::start(path, Box::new(ColumnarSource::open(path, format, options)?))
            }
            Format::Csv | Format::Ndjson | Format::CsvGz | Format::CsvZst => {
                let file = File::open(path).map_err(|error| TableError::read(path, error))?;
                Self::of_text(path, Box::new(file), format, options)
            }
        }
    }

    /// Reads a table from a stream.
    ///
    /// # Errors
    /// As [`TableReader::open`]; Parquet and Arrow cannot be read from a stream.
    pub fn from_stream(
        stream: Box<dyn Read + Send>,
        format: Format,
        options: ReadOptions,
    ) -> Result<Self, TableError> {
        Self::of_text(Path::new("standard input"), stream, format, options)
    }

    /// Names of the table's columns; of an NDJSON file those of its first object.
    pub fn column_names(&self) -> &[String] {
        &self.column_names
    }

    /// The file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    fn of_text(
        path: &Path,
        stream: Box<dyn Read + Send>,
        format: Format,
        options: ReadOptions,
    ) -> Result<Self, TableError> {
        let stream: Box<dyn Read + Send> = match format {
            Format::CsvGz => Box::new(flate2::read::MultiGzDecoder::new(BufReader::new(stream))),
            Format::CsvZst => Box::new(
                zstd::Decoder::new(stream).map_err(|error| TableError::malformed(path, "zstd", error))?,
            ),
            _ => stream,
        };
        let source: Box<dyn Source> = match format {
            Format::Ndjson => Box::new(NdjsonSource::open(path, stream, options)?),
            Format::Csv | Format::CsvGz | Format::CsvZst => Box::new(CsvSource::open(path, stream, options)?),
            Format::Parquet | Format::Arrow => {
                let reason = "this format needs a file, not a stream";
                return Err(TableError::malformed(path, format.name(), reason));
            }
        };
        Self::start(path, source)
    }

    fn start(path: &Path, source: Box<dyn Source>) -> Result<Self, TableError> {
        let column_names = source.column_names().to_vec();
        let (sender, batches) = sync_channel(1);
        std::thread::Builder::new()
            .name("table-reader".into())
            .spawn(move || source.run(&mut |batch| sender.send(batch).is_ok()))
            .map_err(|error| TableError::read(path, error))?;
        Ok(Self { path: path.to_owned(), column_names, batches })
    }
}

impl Iterator for TableReader {
    type Item = Result<TableBatch, TableError>;

    fn next(&mut self) -> Option<Self::Item> {
        self.batches.recv().ok()
    }
}

/// For each column asked for its place among those present.
pub(crate) fn places(
    path: &Path,
    specs: &[ColumnSpec],
    present: &[String],
) -> Result<Vec<Option<usize>>, TableError> {
    for (place, name) in present.iter().enumerate() {
        if present[..place].contains(name) {
            return Err(TableError::DuplicateColumn { path: path.to_owned(), column: name.clone() });
        }
    }
    specs
        .iter()
        .map(|spec| {
            let place = present.iter().position(|name| *name == spec.name);
            if place.is_none() && spec.required {
                return Err(TableError::MissingColumn {
                    path: path.to_owned(),
                    column: spec.name.clone(),
                    near_miss: near_miss(&spec.name, present).map(str::to_owned),
                    present: present.to_vec(),
                });
            }
            Ok(place)
        })
        .collect()
}
