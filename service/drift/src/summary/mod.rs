//! The summary: sums and counts over records from which every statistic that the monitor shows
//! continuously is computed.
//!
//! Summaries add: the summary of two sets of records is the sum of their summaries, whatever the
//! order. What was added can be taken out again, which is how a corrected outcome is handled.

mod fields;
mod full;
mod outcomes;
mod scored;
#[cfg(test)]
mod tests;

use serde::{Deserialize, Serialize};

pub(crate) use self::fields::FieldPart;
pub(crate) use self::full::FullPart;
pub use self::full::LARGEST_MATRIX;
pub use self::outcomes::DELAY_EDGES_HOURS;
pub(crate) use self::outcomes::OutcomePart;
pub(crate) use self::scored::ScoredPart;
use crate::error::DriftError;
use crate::frame::{Frame, check_number};
use crate::record::{ScoredRecord, with_probabilities};

/// The version of summaries that this crate writes and reads.
pub const SUMMARY_VERSION: u32 = 1;

/// Share of the records that must be left after a subtraction for its sums to be precise.
const PRECISE_REMAINDER: f64 = 1e-7;

/// How much a summary holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Detail {
    /// Without reliability bins, groups and the full calibration matrix: for segments.
    Light,
    /// Everything: for all records of a model version.
    Full,
}

/// Whether the sums are still precise after a subtraction.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
#[must_use]
pub enum Remainder {
    /// They are.
    Precise,
    /// Hardly anything was left of what had been there: build this summary anew from its records.
    Rebuild,
}

/// Sums and counts over the scored records of one model version in a span of record time.
///
/// Plain numbers; its size depends on the model, not on the number of records.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Summary {
    version: u32,
    detail: Detail,
    pub(crate) scored: ScoredPart,
    pub(crate) fields: Vec<FieldPart>,
    pub(crate) outcomes: OutcomePart,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub(crate) full: Option<FullPart>,
}

impl Summary {
    /// An empty summary.
    pub fn new(frame: &Frame, detail: Detail) -> Self {
        Self {
            version: SUMMARY_VERSION,
            detail,
            scored: ScoredPart::new(frame),
            fields: frame.fields.iter().map(FieldPart::new).collect(),
            outcomes: OutcomePart::new(frame),
            full: (detail == Detail::Full).then(|| FullPart::new(frame)),
        }
    }

    /// How much this summary holds.
    pub fn detail(&self) -> Detail {
        self.detail
    }

    /// Number of scored records (sum of their weights).
    pub fn scored(&self) -> f64 {
        self.scored.count
    }

    /// Number of records with an outcome (sum of their weights).
    pub fn outcomes(&self) -> f64 {
        self.outcomes.total()
    }

    /// Observed outcomes of each category, model order.
    pub fn observed(&self) -> &[f64] {
        &self.outcomes.observed
    }

    /// Sums of the probabilities of each category over the records with an outcome.
    pub fn expected(&self) -> Vec<f64> {
        self.outcomes.expected.values()
    }

    /// Sums of the probabilities of each category over all scored records.
    pub fn predicted(&self) -> Vec<f64> {
        self.scored.probability.values()
    }

    /// Whether nothing was folded in.
    pub fn is_empty(&self) -> bool {
        self.scored.count == 0.0 && self.outcomes() == 0.0
    }

    /// Folds a scored record into the scored part and the fields. An outcome is folded separately.
    ///
    /// `weight` is the number of equal records that this one stands for: 1 for the monitor, the
    /// case weight for the rows of a fit.
    ///
    /// # Errors
    /// Lists of the wrong length, log-odds that are not finite, a weight that is not above 0, or a
    /// summary of another shape than the frame. The summary is then as it was.
    pub fn add_scored(
        &mut self,
        frame: &Frame,
        record: &ScoredRecord,
        weight: f64,
    ) -> Result<(), DriftError> {
        self.fold_scored(frame, record, weight, 1.0)
    }

