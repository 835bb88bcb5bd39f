//! Tables out: rows as they came, with columns appended.

use std::fs::{self, File};
use std::io::{self, BufWriter, Write};
use std::path::{Path, PathBuf};

use polars::io::ipc::BatchedWriter as ArrowBatches;
use polars::io::parquet::write::BatchedWriter as ParquetBatches;
use polars::prelude::{
    Column as PolarsColumn, CompatLevel, DataFrame, IntoColumn, IpcWriter, NamedFrom, ParquetWriter,
    SchemaExt, SerWriter, Series,
};
use polars_arrow::io::ipc::write::default_ipc_fields;
use serde_json::Value;

use crate::carried::{cells_of, key_already_there, line_of};
use crate::csv_writer::{CsvStream, CsvWriter, csv_writer, end};
use crate::error::TableError;
use crate::format::Format;
use crate::reader::TableReader;
use crate::rows::{Rows, TableBatch};

/// The kind of an appended column.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum AppendedKind {
    /// Numbers.
    Number,
    /// Texts.
    Text,
    /// Whole numbers.
    Count,
}

/// Values of an appended column, one for each written row.
#[derive(Debug, Clone, PartialEq)]
pub enum Appended {
    /// Numbers, written so that they read back bit for bit.
    Number(Vec<f64>),
    /// Texts.
    Text(Vec<String>),
    /// Whole numbers.
    Count(Vec<u64>),
}

impl Appended {
    pub(crate) fn text(&self, row: usize) -> String {
        match self {
            Self::Number(values) => values[row].to_string(),
            Self::Text(values) => values[row].clone(),
            Self::Count(values) => values[row].to_string(),
        }
    }

    pub(crate) fn json(&self, row: usize) -> Value {
        match self {
            Self::Number(values) => values[row].into(),
            Self::Text(values) => values[row].as_str().into(),
            Self::Count(values) => values[row].into(),
        }
    }

    fn series(&self, name: &str) -> Series {
        match self {
            Self::Number(values) => Series::new(name.into(), values.as_slice()),
            Self::Text(values) => Series::new(name.into(), values.as_slice()),
            Self::Count(values) => Series::new(name.into(), values.as_slice()),
        }
    }

    /// An empty column of a kind, for the schema of a table without rows.
    fn empty(kind: AppendedKind) -> Self {
        match kind {
            AppendedKind::Number => Self::Number(Vec::new()),
            AppendedKind::Text => Self::Text(Vec::new()),
            AppendedKind::Count => Self::Count(Vec::new()),
        }
    }
}

/// A table being written.
///
/// A file is written aside and appears under its name, whole, when [`TableWriter::finish`] is
/// called; without that nothing is left.
///
/// In its own format a table keeps its rows as they came: the texts of CSV cells, the objects of
/// NDJSON lines with keys added at their end, the typed columns of Parquet and Arrow. Into another
/// format the cells of CSV and the scalar values of NDJSON go as text (its columns are the keys of
/// the first object; other values as their JSON), typed columns by their natural text.
pub struct TableWriter {
    path: PathBuf,
    /// The file as it is written aside; `None` for a stream.
    aside: Option<Aside>,
    /// The table whose rows are written, for messages.
    like: PathBuf,
    names: Vec<String>,
    appended: Vec<(String, AppendedKind)>,
    sink: Sink,
}

impl std::fmt::Debug for TableWriter {
    fn fmt(&self, f: &mut std::fmt::Formatter) -> std::fmt::Result {
        f.debug_struct("TableWriter").field("path", &self.path).finish_non_exhaustive()
    }
}

/// Where the rows go.
enum Sink {
    Csv(Box<CsvWriter>),
    Ndjson(BufWriter<Box<dyn Write + Send>>),
    /// Opened with the first batch, whose columns are its schema.
    NotOpened(Format, File),
    Parquet(Box<ParquetBatches<File>>),
    Arrow(Box<ArrowBatches<File>>),
}

/// A file written aside; removed where it never gets its name.
struct Aside {
    path: PathBuf,
    file: File,
    renamed: bool,
}

impl Drop for Aside {
    fn drop(&mut self) {
        if !self.renamed {
            // What is left aside is of no use, and a failure to remove it of no consequence.
            let _ = fs::remove_file(&self.path);
        }
    }
}

impl TableWriter {
    /// Begins a table like another one, with columns appended; the extension gives the format.
    ///
    /// # Errors
    /// Where the file cannot be made, or an appended column is there already.
    pub fn create(
        path: &Path,
        like: &TableReader,
        appended: &[(&str, AppendedKind)],
    ) -> Result<Self, TableError> {
        if let Some((name, _)) =
            appended.iter().find(|(name, _)| like.column_names().iter().any(|n| n == name))
        {
            return Err(TableError::NameClash { path: like.path().to_owned(), column: (*name).to_owned() });
        }
        Self::open_file(path, like.path(), like.column_names().to_vec(), appended)
    }

    /// Begins a table that has only new columns.
    ///
    /// # Errors
    /// Where the file cannot be made.
    pub fn create_new(path: &Path, columns: &[(&str, AppendedKind)]) -> Result<Self, TableError> {
        Self::open_file(path, path, Vec::new(), columns)
    }

