//! The part of a summary that needs no outcomes: what was predicted.

use serde::{Deserialize, Serialize};

use super::{lower_length, probability_bin};
use crate::error::DriftError;
use crate::frame::{Frame, PROBABILITY_BINS};
use crate::record::Probabilities;
use crate::sums::{Sum, Sums, check_counts, combine_counts, count, holds};

/// Sums over scored records.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct ScoredPart {
    /// Number of records.
    pub(crate) count: f64,
    /// Sum of p (J).
    pub(crate) probability: Sums,
    /// Sum of p p' (lower triangle).
    pub(crate) products: Sums,
    /// Sum of the entropies.
    pub(crate) entropy: Sum,
    /// For each category the records in each probability bin (J x 18).
    pub(crate) histogram: Vec<f64>,
}

impl ScoredPart {
    pub(crate) fn new(frame: &Frame) -> Self {
        let categories = frame.categories.len();
        Self {
            count: 0.0,
            probability: Sums::zeros(categories),
            products: Sums::zeros(lower_length(categories)),
            entropy: Sum::default(),
            histogram: vec![0.0; categories * PROBABILITY_BINS],
        }
    }

    pub(crate) fn check_removal(&self, of: &Probabilities, weight: f64) -> Result<(), DriftError> {
        let enough = holds(self.count, -weight)
            && of.p.iter().enumerate().all(|(category, p)| {
                holds(self.histogram[category * PROBABILITY_BINS + probability_bin(*p)], -weight)
            });
        if enough { Ok(()) } else { Err(DriftError::Negative { part: "scored" }) }
    }

    pub(crate) fn fold(&mut self, of: &Probabilities, weight: f64) {
        count(&mut self.count, weight);
        let mut row = 0;
        for (category, p) in of.p.iter().enumerate() {
            let bin = category * PROBABILITY_BINS + probability_bin(*p);
            count(&mut self.histogram[bin], weight);
            self.products.add_scaled(row, &of.p[..=category], weight * p);
            row += category + 1;
        }
        self.probability.add_scaled(0, of.p, weight);
        self.entropy.add(weight * of.entropy);
        self.clear_if_empty();
    }

    pub(crate) fn check_combine(&self, other: &Self, sign: f64) -> Result<(), DriftError> {
        if self.probability.len() != other.probability.len() || self.products.len() != other.products.len() {
            return Err(DriftError::Shape { part: "categories" });
        }
        check_counts(&[self.count], &[other.count], sign, "scored.count")?;
        check_counts(&self.histogram, &other.histogram, sign, "scored.histogram")
    }

    pub(crate) fn combine(&mut self, other: &Self, sign: f64) {
        count(&mut self.count, sign * other.count);
        self.probability.combine(&other.probability, sign);
        self.products.combine(&other.products, sign);
        self.entropy.combine(other.entropy, sign);
        combine_counts(&mut self.histogram, &other.histogram, sign);
        self.clear_if_empty();
    }

    /// What rounding leaves of sums over no records is nothing.
    fn clear_if_empty(&mut self) {
        if self.count == 0.0 {
            self.probability.clear();
            self.products.clear();
            self.entropy = Sum::default();
        }
    }
}
