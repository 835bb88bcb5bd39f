//! The part of a summary that needs outcomes: what was observed against what was promised.

use serde::{Deserialize, Serialize};

use super::{Outcome, lower_length};
use crate::error::DriftError;
use crate::frame::Frame;
use crate::record::Probabilities;
use crate::sums::{Sum, Sums, check_counts, combine_counts, count, holds};

/// Upper edges of the delay bins, in hours; a delay equal to an edge belongs to its bin.
pub const DELAY_EDGES_HOURS: [f64; 24] = [
    1.0,
    3.0,
    6.0,
    12.0,
    24.0,
    48.0,
    72.0,
    96.0,
    120.0,
    144.0,
    168.0,
    240.0,
    336.0,
    504.0,
    720.0,
    1080.0,
    1440.0,
    2160.0,
    2880.0,
    4320.0,
    5760.0,
    8640.0,
    17520.0,
    f64::INFINITY,
];

/// Probability below which an observed category is a surprise.
const SURPRISE: f64 = 0.001;

/// Sums over records with an outcome y. `r = e(y) - p` is the residual, `h` the entropy, `l` the
/// log-loss.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub(crate) struct OutcomePart {
    /// Observed categories O (J).
    pub(crate) observed: Vec<f64>,
    /// Sum of p (J).
    pub(crate) expected: Sums,
    /// Sum of diag(p) - p p' (lower triangle).
    pub(crate) variance: Sums,
    /// Sum of l over the outcomes of each category (J).
    pub(crate) loss: Sums,
    /// Sum of l^2.
    pub(crate) loss_squared: Sum,
    /// Sum of h.
    pub(crate) entropy: Sum,
    /// Sum of the variance of l under the model: sum_j p (log p + h)^2.
    pub(crate) loss_variance: Sum,
    /// Sum of the covariance of 1{y=j} and log p_y under the model: p (log p + h) (J).
    pub(crate) loss_covariance: Sums,
    /// Sum of (l - h)^2.
    pub(crate) excess_squared: Sum,
    /// Sum of the Brier scores.
    pub(crate) brier: Sum,
    /// Their sum as the model expects it.
    pub(crate) brier_expected: Sum,
    /// Sum of their variances under the model.
    pub(crate) brier_variance: Sum,
    /// Outcomes of categories whose probability was below 0.001.
    pub(crate) surprises: f64,
    /// Their number as the model expects it.
    pub(crate) surprises_expected: Sum,
    /// Records that came with their row of terms.
    pub(crate) with_terms: f64,
    /// Sum of the rows of terms (K).
    pub(crate) terms: Sums,
    /// Outcomes of each category in each delay bin (J x 24).
    pub(crate) delays: Vec<f64>,
}

impl OutcomePart {
    pub(crate) fn new(frame: &Frame) -> Self {
        let categories = frame.categories.len();
        Self {
            observed: vec![0.0; categories],
            expected: Sums::zeros(categories),
            variance: Sums::zeros(lower_length(categories)),
            loss: Sums::zeros(categories),
            loss_squared: Sum::default(),
            entropy: Sum::default(),
            loss_variance: Sum::default(),
            loss_covariance: Sums::zeros(categories),
            excess_squared: Sum::default(),
            brier: Sum::default(),
            brier_expected: Sum::default(),
            brier_variance: Sum::default(),
            surprises: 0.0,
            surprises_expected: Sum::default(),
            with_terms: 0.0,
            terms: Sums::zeros(frame.terms),
            delays: vec![0.0; categories * DELAY_EDGES_HOURS.len()],
        }
    }

    /// Number of records with an outcome.
    pub(crate) fn total(&self) -> f64 {
        self.observed.iter().sum()
    }

    pub(crate) fn check_removal(
        &self,
        of: &Probabilities,
        outcome: Outcome,
        terms: &[f64],
        weight: f64,
    ) -> Result<(), DriftError> {
        let enough = holds(self.observed[outcome.category], -weight)
            && delay_bin(outcome).is_none_or(|bin| holds(self.delays[bin], -weight))
            && (!is_surprise(of, outcome.category) || holds(self.surprises, -weight))
            && (terms.is_empty() || holds(self.with_terms, -weight));
        if enough { Ok(()) } else { Err(DriftError::Negative { part: "outcomes" }) }
    }

    pub(crate) fn fold(&mut self, of: &Probabilities, outcome: Outcome, terms: &[f64], weight: f64) {
        let y = outcome.category;
        count(&mut self.observed[y], weight);
        if let Some(bin) = delay_bin(outcome) {
            count(&mut self.delays[bin], weight);
        }
        if is_surprise(of, y) {
            count(&mut self.surprises, weight);
        }
        self.expected.add_scaled(0, of.p, weight);
        fold_variance(&mut self.variance, 0, of.p, weight);
        self.fold_loss(of, y, weight);
        self.fold_brier(of, y, weight);
        if !terms.is_empty() {
            count(&mut self.with_terms, weight);
            self.terms.add_scaled(0, terms, weight);
        }
        self.clear_if_empty();
    }

