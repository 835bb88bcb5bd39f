//! Log-loss and Brier score: what they are, what the model promised, and what a model without
//! fields would have reached.

use kilter_model::Holdout;
use serde::Serialize;

use crate::frame::Frame;
use crate::statistic::{Statistic, Status};
use crate::summary::Summary;
use crate::tails::count_mid_p;
use crate::training::TrainingUncertainty;

/// Records with an outcome below which losses are not judged.
const FEWEST_RECORDS: f64 = 100.0;
/// Variance of the total log-loss below which it is not judged: a confident model has many records
/// and yet little in them that could have come out otherwise.
pub(crate) const FEWEST_LOSS_VARIANCE: f64 = 20.0;
/// The same for the total Brier score.
const FEWEST_BRIER_VARIANCE: f64 = 1.5;
/// The same for the comparison with the holdout, and its number of records.
const FEWEST_HOLDOUT_VARIANCE: f64 = 60.0;
const FEWEST_HOLDOUT_RECORDS: f64 = 200.0;

/// Log-loss of the records with an outcome, nats per record.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct LogLoss {
    /// Mean log-loss.
    pub mean: Option<f64>,
    /// Mean log-loss that the model itself promised: the mean entropy.
    pub expected: Option<f64>,
    /// Mean log-loss on the rows of the fit.
    pub training: Option<f64>,
    /// Mean log-loss of the mix of the fit on the same records.
    pub null: Option<f64>,
    /// `1 - mean / null`; below 0 the model does worse than the mix of the fit.
    pub skill: Option<f64>,
    /// Standard error of the skill (delta method).
    pub skill_standard_error: Option<f64>,
    /// Log-loss above what the model promised, given the slope to be expected of a fit. It is minus
    /// the score test of a common slope: above 0 the probabilities are too extreme.
    pub excess: Statistic,
    /// Mean log-loss of the outcomes of each category.
    pub by_category: Vec<Option<f64>>,
    /// Against the holdout of the fit.
    pub against_holdout: Option<AgainstHoldout>,
    /// Outcomes of categories that the model gave less than 0.001.
    pub surprises: Surprises,
}

/// Difference of the mean log-loss to that on the holdout of the fit, taken apart.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct AgainstHoldout {
    /// Mean log-loss on the holdout.
    pub holdout: f64,
    /// Part of the difference that the model foresaw: records harder (above 0) or easier.
    pub harder: f64,
    /// Part that it did not: the model has become worse (above 0) or better.
    pub worse: f64,
    /// Test of the second part, the only one that the model is to be blamed for.
    pub test: Statistic,
}

/// Outcomes of categories that the model all but ruled out. Swapped labels and broken joins show
/// here first.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Surprises {
    /// How many there were.
    pub observed: f64,
    /// How many the model promised.
    pub expected: f64,
    /// Upper mid-p of the count.
    pub test: Statistic,
}

/// Brier score of the records with an outcome: squared distances summed over the categories.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Brier {
    /// Mean Brier score.
    pub mean: Option<f64>,
    /// Mean Brier score that the model itself promised.
    pub expected: Option<f64>,
    /// The difference (Spiegelhalter 1986, for several categories).
    pub excess: Statistic,
}

/// Log-loss of the records with an outcome.
pub fn log_loss(frame: &Frame, summary: &Summary) -> LogLoss {
    let part = &summary.outcomes;
    let n = part.total();
    let losses = part.loss.values();
    let mean_of = |value: f64| (n > 0.0).then(|| value / n);
    let loss: f64 = losses.iter().sum();
    let variance = part.loss_variance.value();
    let entropy = part.entropy.value();
    let centre = (frame.expected_slope() - 1.0) * variance;
    let phi = TrainingUncertainty::new(frame, summary).phi;
    let enough = n >= FEWEST_RECORDS && variance >= FEWEST_LOSS_VARIANCE;
    let null = frame.baseline.as_ref().and_then(|baseline| Null::new(summary, &baseline.mix));
    LogLoss {
        mean: mean_of(loss),
        expected: mean_of(entropy),
        training: frame.baseline.as_ref().map(|baseline| baseline.log_loss),
        null: null.as_ref().map(|null| null.mean),
        skill: null.as_ref().map(|null| 1.0 - loss / n / null.mean),
        skill_standard_error: null.as_ref().and_then(|null| null.skill_standard_error(summary)),
        excess: Statistic::normal((loss - entropy + centre) / variance.sqrt(), phi, n, enough),
        by_category: part
            .observed
            .iter()
            .zip(&losses)
            .map(|(count, loss)| (*count > 0.0).then(|| loss / count))
            .collect(),
        against_holdout: frame.holdout.as_ref().and_then(|holdout| against_holdout(summary, holdout)),
        surprises: surprises(summary, phi),
    }
}

