//! Intervals for the probabilities of a record.

use kilter_model::{Design, DesignError, ModelFile};

use super::{InferenceError, Measure};

/// How sure one probability is.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ProbabilityInterval {
    /// The probability.
    pub probability: f64,
    /// Standard error of its log-odds, `ln(p / (1 - p))`.
    pub log_odds_error: f64,
    /// Ends of the interval.
    pub interval: [f64; 2],
}

/// Computes intervals for the probabilities of a model, from its joint covariance.
///
/// The interval of each category is `expit(theta -+ z s)` with `theta = ln(p / (1 - p))` and s its
/// standard error by the delta method, so it lies between 0 and 1. Intervals hold one by one: they
/// neither hold all at once nor add up to 1.
#[derive(Debug, Clone)]
pub struct ProbabilityIntervals {
    design: Design,
    reference: usize,
    /// Coefficients of the categories but the reference, in model order.
    coefficients: Vec<Vec<f64>>,
    /// Covariance, all rows and columns.
    covariance: Vec<f64>,
    quantile: f64,
}

/// Why no intervals can be computed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum IntervalError {
    /// The model file has no covariance.
    #[error("the model file has no covariance, so nothing is known of the error of its probabilities")]
    NoCovariance,
    /// Coefficients or covariance do not fit the terms.
    #[error("coefficients or covariance do not have the size of the terms; check the model file")]
    Size,
    /// The fields make no design.
    #[error(transparent)]
    Design(#[from] DesignError),
    /// The level of confidence is none.
    #[error(transparent)]
    Level(#[from] InferenceError),
}

impl ProbabilityIntervals {
    /// Intervals of a confidence level for a model file.
    ///
    /// # Errors
    /// [`IntervalError`] where the file has no covariance or does not agree with itself, or the
    /// level is not between 0 and 1.
    pub fn new(model: &ModelFile, level: f64) -> Result<Self, IntervalError> {
        if !(level > 0.0 && level < 1.0) {
            return Err(InferenceError::Level(level).into());
        }
        let design = Design::of_model(model)?;
        let joint = model.covariance.as_ref().ok_or(IntervalError::NoCovariance)?;
        let of = |category| model.coefficients.get(category).cloned();
        let coefficients: Option<Vec<Vec<f64>>> = model.compared_categories().map(of).collect();
        let coefficients = coefficients.ok_or(IntervalError::Size)?;
        let terms = design.terms().len();
        let size = terms * coefficients.len();
        if coefficients.iter().any(|row| row.len() != terms) || joint.lower.len() != size * (size + 1) / 2 {
            return Err(IntervalError::Size);
        }
        let covariance = (0..size * size).map(|index| joint.at(index / size, index % size)).collect();
        let reference = model.reference_index();
        let quantile = Measure::new(model, level).quantile;
        Ok(Self { design, reference, coefficients, covariance, quantile })
    }

    /// The probabilities of one record and their intervals, in model order.
    ///
    /// `values` are the record's values as they are used, one per field (see
    /// [`kilter_model::Coded::values`]).
    pub fn of_record(&self, values: &[f64]) -> Vec<ProbabilityInterval> {
        let (mut dense, mut x) = (vec![0.0; self.design.dense().len()], vec![0.0; self.design.terms().len()]);
        self.design.fill_row(values, &mut dense, &mut x);
        let log_odds: Vec<f64> =
            self.coefficients.iter().map(|b| b.iter().zip(&x).map(|(b, x)| b * x).sum()).collect();
        let mut probabilities = vec![0.0; log_odds.len() + 1];
        kilter_model::probabilities_from_log_odds(&log_odds, self.reference, &mut probabilities);
        let variances = self.log_odds_covariance(&x);
        (0..probabilities.len()).map(|category| self.interval(category, &probabilities, &variances)).collect()
    }

    /// Covariance of the log-odds against the reference: `x' V_rs x`.
    fn log_odds_covariance(&self, x: &[f64]) -> Vec<f64> {
        let (m, p) = (self.coefficients.len(), x.len());
        let present: Vec<usize> = (0..p).filter(|&term| x[term] != 0.0).collect();
        let mut variances = vec![0.0; m * m];
        for r in 0..m {
            for s in 0..=r {
                let mut sum = 0.0;
                for &a in &present {
                    let row = &self.covariance[(r * p + a) * m * p + s * p..][..p];
                    sum += x[a] * present.iter().map(|&b| row[b] * x[b]).sum::<f64>();
                }
                variances[r * m + s] = sum;
                variances[s * m + r] = sum;
            }
        }
        variances
    }

    fn interval(&self, category: usize, probabilities: &[f64], variances: &[f64]) -> ProbabilityInterval {
        let m = self.coefficients.len();
        let others: f64 =
            probabilities.iter().enumerate().filter(|(other, _)| *other != category).map(|(_, p)| p).sum();
        let compared = || (0..=m).filter(|&other| other != self.reference);
        // Derivative of the log-odds of this category by those of each other against the reference.
        let gradient: Vec<f64> = compared()
            .map(|other| if other == category { 1.0 } else { -probabilities[other] / others })
            .collect();
        let mut variance = 0.0;
        for r in 0..m {
            for s in 0..m {
                variance += gradient[r] * gradient[s] * variances[r * m + s];
            }
        }
        let log_odds_error = variance.max(0.0).sqrt();
        let log_odds = probabilities[category].ln() - others.ln();
        let end = |sign: f64| 1.0 / (1.0 + (-(log_odds + sign * self.quantile * log_odds_error)).exp());
        ProbabilityInterval {
            probability: probabilities[category],
            log_odds_error,
            interval: [end(-1.0), end(1.0)],
        }
    }
}
