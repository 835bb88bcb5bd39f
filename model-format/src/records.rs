//! JSON records into a column batch, without an intermediate JSON value.

use std::collections::HashMap;
use std::fmt;

use serde::de::{DeserializeSeed, Deserializer, IgnoredAny, MapAccess, SeqAccess, Visitor};

use crate::batch::{
    BadCell, Batch, CellKind, Column, ColumnSpec, MISSING_CODE, MISSING_FLAG, MISSING_TIME,
    MOST_SHARED_TEXTS, TextColumn,
};
use crate::cells::{parse_time, shorten};

/// Collects JSON records into a [`Batch`].
///
/// Keys that no column asks for are passed over. A cell of the wrong type becomes a bad cell and
/// leaves its neighbours alone; text that is no JSON is an error.
#[derive(Debug)]
pub struct RecordReader {
    specs: Vec<ColumnSpec>,
    index: HashMap<String, usize>,
    columns: Vec<ColumnBuilder>,
    bad_cells: Vec<BadCell>,
    rows: usize,
}

/// A growing column, with the codes of the texts met so far.
#[derive(Debug)]
struct ColumnBuilder {
    column: Column,
    codes: HashMap<String, u32>,
    /// Whether the current row has this column already.
    filled: bool,
}

impl RecordReader {
    /// A reader for the given columns.
    pub fn new(specs: &[ColumnSpec]) -> Self {
        let builder = |spec: &ColumnSpec| ColumnBuilder {
            column: empty_column(spec.kind),
            codes: HashMap::new(),
            filled: false,
        };
        Self {
            specs: specs.to_vec(),
            index: specs.iter().enumerate().map(|(i, spec)| (spec.name.clone(), i)).collect(),
            columns: specs.iter().map(builder).collect(),
            bad_cells: Vec::new(),
            rows: 0,
        }
    }

    /// Number of rows collected.
    pub fn rows(&self) -> usize {
        self.rows
    }

    /// Adds one JSON object.
    ///
    /// # Errors
    /// The JSON error, with line and column; nothing of the record is kept then.
    pub fn push_record(&mut self, json: &[u8]) -> Result<(), serde_json::Error> {
        let mut source = serde_json::Deserializer::from_slice(json);
        let start = self.rows;
        let read = RecordSeed { reader: self }.deserialize(&mut source).and_then(|()| source.end());
        if read.is_err() {
            self.truncate(start);
        }
        read
    }

    /// Adds one line of NDJSON: a malformed line becomes a bad row.
    pub fn push_line(&mut self, line: &[u8]) {
        if let Err(error) = self.push_record(line) {
            self.push_bad_row(format!("not a JSON object: {}", without_line(&error)));
        }
    }

    /// Adds a JSON object, or all objects of a JSON array. Array elements that are no objects
    /// become bad rows.
    ///
    /// # Errors
    /// The JSON error, with line and column; nothing of the document is kept then.
    pub fn push_document(&mut self, json: &[u8]) -> Result<(), serde_json::Error> {
        let mut source = serde_json::Deserializer::from_slice(json);
        let start = self.rows;
        let read = DocumentSeed { reader: self }.deserialize(&mut source).and_then(|()| source.end());
        if read.is_err() {
            self.truncate(start);
        }
        read
    }

    /// Adds a row that could not be read at all.
    pub fn push_bad_row(&mut self, reason: String) {
        self.start_row();
        self.bad_cells.push(BadCell { row: self.rows - 1, field: String::new(), reason });
    }

    /// The batch of all rows so far.
    pub fn finish(self) -> Batch {
        let columns = self.columns.into_iter().map(|builder| builder.column).collect();
        Batch { rows: self.rows, columns, bad_cells: self.bad_cells }
    }

    fn start_row(&mut self) {
        for builder in &mut self.columns {
            builder.filled = false;
            match &mut builder.column {
                Column::Number(values) => values.push(f64::NAN),
                Column::Text(texts) => texts.codes.push(MISSING_CODE),
                Column::Flag(flags) => flags.push(MISSING_FLAG),
                Column::Time(times) => times.push(MISSING_TIME),
            }
        }
        self.rows += 1;
    }

