//! Scored tables: the columns that scoring adds, and refused rows.

use std::collections::BTreeMap;

use kilter_model::Refusal;
use kilter_tables::{Appended, AppendedKind, TableBatch};

use crate::scoring::{ScoredRecords, Version};

/// Names and kinds of the columns that a scored table has beyond its input: `p_<category>` for
/// every category, `top`, `version`, `notes`.
pub(crate) fn scored_columns(version: &Version) -> Vec<(String, AppendedKind)> {
    let probability = |category: &String| (format!("p_{category}"), AppendedKind::Number);
    let mut columns: Vec<_> = version.model.outcome.categories.iter().map(probability).collect();
    columns.extend(["top", "version", "notes"].map(|name| (name.to_owned(), AppendedKind::Text)));
    columns
}

/// The columns of [`scored_columns`] for the given rows. `given_ids` holds ids that were made for
/// rows without one; they are noted, so that outcomes can name them.
pub(crate) fn scored_values(
    version: &Version,
    records: &ScoredRecords,
    rows: &[usize],
    given_ids: &BTreeMap<usize, String>,
) -> Vec<Appended> {
    let categories = &version.model.outcome.categories;
    let probability = |category: usize| {
        Appended::Number(rows.iter().map(|&row| records.scored.probabilities_of(row)[category]).collect())
    };
    let text = |value: &dyn Fn(usize) -> String| Appended::Text(rows.iter().map(|&row| value(row)).collect());
    let notes = |row: usize| match given_ids.get(&row) {
        None => records.notes[row].clone(),
        Some(id) if records.notes[row].is_empty() => format!("id {id}"),
        Some(id) => format!("id {id}; {}", records.notes[row]),
    };
    let mut columns: Vec<Appended> = (0..categories.len()).map(probability).collect();
    columns.push(text(&|row| categories[records.scored.top_of(row)].clone()));
    columns.push(text(&|_| version.fingerprint().to_owned()));
    columns.push(text(&notes));
    columns
}

/// Names and kinds of the columns that a table of refused rows has beyond its input.
pub(crate) fn refused_columns() -> Vec<(String, AppendedKind)> {
    vec![
        ("line".to_owned(), AppendedKind::Count),
        ("field".to_owned(), AppendedKind::Text),
        ("reason".to_owned(), AppendedKind::Text),
    ]
}

/// The columns of [`refused_columns`] for refused rows.
pub(crate) fn refused_values(batch: &TableBatch, refused: &[Refusal]) -> Vec<Appended> {
    vec![
        Appended::Count(refused.iter().map(|refusal| batch.line(refusal.row)).collect()),
        Appended::Text(refused.iter().map(|refusal| refusal.field.clone()).collect()),
        Appended::Text(refused.iter().map(|refusal| refusal.reason.clone()).collect()),
    ]
}

/// Columns as the writer takes them.
pub(crate) fn borrowed(columns: &[(String, AppendedKind)]) -> Vec<(&str, AppendedKind)> {
    columns.iter().map(|(name, kind)| (name.as_str(), *kind)).collect()
}