    /// Begins a table on a stream: CSV or NDJSON.
    ///
    /// # Errors
    /// Where the stream fails, an appended column is there already, or the format needs a file.
    pub fn to_stream(
        stream: Box<dyn Write + Send>,
        format: Format,
        like: &TableReader,
        appended: &[(&str, AppendedKind)],
    ) -> Result<Self, TableError> {
        if let Some((name, _)) =
            appended.iter().find(|(name, _)| like.column_names().iter().any(|n| n == name))
        {
            return Err(TableError::NameClash { path: like.path().to_owned(), column: (*name).to_owned() });
        }
        let path = Path::new("standard output");
        let names = like.column_names().to_vec();
        let sink = text_sink(path, stream, format, &names, appended)?.ok_or_else(|| TableError::Write {
            path: path.to_owned(),
            reason: format!("{} needs a file, not a stream", format.name()),
        })?;
        Ok(Self {
            path: path.to_owned(),
            aside: None,
            like: like.path().to_owned(),
            names,
            appended: owned(appended),
            sink,
        })
    }

    fn open_file(
        path: &Path,
        like: &Path,
        names: Vec<String>,
        appended: &[(&str, AppendedKind)],
    ) -> Result<Self, TableError> {
        let format = Format::of_path(path)?;
        let failed = |error| TableError::write(path, error);
        let aside = aside_of(path);
        let file = File::create(&aside).map_err(failed)?;
        let aside = Aside { path: aside, file: file.try_clone().map_err(failed)?, renamed: false };
        let stream = Box::new(file.try_clone().map_err(failed)?);
        let sink = match text_sink(path, stream, format, &names, appended)? {
            Some(sink) => sink,
            None => Sink::NotOpened(format, file),
        };
        Ok(Self {
            path: path.to_owned(),
            aside: Some(aside),
            like: like.to_owned(),
            names,
            appended: owned(appended),
            sink,
        })
    }

    /// Writes the given rows of a batch, ascending, with one value per row of each appended column.
    ///
    /// # Errors
    /// Where the disk or stream fails.
    pub fn write(
        &mut self,
        batch: &TableBatch,
        rows: &[usize],
        appended: &[Appended],
    ) -> Result<(), TableError> {
        match &mut self.sink {
            Sink::Csv(writer) => {
                for (place, &row) in rows.iter().enumerate() {
                    let mut record = cells_of(&batch.rows, &self.names, row);
                    record.extend(appended.iter().map(|column| column.text(place)));
                    writer.write_record(&record).map_err(|error| csv_failed(&self.path, &error))?;
                }
                Ok(())
            }
            Sink::Ndjson(stream) => {
                for (place, &row) in rows.iter().enumerate() {
                    if let Some(column) = key_already_there(&batch.rows, row, &self.appended) {
                        return Err(TableError::NameClash { path: self.like.clone(), column });
                    }
                    let line = line_of(&batch.rows, &self.names, row, &self.appended, appended, place);
                    writeln!(stream, "{line}").map_err(|error| TableError::write(&self.path, error))?;
                }
                Ok(())
            }
            Sink::NotOpened(..) | Sink::Parquet(_) | Sink::Arrow(_) => {
                if rows.is_empty() {
                    return Ok(());
                }
                let frame = self.frame(&batch.rows, rows, appended)?;
                self.write_frame(frame)
            }
        }
    }

    /// Writes rows that have only the appended columns.
    ///
    /// # Errors
    /// Where the disk or stream fails.
    pub fn write_new(&mut self, rows: usize, columns: &[Appended]) -> Result<(), TableError> {
        let batch = TableBatch {
            first_row: 0,
            batch: kilter_model::Batch::default(),
            lines: Vec::new(),
            rows: Rows::NotCarried,
        };
        let all: Vec<usize> = (0..rows).collect();
        self.write(&batch, &all, columns)
    }

    /// Ends the table: everything is on disk, and a file appears under its name.
    ///
    /// # Errors
    /// Where the disk or stream fails; no file appears then.
    pub fn finish(mut self) -> Result<(), TableError> {
        if matches!(self.sink, Sink::NotOpened(..)) {
            let empty: Vec<Appended> = self.appended.iter().map(|(_, kind)| Appended::empty(*kind)).collect();
            let frame = self.frame(&Rows::NotCarried, &[], &empty)?;
            self.write_frame(frame)?;
        }
        let failed = |error| TableError::write(&self.path, error);
        match self.sink {
            Sink::Csv(writer) => end(*writer).map_err(failed)?,
            Sink::Ndjson(mut stream) => stream.flush().map_err(failed)?,
            Sink::Parquet(writer) => {
                writer.finish().map_err(|error| polars_failed(&self.path, &error))?;
            }
            Sink::Arrow(mut writer) => writer.finish().map_err(|error| polars_failed(&self.path, &error))?,
            Sink::NotOpened(..) => {}
        }
        if let Some(mut aside) = self.aside {
            let placed = aside.file.sync_all().and_then(|()| fs::rename(&aside.path, &self.path));
            placed.map_err(|error| TableError::write(&self.path, error))?;
            aside.renamed = true;
            let folder = self.path.parent().filter(|folder| !folder.as_os_str().is_empty());
            File::open(folder.unwrap_or(Path::new(".")))
                .and_then(|folder| folder.sync_all())
                .map_err(|error| TableError::write(&self.path, error))?;
        }
        Ok(())
    }

