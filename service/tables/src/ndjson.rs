//! NDJSON into batches: one JSON object per line, each read as a posted record is.

use std::io::{BufRead, BufReader, Read};
use std::path::{Path, PathBuf};

use kilter_model::RecordReader;
use serde_json::{Map, Value};

use crate::error::TableError;
use crate::reader::{ReadOptions, Source, deliver_all};
use crate::rows::{Rows, TableBatch};

/// An NDJSON file being read.
pub(crate) struct NdjsonSource {
    path: PathBuf,
    stream: BufReader<Box<dyn Read + Send>>,
    names: Vec<String>,
    options: ReadOptions,
    /// The first line, which was looked at for its keys.
    ahead: Option<Line>,
    /// Lines and bytes read so far.
    line: u64,
    byte: u64,
}

struct Line {
    number: u64,
    text: String,
}

impl NdjsonSource {
    pub(crate) fn open(
        path: &Path,
        stream: Box<dyn Read + Send>,
        options: ReadOptions,
    ) -> Result<Self, TableError> {
        let stream = BufReader::with_capacity(1 << 18, stream);
        let mut source =
            Self { path: path.to_owned(), stream, names: Vec::new(), options, ahead: None, line: 0, byte: 0 };
        source.ahead = source.read_line()?;
        if source.byte == 0 {
            return Err(TableError::Empty { path: path.to_owned() });
        }
        // Keys of the first object; where it is none, each line will say what is wrong with it.
        if let Some(line) = &source.ahead
            && let Ok(object) = serde_json::from_str::<Map<String, Value>>(&line.text)
        {
            source.names = object.keys().cloned().collect();
        }
        Ok(source)
    }

    /// The next line that is not blank.
    fn read_line(&mut self) -> Result<Option<Line>, TableError> {
        if let Some(line) = self.ahead.take() {
            return Ok(Some(line));
        }
        loop {
            let mut bytes = Vec::new();
            let read = self
                .stream
                .read_until(b'\n', &mut bytes)
                .map_err(|error| TableError::read(&self.path, error))?;
            if read == 0 {
                return Ok(None);
            }
            let start = self.byte;
            self.byte += read as u64;
            self.line += 1;
            let text = String::from_utf8(bytes).map_err(|error| TableError::Encoding {
                path: self.path.clone(),
                position: start + error.utf8_error().valid_up_to() as u64,
            })?;
            let text = text.trim();
            if !text.is_empty() {
                return Ok(Some(Line { number: self.line, text: text.to_owned() }));
            }
        }
    }

    fn batch(&mut self, first_row: u64) -> Result<Option<TableBatch>, TableError> {
        let mut reader = RecordReader::new(&self.options.columns);
        let (mut lines, mut objects) = (Vec::new(), Vec::new());
        while reader.rows() < self.options.batch_rows
            && let Some(line) = self.read_line()?
        {
            reader.push_line(line.text.as_bytes());
            lines.push(line.number);
            if self.options.carry {
                objects.push(line.text);
            }
        }
        if lines.is_empty() {
            return Ok(None);
        }
        let batch = reader.finish();
        if self.options.carry {
            // A line that is no object is carried as one that holds its text, so that what is
            // written is NDJSON again and nothing is lost.
            for cell in batch.bad_cells.iter().filter(|cell| cell.field.is_empty()) {
                let text = std::mem::take(&mut objects[cell.row]);
                objects[cell.row] = serde_json::json!({ "line_text": text }).to_string();
            }
        }
        let rows = if self.options.carry { Rows::Objects(objects) } else { Rows::NotCarried };
        Ok(Some(TableBatch { first_row, batch, lines, rows }))
    }
}

impl Source for NdjsonSource {
    fn column_names(&self) -> &[String] {
        &self.names
    }

    fn run(mut self: Box<Self>, deliver: &mut dyn FnMut(Result<TableBatch, TableError>) -> bool) {
        deliver_all(|first_row| self.batch(first_row), deliver);
    }
}