    /// Takes a scored record out again.
    ///
    /// # Errors
    /// As [`Summary::add_scored`], and [`DriftError::Negative`] for a record that was never added.
    pub fn remove_scored(
        &mut self,
        frame: &Frame,
        record: &ScoredRecord,
        weight: f64,
    ) -> Result<(), DriftError> {
        self.fold_scored(frame, record, weight, -1.0)
    }

    /// Folds the outcome of a record into the outcome part. `delay_hours` is the time from the
    /// record to its outcome, NaN where it is not known.
    ///
    /// # Errors
    /// As [`Summary::add_scored`], and [`DriftError::UnknownCategory`].
    pub fn add_outcome(
        &mut self,
        frame: &Frame,
        record: &ScoredRecord,
        category: usize,
        delay_hours: f64,
        weight: f64,
    ) -> Result<(), DriftError> {
        self.fold_outcome(frame, record, Outcome { category, delay_hours }, weight, 1.0)
    }

    /// Takes the outcome of a record out again, as it had been added.
    ///
    /// # Errors
    /// As [`Summary::add_outcome`], and [`DriftError::Negative`] for what was never added.
    pub fn remove_outcome(
        &mut self,
        frame: &Frame,
        record: &ScoredRecord,
        category: usize,
        delay_hours: f64,
        weight: f64,
    ) -> Result<(), DriftError> {
        self.fold_outcome(frame, record, Outcome { category, delay_hours }, weight, -1.0)
    }

    /// Adds another summary of the same model version and detail.
    ///
    /// # Errors
    /// [`DriftError::Shape`] where the two do not belong together; this one is then as it was.
    pub fn merge(&mut self, other: &Self) -> Result<(), DriftError> {
        self.check_combine(other, 1.0)?;
        self.combine(other, 1.0);
        Ok(())
    }

    /// Takes another summary out, which must have been added before.
    ///
    /// # Errors
    /// [`DriftError::Shape`], and [`DriftError::Negative`] where a count would become negative;
    /// this one is then as it was.
    pub fn subtract(&mut self, other: &Self) -> Result<Remainder, DriftError> {
        self.check_combine(other, -1.0)?;
        let before = [self.scored(), self.outcomes()];
        self.combine(other, -1.0);
        let after = [self.scored(), self.outcomes()];
        let thin =
            before.iter().zip(after).any(|(before, after)| after > 0.0 && after < PRECISE_REMAINDER * before);
        Ok(if thin { Remainder::Rebuild } else { Remainder::Precise })
    }

    /// Checks that a summary, read back from where it was kept, belongs to a frame.
    ///
    /// # Errors
    /// [`DriftError::SummaryVersion`] and [`DriftError::Shape`].
    pub fn check(&self, frame: &Frame) -> Result<(), DriftError> {
        if self.version != SUMMARY_VERSION {
            return Err(DriftError::SummaryVersion { found: self.version, supported: SUMMARY_VERSION });
        }
        Self::new(frame, self.detail).check_combine(self, 1.0)
    }

    fn fold_scored(
        &mut self,
        frame: &Frame,
        record: &ScoredRecord,
        weight: f64,
        sign: f64,
    ) -> Result<(), DriftError> {
        record.check(frame)?;
        check_number("weight", weight, weight > 0.0, "must be above 0")?;
        self.check_frame(frame)?;
        with_probabilities(record.log_odds, frame.reference, |of| {
            if sign < 0.0 {
                self.scored.check_removal(of, weight)?;
                for ((part, layout), value) in self.fields.iter_mut().zip(&frame.fields).zip(record.inputs) {
                    part.check_removal(&layout.bins, *value, weight)?;
                }
            }
            self.scored.fold(of, sign * weight);
            for ((part, layout), value) in self.fields.iter_mut().zip(&frame.fields).zip(record.inputs) {
                part.fold(&layout.bins, *value, sign * weight);
            }
            Ok(())
        })
    }