    fn truncate(&mut self, rows: usize) {
        for builder in &mut self.columns {
            match &mut builder.column {
                Column::Number(values) => values.truncate(rows),
                Column::Text(texts) => texts.codes.truncate(rows),
                Column::Flag(flags) => flags.truncate(rows),
                Column::Time(times) => times.truncate(rows),
            }
        }
        self.bad_cells.retain(|cell| cell.row < rows);
        self.rows = rows;
    }

    fn bad(&mut self, column: usize, reason: String) {
        let field = self.specs[column].name.clone();
        self.bad_cells.push(BadCell { row: self.rows - 1, field, reason });
    }
}

/// An empty column of a kind.
pub(crate) fn empty_column(kind: CellKind) -> Column {
    match kind {
        CellKind::Number => Column::Number(Vec::new()),
        CellKind::Text => Column::Text(TextColumn::default()),
        CellKind::Flag => Column::Flag(Vec::new()),
        CellKind::Time => Column::Time(Vec::new()),
    }
}

/// A JSON error without its line, for texts that are one line anyway.
fn without_line(error: &serde_json::Error) -> String {
    let text = error.to_string();
    let suffix = format!(" at line {} column {}", error.line(), error.column());
    match text.strip_suffix(&suffix) {
        Some(reason) => format!("{reason} at column {}", error.column()),
        None => text,
    }
}

struct DocumentSeed<'a> {
    reader: &'a mut RecordReader,
}

impl<'de> DeserializeSeed<'de> for DocumentSeed<'_> {
    type Value = ();
    fn deserialize<D: Deserializer<'de>>(self, source: D) -> Result<(), D::Error> {
        source.deserialize_any(self)
    }
}

impl<'de> Visitor<'de> for DocumentSeed<'_> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("a JSON object or an array of objects")
    }

    fn visit_map<A: MapAccess<'de>>(self, map: A) -> Result<(), A::Error> {
        RecordSeed { reader: self.reader }.visit_map(map)
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<(), A::Error> {
        while elements.next_element_seed(ElementSeed { reader: self.reader })?.is_some() {}
        Ok(())
    }
}

/// One object; anything else is a type error.
struct RecordSeed<'a> {
    reader: &'a mut RecordReader,
}

impl<'de> DeserializeSeed<'de> for RecordSeed<'_> {
    type Value = ();
    fn deserialize<D: Deserializer<'de>>(self, source: D) -> Result<(), D::Error> {
        source.deserialize_map(self)
    }
}

impl<'de> Visitor<'de> for RecordSeed<'_> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("a JSON object")
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<(), A::Error> {
        self.reader.start_row();
        while let Some(column) = map.next_key_seed(KeySeed { index: &self.reader.index })? {
            match column {
                None => drop(map.next_value::<IgnoredAny>()?),
                Some(column) if self.reader.columns[column].filled => {
                    map.next_value::<IgnoredAny>()?;
                    self.reader.bad(column, "is given twice".into());
                }
                Some(column) => {
                    self.reader.columns[column].filled = true;
                    map.next_value_seed(CellSeed { reader: self.reader, column })?;
                }
            }
        }
        Ok(())
    }
}

/// One element of an array of records: anything but an object becomes a bad row.
struct ElementSeed<'a> {
    reader: &'a mut RecordReader,
}

impl ElementSeed<'_> {
    fn not_an_object(self, found: &str) {
        self.reader.push_bad_row(format!("expected a JSON object, found {found}"));
    }
}

impl<'de> DeserializeSeed<'de> for ElementSeed<'_> {
    type Value = ();
    fn deserialize<D: Deserializer<'de>>(self, source: D) -> Result<(), D::Error> {
        source.deserialize_any(self)
    }
}

impl<'de> Visitor<'de> for ElementSeed<'_> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("a JSON object")
    }

    fn visit_map<A: MapAccess<'de>>(self, map: A) -> Result<(), A::Error> {
        RecordSeed { reader: self.reader }.visit_map(map)
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<(), A::Error> {
        while elements.next_element::<IgnoredAny>()?.is_some() {}
        self.not_an_object("an array");
        Ok(())
    }

    fn visit_unit<E>(self) -> Result<(), E> {
        self.not_an_object("null");
        Ok(())
    }

    fn visit_bool<E>(self, _: bool) -> Result<(), E> {
        self.not_an_object("true or false");
        Ok(())
    }

    fn visit_i64<E>(self, _: i64) -> Result<(), E> {
        self.not_an_object("a number");
        Ok(())
    }

    fn visit_u64<E>(self, _: u64) -> Result<(), E> {
        self.not_an_object("a number");
        Ok(())
    }

    fn visit_f64<E>(self, _: f64) -> Result<(), E> {
        self.not_an_object("a number");
        Ok(())
    }

    fn visit_str<E>(self, _: &str) -> Result<(), E> {
        self.not_an_object("a text");
        Ok(())
    }
}

