//! Rows as they came, written again as text.

use serde_json::{Map, Value};

use crate::columnar::text_of;
use crate::rows::Rows;
use crate::writer::{Appended, AppendedKind};

/// The cells of a row as text, one per name. A CSV row that has more or fewer keeps what it has,
/// filled up to the number of names.
pub(crate) fn cells_of(rows: &Rows, names: &[String], row: usize) -> Vec<String> {
    match rows {
        Rows::NotCarried => Vec::new(),
        Rows::Cells(records) => {
            let mut cells: Vec<String> = records[row].iter().map(str::to_owned).collect();
            cells.resize(names.len(), String::new());
            cells
        }
        Rows::Objects(objects) => {
            let object: Map<String, Value> = serde_json::from_str(&objects[row]).unwrap_or_default();
            names.iter().map(|name| object.get(name).map_or_else(String::new, value_as_text)).collect()
        }
        Rows::Frame(frame) => frame
            .columns()
            .iter()
            .map(|column| column.get(row).map_or_else(|_| String::new(), |value| text_of(&value)))
            .collect(),
    }
}

fn value_as_text(value: &Value) -> String {
    match value {
        Value::Null => String::new(),
        Value::String(text) => text.clone(),
        other => other.to_string(),
    }
}

/// A row as a line of NDJSON.
pub(crate) fn line_of(
    rows: &Rows,
    names: &[String],
    row: usize,
    appended_names: &[(String, AppendedKind)],
    appended: &[Appended],
    place: usize,
) -> String {
    let added: Vec<String> = appended_names
        .iter()
        .zip(appended)
        .map(|((name, _), values)| format!("{}:{}", Value::from(name.as_str()), values.json(place)))
        .collect();
    let added = added.join(",");
    let own = match rows {
        Rows::NotCarried => String::new(),
        Rows::Objects(objects) => {
            let object = objects[row].trim();
            let inner = object.strip_prefix('{').and_then(|rest| rest.strip_suffix('}'));
            inner.unwrap_or_default().trim().to_owned()
        }
        Rows::Cells(_) => pairs(names, cells_of(rows, names, row).into_iter().map(Value::from)),
        Rows::Frame(frame) => pairs(
            names,
            frame.columns().iter().map(|column| column.get(row).map_or(Value::Null, |value| json_of(&value))),
        ),
    };
    let parts: Vec<&str> =
        [own.as_str(), added.as_str()].into_iter().filter(|part| !part.is_empty()).collect();
    format!("{{{}}}", parts.join(","))
}

/// The appended column whose name an object has as a key already. Keys may differ from object to
/// object, so each is looked at; most are told apart without reading them.
pub(crate) fn key_already_there(
    rows: &Rows,
    row: usize,
    appended: &[(String, AppendedKind)],
) -> Option<String> {
    let Rows::Objects(objects) = rows else { return None };
    let text = &objects[row];
    if !appended.iter().any(|(name, _)| text.contains(&Value::from(name.as_str()).to_string())) {
        return None;
    }
    let object: Map<String, Value> = serde_json::from_str(text).ok()?;
    appended.iter().map(|(name, _)| name).find(|name| object.contains_key(*name)).cloned()
}

fn pairs(names: &[String], values: impl Iterator<Item = Value>) -> String {
    let pair = |(name, value): (&String, Value)| format!("{}:{value}", Value::from(name.as_str()));
    names.iter().zip(values).map(pair).collect::<Vec<_>>().join(",")
}

fn json_of(value: &polars::prelude::AnyValue) -> Value {
    use polars::prelude::AnyValue;
    match value {
        AnyValue::Null => Value::Null,
        AnyValue::Boolean(flag) => (*flag).into(),
        AnyValue::Float64(number) => (*number).into(),
        AnyValue::Float32(number) => f64::from(*number).into(),
        AnyValue::UInt64(number) => (*number).into(),
        value if value.is_integer() => value.extract::<i64>().map_or(Value::Null, Value::from),
        value => text_of(value).into(),
    }
}
