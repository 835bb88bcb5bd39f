//! Shift of the predicted mix, which needs no outcomes, and what it says about the categories.

use faer::Mat;
use serde::Serialize;

use crate::frame::Frame;
use crate::quadratic::{Spectrum, quadratic};
use crate::statistic::Statistic;
use crate::summary::{Summary, lower};
use crate::tails::NORMAL_975;

/// Scored records below which nothing is concluded.
const FEWEST_RECORDS: f64 = 50.0;
/// Scored records, p-value and ratio of shares from which the predicted mix has moved.
const FEWEST_FOR_MOVE: f64 = 200.0;
const MOVED_P: f64 = 1e-5;
const MOVED_LOG_RATIO: f64 = 0.2;
/// Condition number beyond which predictions do not identify the shares of the categories.
const LARGEST_CONDITION: f64 = 1e4;

/// The predicted mix of the scored records.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct PredictedMix {
    /// Each category, model order.
    pub categories: Vec<PredictedShare>,
    /// Whether the mean prediction differs from that over the fit. It says that the records are of
    /// another kind, never that the model is wrong.
    pub test: Statistic,
    /// Whether it differs surely and by enough to matter.
    pub moved: bool,
    /// Mean entropy of the predictions: the log-loss that the model promises, nats per record.
    pub expected_log_loss: Option<f64>,
    /// What the shares of the categories are if only they changed.
    pub if_only_shares_changed: Option<Vec<ShareEstimate>>,
}

/// Predicted share of a category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct PredictedShare {
    /// The category.
    pub category: String,
    /// Mean probability over the scored records.
    pub share: Option<f64>,
    /// Mean probability over the rows of the fit.
    pub training_share: Option<f64>,
}

/// Share of a category, estimated.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ShareEstimate {
    /// The category.
    pub category: String,
    /// Its estimated share.
    pub share: f64,
    /// Standard error, with the training uncertainty of the model.
    pub standard_error: f64,
    /// 95 % interval, cut at 0 and 1.
    pub interval: [f64; 2],
}

/// The predicted mix of the scored records.
pub fn predicted_mix(frame: &Frame, summary: &Summary) -> PredictedMix {
    let n = summary.scored();
    let means = mean_probabilities(summary);
    let baseline = frame.baseline.as_ref();
    let categories = frame
        .categories
        .iter()
        .enumerate()
        .map(|(category, name)| PredictedShare {
            category: name.clone(),
            share: means.as_ref().map(|means| means[category]),
            training_share: baseline.map(|baseline| baseline.mean_probability[category]),
        })
        .collect();
    let test = predicted_mix_test(frame, summary).unwrap_or_else(|| Statistic::unavailable(n));
    let largest = means.as_ref().zip(baseline).map_or(0.0, |(means, baseline)| {
        let ratios = means.iter().zip(&baseline.mean_probability).map(|(now, then)| (now / then).ln().abs());
        ratios.fold(0.0, f64::max)
    });
    let moved =
        n >= FEWEST_FOR_MOVE && test.valid_p().is_some_and(|p| p < MOVED_P) && largest >= MOVED_LOG_RATIO;
    PredictedMix {
        categories,
        test,
        moved,
        expected_log_loss: (n > 0.0).then(|| summary.scored.entropy.value() / n),
        if_only_shares_changed: shares_from_predictions(frame, summary),
    }
}

fn mean_probabilities(summary: &Summary) -> Option<Vec<f64>> {
    let n = summary.scored();
    (n > 0.0).then(|| summary.scored.probability.values().iter().map(|sum| sum / n).collect())
}

/// The score test of a label shift: distance of the mean prediction from that of the fit in the
/// covariance of the fit, which holds its size where the covariance of a small period does not.
fn predicted_mix_test(frame: &Frame, summary: &Summary) -> Option<Statistic> {
    let baseline = frame.baseline.as_ref()?;
    let means = mean_probabilities(summary)?;
    let n = summary.scored();
    let categories = means.len();
    let scale = 1.0 / n + 1.0 / baseline.cases;
    let distance: Vec<f64> =
        frame.compared().map(|category| means[category] - baseline.mean_probability[category]).collect();
    let covariance: Vec<f64> = frame
        .compared()
        .flat_map(|row| frame.compared().map(move |column| row * categories + column))
        .map(|entry| baseline.probability_covariance[entry] * scale)
        .collect();
    let form = quadratic(&distance, &covariance);
    Some(Statistic::chi_square(form.value, form.rank, Some(1.0), n, n >= FEWEST_RECORDS))
}

/// Shares of the categories under label shift (within a category the fields are distributed as in
/// the fit) and a calibrated model: `M^-1` times the mean prediction, with `M = E[p p'] diag(1/mix)`
/// over the fit (the moment estimate of Saerens et al. 2002 and Lipton et al. 2018).
///
/// `None` where predictions do not identify the shares: a negative share, or a condition number of
/// M above 10 000.
pub fn shares_from_predictions(frame: &Frame, summary: &Summary) -> Option<Vec<ShareEstimate>> {
    let baseline = frame.baseline.as_ref()?;
    let means = mean_probabilities(summary)?;
    let n = summary.scored();
    let size = means.len();
    let fitted = &baseline.mean_probability;
    let second: Vec<f64> = (0..size * size)
        .map(|at| baseline.probability_covariance[at] + fitted[at / size] * fitted[at % size])
        .collect();
    let matrix = Mat::from_fn(size, size, |row, column| second[row * size + column] / baseline.mix[column]);
    let singular = matrix.singular_values().ok()?;
    let (largest, smallest) = (singular.first()?, singular.last()?);
    if largest.is_nan() || *largest > LARGEST_CONDITION * smallest {
        return None;
    }
    let inverse = Spectrum::new(&second, size).inverse();
    let shares: Vec<f64> = (0..size)
        .map(|row| baseline.mix[row] * (0..size).map(|k| inverse[row * size + k] * means[k]).sum::<f64>())
        .collect();
    if shares.iter().any(|share| *share < 0.0) {
        return None;
    }
    let training = 1.0 + n / baseline.cases;
    let variance = |category: usize| {
        let row = &inverse[category * size..(category + 1) * size];
        let mut sum = 0.0;
        for a in 0..size {
            for b in 0..size {
                let live = summary.scored.products.value(lower(a, b)) / n - means[a] * means[b];
                sum += row[a] * live * row[b];
            }
        }
        baseline.mix[category].powi(2) * sum.max(0.0) / n * training
    };
    let estimate = |(category, name): (usize, &String)| {
        let share = shares[category];
        let standard_error = variance(category).sqrt();
        let half = NORMAL_975 * standard_error;
        let interval = [(share - half).max(0.0), (share + half).min(1.0)];
        ShareEstimate { category: name.clone(), share, standard_error, interval }
    };
    Some(frame.categories.iter().enumerate().map(estimate).collect())
}
