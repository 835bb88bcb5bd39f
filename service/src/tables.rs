//! Scored tables: the columns that scoring adds, and refused rows.

use std::collections::BTreeMap;

use kilter_fit::inference::ProbabilityIntervals;
use kilter_model::{Explanation, Refusal};
use kilter_tables::{Appended, AppendedKind, TableBatch};

use crate::scoring::{ScoredRecords, Version};

/// What a scored table holds beside probabilities, or instead of them.
#[derive(Debug, Clone, Default, PartialEq)]
pub(crate) struct ScoredContent {
    /// Confidence level of an interval for each probability.
    pub(crate) intervals: Option<f64>,
    /// Two categories; what each term adds to the log-odds of the first against the second.
    pub(crate) explain: Option<[String; 2]>,
    /// Only the likeliest category, no probabilities.
    pub(crate) top_only: bool,
}

/// The columns that scoring adds to a table: `p_<category>` for every category (with intervals
/// also `p_<category>_low` and `p_<category>_high`), `explain_<term>` where asked for, `top`, `version`,
/// `notes`.
#[derive(Debug)]
pub(crate) struct ScoredTable<'a> {
    version: &'a Version,
    top_only: bool,
    intervals: Option<ProbabilityIntervals>,
    explanation: Option<Explanation>,
}

impl<'a> ScoredTable<'a> {
    /// The table that a version makes.
    ///
    /// # Errors
    /// Where the model file has no covariance for intervals, or lacks a category to explain.
    pub(crate) fn new(version: &'a Version, content: &ScoredContent) -> anyhow::Result<Self> {
        let model = &version.model;
        let intervals = content.intervals.map(|level| ProbabilityIntervals::new(model, level)).transpose()?;
        let explanation = content.explain.as_ref().map(|[a, b]| Explanation::new(model, a, b)).transpose()?;
        Ok(Self { version, top_only: content.top_only, intervals, explanation })
    }

    /// Names and kinds of the columns.
    pub(crate) fn columns(&self) -> Vec<(String, AppendedKind)> {
        let mut names: Vec<String> = Vec::new();
        if !self.top_only {
            for category in &self.version.model.outcome.categories {
                names.push(format!("p_{category}"));
                if self.intervals.is_some() {
                    names.extend([format!("p_{category}_low"), format!("p_{category}_high")]);
                }
            }
        }
        let terms = self.explanation.as_ref().map_or_else(Vec::new, Explanation::terms);
        names.extend(terms.iter().map(|term| format!("explain_{term}")));
        let mut columns: Vec<_> = names.into_iter().map(|name| (name, AppendedKind::Number)).collect();
        columns.extend(["top", "version", "notes"].map(|name| (name.to_owned(), AppendedKind::Text)));
        columns
    }

    /// The columns for the given rows. `given_ids` holds ids that were made for rows without one;
    /// they are noted, so that outcomes can name them.
    pub(crate) fn values(
        &self,
        records: &ScoredRecords,
        rows: &[usize],
        given_ids: &BTreeMap<usize, String>,
    ) -> Vec<Appended> {
        let categories = &self.version.model.outcome.categories;
        let mut columns = if self.top_only { Vec::new() } else { self.probabilities(records, rows) };
        if let Some(explanation) = &self.explanation {
            let parts = rows.iter().map(|&row| explanation.of_record(&records.scored.coded.value_row(row)));
            columns.extend(transposed(explanation.terms().len(), parts));
        }
        let text =
            |value: &dyn Fn(usize) -> String| Appended::Text(rows.iter().map(|&row| value(row)).collect());
        let notes = |row: usize| match given_ids.get(&row) {
            None => records.notes[row].clone(),
            Some(id) if records.notes[row].is_empty() => format!("id {id}"),
            Some(id) => format!("id {id}; {}", records.notes[row]),
        };
        columns.push(text(&|row| categories[records.scored.top_of(row)].clone()));
        columns.push(text(&|_| self.version.fingerprint().to_owned()));
        columns.push(text(&notes));
        columns
    }

    fn probabilities(&self, records: &ScoredRecords, rows: &[usize]) -> Vec<Appended> {
        let categories = records.scored.categories;
        let probabilities = |row: usize| records.scored.probabilities_of(row);
        let Some(intervals) = &self.intervals else {
            return transposed(categories, rows.iter().map(|&row| probabilities(row).to_vec()));
        };
        let with_ends = rows.iter().map(|&row| {
            let found = intervals.of_record(&records.scored.coded.value_row(row));
            let cells = probabilities(row).iter().zip(found);
            cells.flat_map(|(p, found)| [*p, found.interval[0], found.interval[1]]).collect()
        });
        transposed(3 * categories, with_ends)
    }
}

/// Rows of numbers as columns.
fn transposed(width: usize, rows: impl Iterator<Item = Vec<f64>>) -> Vec<Appended> {
    let mut columns = vec![Vec::new(); width];
    for row in rows {
        for (column, cell) in columns.iter_mut().zip(row) {
            column.push(cell);
        }
    }
    columns.into_iter().map(Appended::Number).collect()
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
