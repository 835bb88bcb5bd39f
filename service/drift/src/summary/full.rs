//! The part that only full summaries hold: reliability bins, groups, and the sums for the full
//! calibration matrix.

use serde::{Deserialize, Serialize};

use super::outcomes::fold_variance;
use super::{lower_length, probability_bin};
use crate::error::DriftError;
use crate::frame::{Frame, PROBABILITY_BINS};
use crate::record::Probabilities;
use crate::sums::{Sums, check_counts, combine_counts, count, holds};

/// Number of categories up to which the sums for the full calibration matrix are kept.
pub const LARGEST_MATRIX: usize = 10;

/// The part of a full summary.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct FullPart {
    /// For each category and probability bin the records (J x 18).
    pub(crate) bin_records: Vec<f64>,
    /// Those of them whose outcome was the category.
    pub(crate) bin_observed: Vec<f64>,
    /// Sum of p over them.
    pub(crate) bin_probability: Sums,
    /// Sum of p (1 - p) over them.
    pub(crate) bin_variance: Sums,
    /// Observed categories in each group by one minus the reference probability (G x J).
    pub(crate) group_observed: Vec<f64>,
    /// Sum of p in each group.
    pub(crate) group_expected: Sums,
    /// Sum of diag(p) - p p' in each group (lower triangles).
    pub(crate) group_variance: Sums,
    /// Sums for the full calibration matrix, up to [`LARGEST_MATRIX`] categories.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub(crate) matrix: Option<MatrixPart>,
}

impl FullPart {
    pub(crate) fn new(frame: &Frame) -> Self {
        let categories = frame.categories.len();
        let groups = frame.decile_edges.len() + 1;
        let bins = categories * PROBABILITY_BINS;
        Self {
            bin_records: vec![0.0; bins],
            bin_observed: vec![0.0; bins],
            bin_probability: Sums::zeros(bins),
            bin_variance: Sums::zeros(bins),
            group_observed: vec![0.0; groups * categories],
            group_expected: Sums::zeros(groups * categories),
            group_variance: Sums::zeros(groups * lower_length(categories)),
            matrix: (categories <= LARGEST_MATRIX).then(|| MatrixPart::new(categories)),
        }
    }

    pub(crate) fn fits(&self, frame: &Frame) -> bool {
        let categories = frame.categories.len();
        self.group_observed.len() == (frame.decile_edges.len() + 1) * categories
            && self.bin_records.len() == categories * PROBABILITY_BINS
    }

    pub(crate) fn check_removal(
        &self,
        frame: &Frame,
        of: &Probabilities,
        y: usize,
        weight: f64,
    ) -> Result<(), DriftError> {
        let enough = holds(self.group_observed[group(frame, of) * of.p.len() + y], -weight)
            && of.p.iter().enumerate().all(|(category, p)| {
                let bin = category * PROBABILITY_BINS + probability_bin(*p);
                holds(self.bin_records[bin], -weight)
                    && (category != y || holds(self.bin_observed[bin], -weight))
            });
        if enough { Ok(()) } else { Err(DriftError::Negative { part: "full" }) }
    }

    pub(crate) fn fold(
        &mut self,
        frame: &Frame,
        of: &Probabilities,
        log_odds: &[f64],
        y: usize,
        weight: f64,
    ) {
        let categories = of.p.len();
        for (category, p) in of.p.iter().enumerate() {
            let bin = category * PROBABILITY_BINS + probability_bin(*p);
            count(&mut self.bin_records[bin], weight);
            if category == y {
                count(&mut self.bin_observed[bin], weight);
            }
            self.bin_probability.add(bin, weight * p);
            self.bin_variance.add(bin, weight * p * (1.0 - p));
        }
        let group = group(frame, of);
        count(&mut self.group_observed[group * categories + y], weight);
        self.group_expected.add_scaled(group * categories, of.p, weight);
        fold_variance(&mut self.group_variance, group * lower_length(categories), of.p, weight);
        if let Some(matrix) = &mut self.matrix {
            matrix.fold(frame, of, log_odds, y, weight);
        }
    }