    /// Rows as a frame, appended columns last.
    fn frame(&self, from: &Rows, rows: &[usize], appended: &[Appended]) -> Result<DataFrame, TableError> {
        let failed = |error| polars_failed(&self.path, &error);
        let mut columns: Vec<PolarsColumn> = match from {
            Rows::Frame(frame) => {
                let places: Vec<polars::prelude::IdxSize> =
                    rows.iter().map(|&row| row as polars::prelude::IdxSize).collect();
                let places = polars::prelude::IdxCa::from_vec("".into(), places);
                frame.take(&places).map_err(failed)?.columns().to_vec()
            }
            other => {
                let cells: Vec<Vec<String>> =
                    rows.iter().map(|&row| cells_of(other, &self.names, row)).collect();
                let column = |(place, name): (usize, &String)| {
                    let values: Vec<Option<&str>> = cells
                        .iter()
                        .map(|record| record.get(place).map(String::as_str).filter(|cell| !cell.is_empty()))
                        .collect();
                    Series::new(name.as_str().into(), values).into_column()
                };
                self.names.iter().enumerate().map(column).collect()
            }
        };
        let named = self.appended.iter().zip(appended);
        columns.extend(named.map(|((name, _), values)| values.series(name).into_column()));
        DataFrame::new(rows.len(), columns).map_err(failed)
    }

    fn write_frame(&mut self, mut frame: DataFrame) -> Result<(), TableError> {
        // The writers need all columns of a frame in the same pieces.
        frame.rechunk_mut_par();
        if let Sink::NotOpened(format, file) = &self.sink {
            let file = file.try_clone().map_err(|error| TableError::write(&self.path, error))?;
            let opened = match format {
                Format::Arrow => {
                    let schema = frame.schema().to_arrow(CompatLevel::newest());
                    let fields = default_ipc_fields(schema.iter_values());
                    IpcWriter::new(file).batched(frame.schema(), fields).map(|w| Sink::Arrow(Box::new(w)))
                }
                _ => ParquetWriter::new(file).batched(frame.schema()).map(|w| Sink::Parquet(Box::new(w))),
            };
            self.sink = opened.map_err(|error| polars_failed(&self.path, &error))?;
        }
        let written = match &mut self.sink {
            Sink::Parquet(writer) => writer.write_batch(&frame),
            Sink::Arrow(writer) => writer.write_batch(&frame),
            Sink::Csv(_) | Sink::Ndjson(_) | Sink::NotOpened(..) => Ok(()),
        };
        written.map_err(|error| polars_failed(&self.path, &error))
    }
}

fn owned(columns: &[(&str, AppendedKind)]) -> Vec<(String, AppendedKind)> {
    columns.iter().map(|(name, kind)| ((*name).to_owned(), *kind)).collect()
}

/// The sink of a text format; `None` for the others.
fn text_sink(
    path: &Path,
    stream: Box<dyn Write + Send>,
    format: Format,
    names: &[String],
    appended: &[(&str, AppendedKind)],
) -> Result<Option<Sink>, TableError> {
    let failed = |error| TableError::write(path, error);
    let stream = match format {
        Format::Csv => CsvStream::Plain(stream),
        Format::CsvGz => {
            CsvStream::Gzip(flate2::write::GzEncoder::new(stream, flate2::Compression::default()))
        }
        Format::CsvZst => CsvStream::Zstd(zstd::Encoder::new(stream, 0).map_err(failed)?),
        Format::Ndjson => return Ok(Some(Sink::Ndjson(BufWriter::with_capacity(1 << 18, stream)))),
        Format::Parquet | Format::Arrow => return Ok(None),
    };
    let head: Vec<String> =
        names.iter().cloned().chain(appended.iter().map(|(name, _)| (*name).to_owned())).collect();
    Ok(Some(Sink::Csv(Box::new(csv_writer(stream, &head).map_err(failed)?))))
}

/// A hidden name beside a file, for this process.
fn aside_of(path: &Path) -> PathBuf {
    let name = path.file_name().unwrap_or_default().to_string_lossy();
    path.with_file_name(format!(".{name}.{}.part", std::process::id()))
}

fn polars_failed(path: &Path, error: &polars::prelude::PolarsError) -> TableError {
    TableError::Write { path: path.to_owned(), reason: error.to_string() }
}

/// An error of the CSV writer; that of a closed pipe stays one.
fn csv_failed(path: &Path, error: &csv::Error) -> TableError {
    match error.kind() {
        csv::ErrorKind::Io(cause) => TableError::write(path, io::Error::from(cause.kind())),
        _ => TableError::Write { path: path.to_owned(), reason: error.to_string() },
    }
}