/// Brier score of the records with an outcome.
pub fn brier(frame: &Frame, summary: &Summary) -> Brier {
    let part = &summary.outcomes;
    let n = part.total();
    let mean_of = |value: f64| (n > 0.0).then(|| value / n);
    let (score, expected) = (part.brier.value(), part.brier_expected.value());
    let variance = part.brier_variance.value();
    let phi = TrainingUncertainty::new(frame, summary).phi;
    let enough = n >= FEWEST_RECORDS && variance >= FEWEST_BRIER_VARIANCE;
    let excess = if variance > 0.0 {
        Statistic::normal((score - expected) / variance.sqrt(), phi, n, enough)
    } else {
        Statistic::unavailable(n)
    };
    Brier { mean: mean_of(score), expected: mean_of(expected), excess }
}

/// The mix of the fit as a model of its own, on the same records.
struct Null {
    n: f64,
    /// Mean log-loss.
    mean: f64,
    /// Sum of its squares.
    squared: f64,
    /// Sum of its products with the log-loss of the model.
    products: f64,
}

impl Null {
    /// `None` without outcomes, or where a category came that the fit never saw.
    fn new(summary: &Summary, mix: &[f64]) -> Option<Self> {
        let part = &summary.outcomes;
        let n = part.total();
        let (mut sum, mut squared, mut products) = (0.0, 0.0, 0.0);
        for (category, count) in part.observed.iter().enumerate().filter(|(_, count)| **count > 0.0) {
            let loss = -mix[category].ln();
            sum += count * loss;
            squared += count * loss * loss;
            products += part.loss.value(category) * loss;
        }
        (n > 0.0 && sum.is_finite()).then(|| Self { n, mean: sum / n, squared, products })
    }

    fn skill_standard_error(&self, summary: &Summary) -> Option<f64> {
        let part = &summary.outcomes;
        let n = self.n;
        if n < 2.0 {
            return None;
        }
        let mean = part.loss.values().iter().sum::<f64>() / n;
        let variance = (part.loss_squared.value() - n * mean * mean) / (n - 1.0);
        let null_variance = (self.squared - n * self.mean * self.mean) / (n - 1.0);
        let covariance = (self.products - n * mean * self.mean) / (n - 1.0);
        let ratio = mean / self.mean;
        let of_ratio = variance - 2.0 * ratio * covariance + ratio * ratio * null_variance;
        Some((of_ratio.max(0.0) / n).sqrt() / self.mean)
    }
}

fn against_holdout(summary: &Summary, holdout: &Holdout) -> Option<AgainstHoldout> {
    let part = &summary.outcomes;
    let n = part.total();
    if n == 0.0 || holdout.weight <= 0.0 {
        return None;
    }
    let loss = part.loss.values().iter().sum::<f64>() / n;
    let entropy = part.entropy.value() / n;
    let variance = part.loss_variance.value();
    let harder = entropy - holdout.log_loss_expected;
    let worse = (loss - entropy) - (holdout.log_loss - holdout.log_loss_expected);
    let z = worse / (variance / (n * n) + holdout.excess_variance / holdout.weight).sqrt();
    let enough = n >= FEWEST_HOLDOUT_RECORDS && variance >= FEWEST_HOLDOUT_VARIANCE;
    // The training error of the model is in both figures and cancels.
    let test = Statistic::normal(z, Some(1.0), n, enough);
    Some(AgainstHoldout { holdout: holdout.log_loss, harder, worse, test })
}

fn surprises(summary: &Summary, phi: Option<f64>) -> Surprises {
    let part = &summary.outcomes;
    let n = part.total();
    let (observed, expected) = (part.surprises, part.surprises_expected.value());
    let upper = |phi: f64| count_mid_p(observed, expected, phi).map(|mid_p| mid_p.upper);
    let status = match (phi, expected > 0.0) {
        (_, false) => Status::NotAvailable,
        (None, true) => Status::TrainingSizeUnknown,
        (Some(_), true) if n < FEWEST_RECORDS => Status::TooFew,
        (Some(_), true) => Status::Valid,
    };
    let test = Statistic {
        statistic: (n > 0.0).then_some(observed),
        df: None,
        p: phi.and_then(upper),
        p_without_phi: phi.and_then(|_| upper(1.0)),
        n,
        status,
    };
    Surprises { observed, expected, test }
}