    pub(crate) fn check_combine(&self, other: &Self, sign: f64) -> Result<(), DriftError> {
        let same = self.bin_probability.len() == other.bin_probability.len()
            && self.bin_variance.len() == other.bin_variance.len()
            && self.group_expected.len() == other.group_expected.len()
            && self.group_variance.len() == other.group_variance.len();
        let matrices = match (&self.matrix, &other.matrix) {
            (Some(mine), Some(theirs)) => mine.fits(theirs),
            (None, None) => true,
            _ => false,
        };
        if !(same && matrices) {
            return Err(DriftError::Shape { part: "full" });
        }
        check_counts(&self.bin_records, &other.bin_records, sign, "full.bin_records")?;
        check_counts(&self.bin_observed, &other.bin_observed, sign, "full.bin_observed")?;
        check_counts(&self.group_observed, &other.group_observed, sign, "full.group_observed")
    }

    pub(crate) fn combine(&mut self, other: &Self, sign: f64) {
        combine_counts(&mut self.bin_records, &other.bin_records, sign);
        combine_counts(&mut self.bin_observed, &other.bin_observed, sign);
        combine_counts(&mut self.group_observed, &other.group_observed, sign);
        self.bin_probability.combine(&other.bin_probability, sign);
        self.bin_variance.combine(&other.bin_variance, sign);
        self.group_expected.combine(&other.group_expected, sign);
        self.group_variance.combine(&other.group_variance, sign);
        if let (Some(mine), Some(theirs)) = (&mut self.matrix, &other.matrix) {
            mine.score.combine(&theirs.score, sign);
            mine.information.combine(&theirs.information, sign);
        }
    }

    pub(crate) fn clear(&mut self) {
        for sums in [
            &mut self.bin_probability,
            &mut self.bin_variance,
            &mut self.group_expected,
            &mut self.group_variance,
        ] {
            sums.clear();
        }
        if let Some(matrix) = &mut self.matrix {
            matrix.score.clear();
            matrix.information.clear();
        }
    }
}

/// The group of a record: a value equal to an edge belongs to the lower group.
fn group(frame: &Frame, of: &Probabilities) -> usize {
    let other = 1.0 - of.p[frame.reference];
    frame.decile_edges.partition_point(|edge| *edge < other)
}

/// Sums for the recalibration with a full matrix of slopes: with `g = (1, log-odds)` the score
/// `sum r_j g_m` and the information `sum (diag(p) - p p')_jk g_m g_n` over the categories but
/// the reference.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct MatrixPart {
    /// Score, (J-1) x J: row j of category j, first its intercept.
    pub(crate) score: Sums,
    /// Information: for each pair k <= j of categories the lower triangle over (m, n).
    pub(crate) information: Sums,
}

impl MatrixPart {
    fn new(categories: usize) -> Self {
        Self {
            score: Sums::zeros((categories - 1) * categories),
            information: Sums::zeros(lower_length(categories - 1) * lower_length(categories)),
        }
    }

    fn fits(&self, other: &Self) -> bool {
        self.score.len() == other.score.len() && self.information.len() == other.information.len()
    }

    fn fold(&mut self, frame: &Frame, of: &Probabilities, log_odds: &[f64], y: usize, weight: f64) {
        let categories = of.p.len();
        let mut basis = [1.0; LARGEST_MATRIX];
        basis[1..categories].copy_from_slice(log_odds);
        let basis = &basis[..categories];
        let mut products = [0.0; lower_length_of_largest()];
        let triangle = lower_length(categories);
        let mut at = 0;
        for (m, value) in basis.iter().enumerate() {
            for other in &basis[..=m] {
                products[at] = value * other;
                at += 1;
            }
        }
        let mut pair = 0;
        for (row, j) in frame.compared().enumerate() {
            let residual = f64::from(u8::from(j == y)) - of.p[j];
            self.score.add_scaled(row * categories, basis, weight * residual);
            for k in frame.compared().take(row + 1) {
                let variance = if j == k { of.p[j] * (1.0 - of.p[j]) } else { -of.p[j] * of.p[k] };
                self.information.add_scaled(pair * triangle, &products[..triangle], weight * variance);
                pair += 1;
            }
        }
    }
}

const fn lower_length_of_largest() -> usize {
    LARGEST_MATRIX * (LARGEST_MATRIX + 1) / 2
}
