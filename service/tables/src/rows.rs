//! Batches as a reader delivers them: typed columns, and the original rows.

use std::sync::Arc;

use kilter_model::cells::{parse_flag, parse_number, parse_time};
use kilter_model::{
    BadCell, Batch, CellKind, Column, ColumnSpec, MISSING_CODE, MISSING_FLAG, MISSING_TIME,
    MOST_SHARED_TEXTS, TextColumn,
};
use polars::prelude::DataFrame;

/// Rows of a table: the columns asked for, typed, and the rows as they came.
#[derive(Debug, Clone)]
pub struct TableBatch {
    /// Number of the first row in its table, counted from 0.
    pub first_row: u64,
    /// The typed columns, in the order asked for.
    pub batch: Batch,
    /// Line of each row in the file; empty where rows have no lines.
    pub(crate) lines: Vec<u64>,
    pub(crate) rows: Rows,
}

/// Rows as they came.
#[derive(Debug, Clone)]
pub(crate) enum Rows {
    /// They were not asked for.
    NotCarried,
    /// Cells of text, under the names of the head. A row with too few or too many cells has what
    /// it has.
    Cells(Vec<csv::StringRecord>),
    /// JSON objects, one text each.
    Objects(Vec<String>),
    /// Typed columns.
    Frame(Arc<DataFrame>),
}

impl TableBatch {
    /// Where a row stands, for people: its line in a CSV or NDJSON file, the head counted; its
    /// number, counted from 1, elsewhere.
    pub fn line(&self, row: usize) -> u64 {
        self.lines.get(row).copied().unwrap_or(self.first_row + row as u64 + 1)
    }
}

/// Collects cells of text into typed columns.
#[derive(Debug)]
pub(crate) struct TextCells {
    specs: Vec<ColumnSpec>,
    columns: Vec<Column>,
    codes: Vec<std::collections::HashMap<String, u32>>,
    bad_cells: Vec<BadCell>,
    rows: usize,
}

impl TextCells {
    pub(crate) fn new(specs: &[ColumnSpec], rows: usize) -> Self {
        let column = |spec: &ColumnSpec| match spec.kind {
            CellKind::Number => Column::Number(Vec::with_capacity(rows)),
            CellKind::Text => {
                Column::Text(TextColumn { codes: Vec::with_capacity(rows), dictionary: Vec::new() })
            }
            CellKind::Flag => Column::Flag(Vec::with_capacity(rows)),
            CellKind::Time => Column::Time(Vec::with_capacity(rows)),
        };
        Self {
            specs: specs.to_vec(),
            columns: specs.iter().map(column).collect(),
            codes: vec![std::collections::HashMap::new(); specs.len()],
            bad_cells: Vec::new(),
            rows: 0,
        }
    }

    pub(crate) fn rows(&self) -> usize {
        self.rows
    }

    /// Adds a row; `cell` gives the text of each column, `None` where the table has no such column.
    pub(crate) fn push_row<'a>(&mut self, cell: impl Fn(usize) -> Option<&'a str>) {
        for place in 0..self.specs.len() {
            self.push_cell(place, cell(place).unwrap_or_default());
        }
        self.rows += 1;
    }

    /// Adds a row that cannot be read.
    pub(crate) fn push_bad_row(&mut self, reason: String) {
        self.bad_cells.push(BadCell { row: self.rows, field: String::new(), reason });
        self.push_row(|_| None);
    }

    fn push_cell(&mut self, place: usize, text: &str) {
        let wrong = match &mut self.columns[place] {
            Column::Number(values) => put(values, parse_number(text), f64::NAN, |value| value),
            Column::Flag(flags) => put(flags, parse_flag(text), MISSING_FLAG, u8::from),
            Column::Time(times) => put(times, parse_time(text), MISSING_TIME, |time| time),
            Column::Text(texts) => {
                push_text(texts, &mut self.codes[place], text);
                None
            }
        };
        if let Some(reason) = wrong {
            let field = self.specs[place].name.clone();
            self.bad_cells.push(BadCell { row: self.rows, field, reason });
        }
    }

    pub(crate) fn finish(self) -> Batch {
        Batch { rows: self.rows, columns: self.columns, bad_cells: self.bad_cells }
    }
}

/// Puts a parsed cell into a column; gives the reason where it could not be parsed.
fn put<T, U>(
    column: &mut Vec<U>,
    parsed: Result<Option<T>, String>,
    missing: U,
    value: impl Fn(T) -> U,
) -> Option<String> {
    match parsed {
        Ok(cell) => {
            column.push(cell.map_or(missing, value));
            None
        }
        Err(reason) => {
            column.push(missing);
            Some(reason)
        }
    }
}

/// Adds a text to a column; an empty one is missing.
pub(crate) fn push_text(
    texts: &mut TextColumn,
    codes: &mut std::collections::HashMap<String, u32>,
    text: &str,
) {
    if text.is_empty() {
        texts.codes.push(MISSING_CODE);
        return;
    }
    let code = codes.get(text).copied().unwrap_or_else(|| {
        let code = texts.dictionary.len() as u32;
        texts.dictionary.push(text.to_owned());
        if texts.dictionary.len() <= MOST_SHARED_TEXTS {
            codes.insert(text.to_owned(), code);
        }
        code
    });
    texts.codes.push(code);
}