    fn fold_loss(&mut self, of: &Probabilities, y: usize, weight: f64) {
        let loss = -of.log_p[y];
        let excess = loss - of.entropy;
        let mut variance = 0.0;
        let mut surprises = 0.0;
        for (category, (p, log_p)) in of.p.iter().zip(of.log_p).enumerate() {
            let deviation = log_p + of.entropy;
            let covariance = p * deviation;
            variance += covariance * deviation;
            self.loss_covariance.add(category, weight * covariance);
            if *p < SURPRISE {
                surprises += p;
            }
        }
        self.loss.add(y, weight * loss);
        self.loss_squared.add(weight * loss * loss);
        self.entropy.add(weight * of.entropy);
        self.loss_variance.add(weight * variance);
        self.excess_squared.add(weight * excess * excess);
        self.surprises_expected.add(weight * surprises);
    }

    fn fold_brier(&mut self, of: &Probabilities, y: usize, weight: f64) {
        let mut squares = 0.0;
        let mut cubes = 0.0;
        for p in of.p {
            squares += p * p;
            cubes += p * p * p;
        }
        self.brier.add(weight * (1.0 - 2.0 * of.p[y] + squares));
        self.brier_expected.add(weight * (1.0 - squares));
        self.brier_variance.add(weight * 4.0 * (cubes - squares * squares));
    }

    pub(crate) fn check_combine(&self, other: &Self, sign: f64) -> Result<(), DriftError> {
        for (part, mine, theirs) in [
            ("categories", &self.expected, &other.expected),
            ("categories", &self.variance, &other.variance),
            ("categories", &self.loss, &other.loss),
            ("categories", &self.loss_covariance, &other.loss_covariance),
            ("terms", &self.terms, &other.terms),
        ] {
            if mine.len() != theirs.len() {
                return Err(DriftError::Shape { part });
            }
        }
        check_counts(&self.observed, &other.observed, sign, "outcomes.observed")?;
        check_counts(&self.delays, &other.delays, sign, "outcomes.delays")?;
        let mine = [self.surprises, self.with_terms];
        check_counts(&mine, &[other.surprises, other.with_terms], sign, "outcomes")
    }

    pub(crate) fn combine(&mut self, other: &Self, sign: f64) {
        combine_counts(&mut self.observed, &other.observed, sign);
        combine_counts(&mut self.delays, &other.delays, sign);
        count(&mut self.surprises, sign * other.surprises);
        count(&mut self.with_terms, sign * other.with_terms);
        self.expected.combine(&other.expected, sign);
        self.variance.combine(&other.variance, sign);
        self.loss.combine(&other.loss, sign);
        self.loss_covariance.combine(&other.loss_covariance, sign);
        self.terms.combine(&other.terms, sign);
        self.loss_squared.combine(other.loss_squared, sign);
        self.entropy.combine(other.entropy, sign);
        self.loss_variance.combine(other.loss_variance, sign);
        self.excess_squared.combine(other.excess_squared, sign);
        self.brier.combine(other.brier, sign);
        self.brier_expected.combine(other.brier_expected, sign);
        self.brier_variance.combine(other.brier_variance, sign);
        self.surprises_expected.combine(other.surprises_expected, sign);
        self.clear_if_empty();
    }

    /// What rounding leaves of sums over no records is nothing.
    fn clear_if_empty(&mut self) {
        if self.total() > 0.0 {
            return;
        }
        for sums in [
            &mut self.expected,
            &mut self.variance,
            &mut self.loss,
            &mut self.loss_covariance,
            &mut self.terms,
        ] {
            sums.clear();
        }
        for sum in [
            &mut self.loss_squared,
            &mut self.entropy,
            &mut self.loss_variance,
            &mut self.excess_squared,
            &mut self.brier,
            &mut self.brier_expected,
            &mut self.brier_variance,
            &mut self.surprises_expected,
        ] {
            *sum = Sum::default();
        }
    }
}

fn is_surprise(of: &Probabilities, category: usize) -> bool {
    of.p[category] < SURPRISE
}

fn delay_bin(outcome: Outcome) -> Option<usize> {
    let bins = DELAY_EDGES_HOURS.len();
    if outcome.delay_hours.is_nan() {
        return None;
    }
    let bin = DELAY_EDGES_HOURS.partition_point(|edge| *edge < outcome.delay_hours);
    Some(outcome.category * bins + bin)
}

/// Adds `weight (diag(p) - p p')` to the lower triangle that begins at `start`.
pub(super) fn fold_variance(sums: &mut Sums, start: usize, p: &[f64], weight: f64) {
    let mut row = start;
    for (category, value) in p.iter().enumerate() {
        sums.add_scaled(row, &p[..category], -weight * value);
        sums.add(row + category, weight * value * (1.0 - value));
        row += category + 1;
    }
}