/// A key, as the index of its column.
struct KeySeed<'a> {
    index: &'a HashMap<String, usize>,
}

impl<'de> DeserializeSeed<'de> for KeySeed<'_> {
    type Value = Option<usize>;
    fn deserialize<D: Deserializer<'de>>(self, source: D) -> Result<Option<usize>, D::Error> {
        source.deserialize_str(self)
    }
}

impl Visitor<'_> for KeySeed<'_> {
    type Value = Option<usize>;

    fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("a key")
    }

    fn visit_str<E>(self, key: &str) -> Result<Option<usize>, E> {
        Ok(self.index.get(key).copied())
    }
}

/// A value of the current row, put into its column.
struct CellSeed<'a> {
    reader: &'a mut RecordReader,
    column: usize,
}

impl CellSeed<'_> {
    fn refuse(self, found: &str) {
        let expected = match self.reader.specs[self.column].kind {
            CellKind::Number => "a number",
            CellKind::Text => "a text",
            CellKind::Flag => "true or false",
            CellKind::Time => "a time such as \"2026-03-01T08:30:00Z\"",
        };
        self.reader.bad(self.column, format!("expected {expected}, found {found}"));
    }

    fn set_text(self, text: &str) {
        let builder = &mut self.reader.columns[self.column];
        let Column::Text(texts) = &mut builder.column else { return };
        let code = builder.codes.get(text).copied().unwrap_or_else(|| {
            let code = texts.dictionary.len() as u32;
            texts.dictionary.push(text.to_owned());
            if texts.dictionary.len() <= MOST_SHARED_TEXTS {
                builder.codes.insert(text.to_owned(), code);
            }
            code
        });
        if let Some(last) = texts.codes.last_mut() {
            *last = code;
        }
    }

    fn set_number(self, value: f64) {
        match &mut self.reader.columns[self.column].column {
            Column::Number(values) if value.is_finite() => {
                if let Some(last) = values.last_mut() {
                    *last = value;
                }
            }
            _ => self.refuse(&format!("the number {value}")),
        }
    }

    fn set_integer(self, value: f64, text: &str) {
        match self.reader.specs[self.column].kind {
            CellKind::Text => self.set_text(text),
            CellKind::Flag if value == 0.0 || value == 1.0 => self.set_flag(value == 1.0),
            _ => self.set_number(value),
        }
    }

    fn set_flag(self, value: bool) {
        match &mut self.reader.columns[self.column].column {
            Column::Flag(flags) => {
                if let Some(last) = flags.last_mut() {
                    *last = u8::from(value);
                }
            }
            _ => self.refuse(if value { "true" } else { "false" }),
        }
    }
}

impl<'de> DeserializeSeed<'de> for CellSeed<'_> {
    type Value = ();
    fn deserialize<D: Deserializer<'de>>(self, source: D) -> Result<(), D::Error> {
        source.deserialize_any(self)
    }
}

