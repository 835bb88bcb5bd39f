//! Training uncertainty: a model is estimated, so its residuals scatter more than its own
//! probabilities say.

use serde::Serialize;

use crate::frame::Frame;
use crate::quadratic::Spectrum;
use crate::summary::{Summary, lower};

/// How much the training uncertainty of the model inflates score statistics.
///
/// Without drift and with records like those of the fit, the sum of the residuals of n records has
/// `1 + n/N` times the variance that the probabilities give it, in every direction of the model's
/// own score equations. Where the records have moved by a squared Mahalanobis distance M2 in the
/// terms, the factor is `1 + (n/N)(1 + M2)`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct TrainingUncertainty {
    /// Training cases N; absent where the model file has no baseline.
    pub training_cases: Option<f64>,
    /// The factor phi by which chi-square statistics are divided; absent without N.
    pub phi: Option<f64>,
    /// M2: squared distance of the mean terms from those of the fit, in units of their spread,
    /// less what chance gives; absent where the terms are not at hand.
    pub moved: Option<f64>,
}

impl TrainingUncertainty {
    /// Of the records with an outcome in a summary.
    pub fn new(frame: &Frame, summary: &Summary) -> Self {
        let n = summary.outcomes();
        let training_cases = frame.training_cases();
        let moved = squared_distance(frame, summary);
        let phi = training_cases.map(|cases| 1.0 + n / cases * (1.0 + moved.unwrap_or(0.0)));
        Self { training_cases, phi, moved }
    }
}

/// `max(0, d' S^- d - rank (1/n + 1/N))` for the distance d of the mean terms from those of the fit
/// and the covariance S of the terms in the fit.
fn squared_distance(frame: &Frame, summary: &Summary) -> Option<f64> {
    let baseline = frame.baseline.as_ref()?;
    let n = summary.outcomes.with_terms;
    if n == 0.0 || baseline.term_means.is_empty() {
        return None;
    }
    let size = frame.terms;
    let means = summary.outcomes.terms.values();
    let distance: Vec<f64> =
        means.iter().zip(&baseline.term_means).map(|(sum, mean)| sum / n - mean).collect();
    let covariance: Vec<f64> =
        (0..size * size).map(|at| baseline.term_covariance[lower(at / size, at % size)]).collect();
    let form = Spectrum::new(&covariance, size).form(&distance);
    let chance = form.rank as f64 * (1.0 / n + 1.0 / baseline.cases);
    Some((form.value - chance).max(0.0))
}
