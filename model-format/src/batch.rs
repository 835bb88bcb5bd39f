//! Column batches: the one shape that records take between whatever they came in (JSON, CSV,
//! Parquet) and everything that computes with them.
//!
//! A batch holds one typed buffer per requested column. Cells that could not be read as what was
//! asked for are listed beside the columns, as data: a bad cell never fails its neighbours.

/// What a column is read as.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum CellKind {
    /// Finite numbers.
    Number,
    /// Text, kept as codes into a dictionary.
    Text,
    /// True or false.
    Flag,
    /// Instants: RFC 3339, or a date, which means its midnight in UTC.
    Time,
}

/// A column that a reader is asked for.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ColumnSpec {
    /// Name of the column.
    pub name: String,
    /// What its cells are read as.
    pub kind: CellKind,
    /// Whether a table without this column is an error. An absent column that is not required
    /// reads as missing in every row.
    pub required: bool,
}

/// How many texts of a column are looked up before a new one is stored. Levels are few; ids are
/// all different, and to look for them would cost more than it saves.
pub const MOST_SHARED_TEXTS: usize = 1024;
/// Code of a missing cell in a [`TextColumn`].
pub const MISSING_CODE: u32 = u32::MAX;
/// A missing instant in a column of times.
pub const MISSING_TIME: i64 = i64::MIN;
/// A missing cell in a column of flags; 0 is false and 1 is true.
pub const MISSING_FLAG: u8 = 2;

/// Text cells as codes into the batch's own dictionary.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct TextColumn {
    /// One code per row: an index into `dictionary`, or [`MISSING_CODE`].
    pub codes: Vec<u32>,
    /// The texts of this batch in order of first appearance; the first [`MOST_SHARED_TEXTS`] are
    /// distinct, later ones may come again.
    pub dictionary: Vec<String>,
}

impl TextColumn {
    /// The text of a row, `None` where it is missing.
    pub fn get(&self, row: usize) -> Option<&str> {
        match self.codes[row] {
            MISSING_CODE => None,
            code => Some(&self.dictionary[code as usize]),
        }
    }
}

/// One typed buffer.
#[derive(Debug, Clone, PartialEq)]
pub enum Column {
    /// Numbers; NaN where missing or bad.
    Number(Vec<f64>),
    /// Texts.
    Text(TextColumn),
    /// Flags: 0, 1 or [`MISSING_FLAG`].
    Flag(Vec<u8>),
    /// Microseconds since 1970-01-01T00:00:00Z, or [`MISSING_TIME`].
    Time(Vec<i64>),
}

impl Column {
    /// The numbers of a number column; `None` for any other kind.
    pub fn numbers(&self) -> Option<&[f64]> {
        if let Self::Number(values) = self { Some(values) } else { None }
    }

    /// The texts of a text column; `None` for any other kind.
    pub fn texts(&self) -> Option<&TextColumn> {
        if let Self::Text(texts) = self { Some(texts) } else { None }
    }

    /// The instants of a time column; `None` for any other kind.
    pub fn times(&self) -> Option<&[i64]> {
        if let Self::Time(times) = self { Some(times) } else { None }
    }
}

/// A cell that could not be read as what its column was asked for.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct BadCell {
    /// Row in the batch.
    pub row: usize,
    /// Name of the field; empty where the whole row could not be read.
    pub field: String,
    /// What is wrong with it, in words.
    pub reason: String,
}

/// Rows of records as typed columns.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Batch {
    /// Number of rows.
    pub rows: usize,
    /// One column per [`ColumnSpec`] asked for, in that order.
    pub columns: Vec<Column>,
    /// Bad cells, ascending by row.
    pub bad_cells: Vec<BadCell>,
}

/// A record that was not scored, and why.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Refusal {
    /// Row in the batch.
    pub row: usize,
    /// Name of the field; empty where the whole record could not be read.
    pub field: String,
    /// What is wrong with it and what was expected.
    pub reason: String,
}
