//! A test vector: a model, records, and what the scorer makes of them.

use kilter_model::{ModelFile, RecordReader, Scorer};
use serde_json::{Value, json};

/// A model with the records to score.
pub(crate) struct Vector {
    /// Name of its file, without the ending.
    pub(crate) name: &'static str,
    /// What it shows.
    pub(crate) about: &'static str,
    /// The model.
    pub(crate) model: ModelFile,
    /// Records as JSON objects.
    pub(crate) records: Vec<&'static str>,
}

/// The file of a vector: one line for each record and what is expected of it.
pub(crate) fn document(vector: &Vector) -> String {
    let about = Value::from(vector.about);
    let model = vector.model.to_json().expect("finite numbers");
    let cases: Vec<String> = vector.records.iter().map(|record| case(&vector.model, record)).collect();
    format!(
        "{{\n\"about\": {about},\n\"model\": {},\n\"cases\": [\n{}\n]\n}}\n",
        model.trim_end(),
        cases.join(",\n")
    )
}

fn case(model: &ModelFile, record: &str) -> String {
    let (key, found) = score(model, record);
    format!("{{\"record\": {record}, \"{key}\": {found}}}")
}

/// What the scorer makes of a record: its `probabilities`, or field and reason where it is `refused`.
pub(crate) fn score(model: &ModelFile, record: &str) -> (&'static str, Value) {
    let scorer = Scorer::new(model).expect("a sound model");
    let mut reader = RecordReader::new(&scorer.column_specs());
    reader.push_line(record.as_bytes());
    let scored = scorer.score(&reader.finish());
    match scored.coded.refused.first() {
        Some(refusal) => ("refused", json!({"field": refusal.field, "reason": refusal.reason})),
        None => ("probabilities", json!(scored.probabilities_of(0))),
    }
}
