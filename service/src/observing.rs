//! Outcomes read from a body or a file, and what became of them.

use kilter_ledger::{NewOutcome, OutcomeState};
use kilter_model::{Batch, CellKind, Column, ColumnSpec, MISSING_TIME};

use crate::metrics::Metrics;

/// The columns of a table or document of outcomes.
pub(crate) fn outcome_specs() -> Vec<ColumnSpec> {
    let spec = |name: &str, kind, required| ColumnSpec { name: name.into(), kind, required };
    vec![
        spec("id", CellKind::Text, true),
        spec("category", CellKind::Text, true),
        spec("observed_at", CellKind::Time, false),
    ]
}

/// Outcomes of one batch.
#[derive(Debug, Default)]
pub(crate) struct ReadOutcomes {
    /// Those that could be read.
    pub(crate) outcomes: Vec<NewOutcome>,
    /// Their rows in the batch.
    pub(crate) rows: Vec<usize>,
    /// Those that could not.
    pub(crate) refused: Vec<OutcomeRefusal>,
}

/// An outcome that was not taken in.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct OutcomeRefusal {
    /// Row in the batch.
    pub(crate) row: usize,
    /// Its id, where it has one.
    pub(crate) id: Option<String>,
    /// The field that is wrong.
    pub(crate) field: String,
    /// What is wrong.
    pub(crate) reason: String,
}

impl ReadOutcomes {
    /// The outcomes of a batch that has the columns of [`outcome_specs`].
    pub(crate) fn of(batch: &Batch) -> Self {
        let mut read = Self::default();
        let text = |column: usize, row: usize| {
            batch
                .columns
                .get(column)
                .and_then(Column::texts)
                .and_then(|texts| texts.get(row))
                .map(str::to_owned)
        };
        let times = batch.columns.get(2).and_then(Column::times).unwrap_or_default();
        for row in 0..batch.rows {
            let (id, category) = (text(0, row), text(1, row));
            let bad = batch.bad_cells.iter().find(|cell| cell.row == row);
            let refusal = match (bad, &id, &category) {
                (Some(cell), _, _) => Some((cell.field.as_str(), cell.reason.as_str())),
                (None, None, _) => Some(("id", "is missing")),
                (None, _, None) => Some(("category", "is missing")),
                _ => None,
            };
            match (refusal, id, category) {
                (None, Some(id), Some(category)) => {
                    let observed_at = times.get(row).copied().filter(|time| *time != MISSING_TIME);
                    read.outcomes.push(NewOutcome { id, category, observed_at });
                    read.rows.push(row);
                }
                (refusal, id, _) => {
                    let (field, reason) = refusal.unwrap_or(("", "cannot be read"));
                    let (field, reason) = (field.to_owned(), reason.to_owned());
                    read.refused.push(OutcomeRefusal { row, id, field, reason });
                }
            }
        }
        read
    }
}

/// What became of outcomes.
#[derive(Debug, Default)]
pub(crate) struct Tally {
    pub(crate) matched: usize,
    pub(crate) waiting: usize,
    pub(crate) repeated: usize,
    pub(crate) corrected: usize,
    pub(crate) refused: Vec<OutcomeRefusal>,
}

impl Tally {
    /// Counts the outcomes that could not be read.
    pub(crate) fn refuse_unread(&mut self, read: &ReadOutcomes) {
        self.refused.extend(read.refused.iter().cloned());
    }

    /// Counts what the ledger said of the outcomes that could be read.
    pub(crate) fn add(&mut self, read: &ReadOutcomes, states: &[OutcomeState]) {
        for ((outcome, &row), state) in read.outcomes.iter().zip(&read.rows).zip(states) {
            match state {
                OutcomeState::Matched => self.matched += 1,
                OutcomeState::Waiting => self.waiting += 1,
                OutcomeState::Repeated => self.repeated += 1,
                OutcomeState::Corrected => self.corrected += 1,
                OutcomeState::Refused(reason) => self.refused.push(OutcomeRefusal {
                    row,
                    id: Some(outcome.id.clone()),
                    field: "category".into(),
                    reason: reason.clone(),
                }),
            }
        }
        self.refused.sort_by_key(|refusal| refusal.row);
    }

    /// Adds another tally.
    pub(crate) fn merge(&mut self, other: Self) {
        self.matched += other.matched;
        self.waiting += other.waiting;
        self.repeated += other.repeated;
        self.corrected += other.corrected;
        self.refused.extend(other.refused);
    }

    /// Adds the counts to the metrics.
    pub(crate) fn count(&self, metrics: &Metrics, model: &str) {
        for (state, count) in [
            ("matched", self.matched),
            ("waiting", self.waiting),
            ("repeated", self.repeated),
            ("corrected", self.corrected),
            ("refused", self.refused.len()),
        ] {
            metrics.outcomes.with_label_values(&[model, state]).inc_by(count as u64);
        }
    }
}