    fn fold_outcome(
        &mut self,
        frame: &Frame,
        record: &ScoredRecord,
        outcome: Outcome,
        weight: f64,
        sign: f64,
    ) -> Result<(), DriftError> {
        record.check(frame)?;
        check_number("weight", weight, weight > 0.0, "must be above 0")?;
        self.check_frame(frame)?;
        let categories = frame.categories.len();
        if outcome.category >= categories {
            return Err(DriftError::UnknownCategory { found: outcome.category, categories });
        }
        with_probabilities(record.log_odds, frame.reference, |of| {
            if sign < 0.0 {
                self.outcomes.check_removal(of, outcome, record.terms, weight)?;
                if let Some(full) = &mut self.full {
                    full.check_removal(frame, of, outcome.category, weight)?;
                }
            }
            self.outcomes.fold(of, outcome, record.terms, sign * weight);
            if let Some(full) = &mut self.full {
                full.fold(frame, of, record.log_odds, outcome.category, sign * weight);
            }
            self.clear_full_if_empty();
            Ok(())
        })
    }

    /// The cheap part of [`Summary::check`], for every record.
    fn check_frame(&self, frame: &Frame) -> Result<(), DriftError> {
        if self.outcomes.observed.len() != frame.categories.len() {
            return Err(DriftError::Shape { part: "categories" });
        }
        if self.outcomes.terms.len() != frame.terms {
            return Err(DriftError::Shape { part: "terms" });
        }
        let fields = self.fields.iter().zip(&frame.fields);
        if self.fields.len() != frame.fields.len()
            || fields.into_iter().any(|(part, layout)| part.bins.len() != layout.len())
        {
            return Err(DriftError::Shape { part: "fields" });
        }
        match &self.full {
            Some(full) if !full.fits(frame) => Err(DriftError::Shape { part: "full" }),
            _ => Ok(()),
        }
    }

    fn check_combine(&self, other: &Self, sign: f64) -> Result<(), DriftError> {
        if self.version != other.version {
            return Err(DriftError::SummaryVersion { found: other.version, supported: self.version });
        }
        if self.detail != other.detail || self.full.is_some() != other.full.is_some() {
            return Err(DriftError::Shape { part: "detail" });
        }
        if self.fields.len() != other.fields.len() {
            return Err(DriftError::Shape { part: "fields" });
        }
        self.scored.check_combine(&other.scored, sign)?;
        for (mine, theirs) in self.fields.iter().zip(&other.fields) {
            mine.check_combine(theirs, sign)?;
        }
        self.outcomes.check_combine(&other.outcomes, sign)?;
        match (&self.full, &other.full) {
            (Some(mine), Some(theirs)) => mine.check_combine(theirs, sign),
            _ => Ok(()),
        }
    }

    fn combine(&mut self, other: &Self, sign: f64) {
        self.scored.combine(&other.scored, sign);
        for (mine, theirs) in self.fields.iter_mut().zip(&other.fields) {
            mine.combine(theirs, sign);
        }
        self.outcomes.combine(&other.outcomes, sign);
        if let (Some(mine), Some(theirs)) = (&mut self.full, &other.full) {
            mine.combine(theirs, sign);
        }
        self.clear_full_if_empty();
    }

    /// What rounding leaves of sums over no records is nothing.
    fn clear_full_if_empty(&mut self) {
        if let Some(full) = &mut self.full
            && self.outcomes.total() == 0.0
        {
            full.clear();
        }
    }
}

/// What was observed for a record.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Outcome {
    pub(crate) category: usize,
    pub(crate) delay_hours: f64,
}

/// Index of an entry of a symmetric matrix kept as rows of its lower triangle.
#[inline]
pub(crate) fn lower(row: usize, column: usize) -> usize {
    let (row, column) = if row >= column { (row, column) } else { (column, row) };
    row * (row + 1) / 2 + column
}

/// Number of entries of the lower triangle with the diagonal.
pub(crate) fn lower_length(size: usize) -> usize {
    size * (size + 1) / 2
}

/// The probability bin of a value: a value equal to an edge belongs to the upper bin.
#[inline]
pub(crate) fn probability_bin(p: f64) -> usize {
    crate::frame::PROBABILITY_EDGES.partition_point(|edge| *edge <= p)
}
