//! Records scored by a version: the part that posted records and dropped files share.

use kilter_ledger::NewRecord;
use kilter_model::{Batch, ModelFile, Refusal, Scored, Scorer};

use crate::layout::{RecordHead, RecordLayout, conflict};

/// A version ready to score.
#[derive(Debug)]
pub(crate) struct Version {
    /// The model file.
    pub(crate) model: ModelFile,
    /// Its text, as it was published.
    pub(crate) text: String,
    /// The compiled scorer.
    pub(crate) scorer: Scorer,
    /// The columns that it needs from a record.
    pub(crate) layout: RecordLayout,
}

/// Why a model file cannot be served.
#[derive(Debug, thiserror::Error)]
pub(crate) enum VersionError {
    /// The text is no sound model file.
    #[error(transparent)]
    File(#[from] kilter_model::ModelFileError),
    /// Fields and interactions make no design.
    #[error(transparent)]
    Design(#[from] kilter_model::DesignError),
    /// A name stands for two things.
    #[error("{0}")]
    Conflict(String),
}

impl Version {
    /// Reads and compiles a model file.
    ///
    /// # Errors
    /// [`VersionError`] where the file is not sound or cannot be served.
    pub(crate) fn new(text: String) -> Result<Self, VersionError> {
        let model = ModelFile::from_json(&text)?;
        if let Some(reason) = conflict(&model) {
            return Err(VersionError::Conflict(reason));
        }
        let scorer = Scorer::new(&model)?;
        let layout = RecordLayout::new(&model, &scorer);
        Ok(Self { model, text, scorer, layout })
    }

    /// Fingerprint of the version.
    pub(crate) fn fingerprint(&self) -> &str {
        &self.model.fingerprint
    }

    /// Scores a batch that has this version's columns.
    pub(crate) fn score(&self, batch: &Batch) -> ScoredRecords {
        let mut scored = self.scorer.score(batch);
        let carried = [&self.model.record.id, &self.model.record.time];
        let bad = batch.bad_cells.iter().filter(|cell| carried.contains(&&cell.field));
        let refusals =
            bad.map(|cell| Refusal { row: cell.row, field: cell.field.clone(), reason: cell.reason.clone() });
        scored.coded.refused.extend(refusals);
        scored.coded.refused.sort_by_key(|refusal| refusal.row);
        scored.coded.refused.dedup_by_key(|refusal| refusal.row);
        let usable = scored.coded.usable();
        let heads = (0..batch.rows).map(|row| self.layout.head(batch, row)).collect();
        ScoredRecords { notes: scored.coded.notes_by_row(), scored, heads, usable }
    }
}

/// A batch of scored records.
#[derive(Debug)]
pub(crate) struct ScoredRecords {
    /// Probabilities, log-odds, refusals.
    pub(crate) scored: Scored,
    /// Id, time and segments of each row.
    pub(crate) heads: Vec<RecordHead>,
    /// Remarks on each row.
    pub(crate) notes: Vec<String>,
    /// For each row whether it was scored.
    pub(crate) usable: Vec<bool>,
}

impl ScoredRecords {
    /// Rows that were scored.
    pub(crate) fn rows(&self) -> impl Iterator<Item = usize> + '_ {
        self.usable.iter().enumerate().filter(|(_, usable)| **usable).map(|(row, _)| row)
    }

    /// A scored row as the ledger keeps it; `now` is its time where it carries none.
    pub(crate) fn new_record(&self, row: usize, id: String, now: i64) -> NewRecord {
        let head = &self.heads[row];
        NewRecord {
            id,
            time: head.time.unwrap_or(now),
            log_odds: self.scored.log_odds_of(row).to_vec(),
            inputs: self.scored.coded.input_row(row),
            segments: head.segments.clone(),
        }
    }

    /// Rows that were refused, each with its first reason.
    pub(crate) fn refused(&self) -> &[Refusal] {
        &self.scored.coded.refused
    }
}

/// A refusal in one word, for a metric.
pub(crate) fn refusal_in_a_word(refusal: &Refusal) -> &'static str {
    let reason = refusal.reason.as_str();
    if refusal.field.is_empty() {
        "unreadable"
    } else if reason == "is missing" {
        "missing"
    } else if reason.contains("was not in the fit") {
        "unseen"
    } else if reason.contains("outside the valid range") || reason.contains("no logarithm") {
        "range"
    } else {
        "type"
    }
}