impl<'de> Visitor<'de> for CellSeed<'_> {
    type Value = ();

    fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("a value")
    }

    fn visit_f64<E>(self, value: f64) -> Result<(), E> {
        self.set_number(value);
        Ok(())
    }

    fn visit_i64<E>(self, value: i64) -> Result<(), E> {
        self.set_integer(value as f64, &value.to_string());
        Ok(())
    }

    fn visit_u64<E>(self, value: u64) -> Result<(), E> {
        self.set_integer(value as f64, &value.to_string());
        Ok(())
    }

    fn visit_bool<E>(self, value: bool) -> Result<(), E> {
        self.set_flag(value);
        Ok(())
    }

    fn visit_unit<E>(self) -> Result<(), E> {
        Ok(())
    }

    fn visit_str<E>(self, text: &str) -> Result<(), E> {
        match self.reader.specs[self.column].kind {
            CellKind::Text if text.is_empty() => {}
            CellKind::Text => self.set_text(text),
            CellKind::Time => match parse_time(text) {
                Ok(time) => {
                    if let Column::Time(times) = &mut self.reader.columns[self.column].column
                        && let Some(last) = times.last_mut()
                    {
                        *last = time.unwrap_or(MISSING_TIME);
                    }
                }
                Err(reason) => self.reader.bad(self.column, reason),
            },
            CellKind::Number | CellKind::Flag => self.refuse(&format!("the text `{}`", shorten(text))),
        }
        Ok(())
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut elements: A) -> Result<(), A::Error> {
        while elements.next_element::<IgnoredAny>()?.is_some() {}
        self.refuse("an array");
        Ok(())
    }

    fn visit_map<A: MapAccess<'de>>(self, mut map: A) -> Result<(), A::Error> {
        while map.next_entry::<IgnoredAny, IgnoredAny>()?.is_some() {}
        self.refuse("an object");
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn specs() -> Vec<ColumnSpec> {
        let spec = |name: &str, kind| ColumnSpec { name: name.into(), kind, required: true };
        vec![
            spec("weight", CellKind::Number),
            spec("dwelling", CellKind::Text),
            spec("fragile", CellKind::Flag),
            spec("planned_at", CellKind::Time),
        ]
    }

    #[test]
    fn reads_arrays_and_single_objects() {
        let mut reader = RecordReader::new(&specs());
        reader
            .push_document(
                br#"[{"weight": 1.5, "dwelling": "flat", "fragile": true, "other": [1, {"a": 2}]}, 7]"#,
            )
            .unwrap();
        reader.push_document(br#"{"dwelling": "farm", "planned_at": "1970-01-02"}"#).unwrap();
        let batch = reader.finish();
        assert_eq!(batch.rows, 3);
        assert_eq!(batch.columns[0].numbers().unwrap()[0], 1.5);
        assert!(batch.columns[0].numbers().unwrap()[2].is_nan());
        assert_eq!(batch.columns[1].texts().unwrap().get(2), Some("farm"));
        assert_eq!(batch.columns[3].times().unwrap(), [MISSING_TIME, MISSING_TIME, 86_400_000_000]);
        assert_eq!(batch.bad_cells.len(), 1);
        assert_eq!((batch.bad_cells[0].row, batch.bad_cells[0].field.as_str()), (1, ""));
    }

    #[test]
    fn a_bad_cell_names_field_and_finding() {
        for (json, field, finding) in [
            (r#"{"weight": "heavy"}"#, "weight", "found the text `heavy`"),
            (r#"{"weight": true}"#, "weight", "found true"),
            (r#"{"weight": [1]}"#, "weight", "found an array"),
            (r#"{"dwelling": 1.5}"#, "dwelling", "found the number 1.5"),
            (r#"{"dwelling": {}}"#, "dwelling", "found an object"),
            (r#"{"fragile": 3}"#, "fragile", "found the number 3"),
            (r#"{"planned_at": "soon"}"#, "planned_at", "`soon` is not a time"),
            (r#"{"weight": 1, "weight": 2}"#, "weight", "given twice"),
        ] {
            let mut reader = RecordReader::new(&specs());
            reader.push_record(json.as_bytes()).unwrap();
            let batch = reader.finish();
            assert_eq!(batch.bad_cells.len(), 1, "{json}");
            assert_eq!(batch.bad_cells[0].field, field, "{json}");
            assert!(batch.bad_cells[0].reason.contains(finding), "{json}: {}", batch.bad_cells[0].reason);
        }
    }

    #[test]
    fn malformed_text_leaves_no_trace() {
        let mut reader = RecordReader::new(&specs());
        reader.push_record(br#"{"weight": 1}"#).unwrap();
        let error = reader.push_document(b"[{\"weight\": 2},\n {\"weight\": 3,}]").unwrap_err();
        assert_eq!(error.line(), 2);
        reader.push_line(br#"{"weight": 1e400}"#);
        let batch = reader.finish();
        assert_eq!(batch.rows, 2);
        assert!(batch.bad_cells[0].reason.starts_with("not a JSON object"), "{:?}", batch.bad_cells);
    }

    #[test]
    fn whole_numbers_may_stand_for_texts_and_flags() {
        let mut reader = RecordReader::new(&specs());
        reader.push_record(br#"{"dwelling": 3, "fragile": 1}"#).unwrap();
        let batch = reader.finish();
        assert_eq!(batch.columns[1].texts().unwrap().get(0), Some("3"));
        assert_eq!(batch.columns[2], Column::Flag(vec![1]));
    }
}
