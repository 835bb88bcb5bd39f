//! Shares of the categories by maximum likelihood from predictions alone.

use crate::error::DriftError;
use crate::frame::{check_length, check_number};
use crate::quadratic::Spectrum;
use crate::statistic::Statistic;

/// When the iteration stops.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StoppingRule {
    /// Largest change of a share in one round.
    pub change: f64,
    /// Most rounds.
    pub rounds: usize,
}

impl Default for StoppingRule {
    fn default() -> Self {
        Self { change: 1e-7, rounds: 5000 }
    }
}

/// Shares of the categories estimated from predictions.
#[derive(Debug, Clone, PartialEq)]
pub struct SharesByLikelihood {
    /// The shares, model order.
    pub shares: Vec<f64>,
    /// Their standard errors, with the training uncertainty of the model where its number of cases
    /// is known.
    pub standard_errors: Vec<f64>,
    /// Rounds taken.
    pub rounds: usize,
    /// Whether the stopping rule was met within its rounds.
    pub converged: bool,
    /// Likelihood ratio of the estimated shares against those of the fit.
    pub test: Statistic,
}

/// Estimates the shares of the categories from the probabilities of records, under label shift
/// (within a category the fields are distributed as in the fit) and a calibrated model: the
/// iteration of Saerens, Latinne and Decaestecker (2002), from the mix of the fit.
///
/// # Shapes
/// `probabilities`: n x J, row by row; `mix`: J, the mix of the fit, all above 0.
///
/// # Errors
/// No records, lengths that do not fit, numbers that cannot be.
pub fn shares_by_likelihood(
    probabilities: &[f64],
    mix: &[f64],
    training_cases: Option<f64>,
    rule: StoppingRule,
) -> Result<SharesByLikelihood, DriftError> {
    let size = mix.len();
    if size < 2 {
        return Err(DriftError::TooFewCategories { found: size });
    }
    if probabilities.is_empty() {
        return Err(DriftError::Missing { what: "shares by likelihood", needed: "at least one record" });
    }
    check_length("probabilities", probabilities.len(), probabilities.len() / size * size)?;
    for share in mix {
        check_number("mix", *share, *share > 0.0, "must be above 0")?;
    }
    let n = (probabilities.len() / size) as f64;
    let mut shares = mix.to_vec();
    let mut rounds = 0;
    let mut converged = false;
    while rounds < rule.rounds && !converged {
        let next = round(probabilities, mix, &shares);
        converged = next.iter().zip(&shares).all(|(next, share)| (next - share).abs() < rule.change);
        shares = next;
        rounds += 1;
    }
    let factor = training_cases.map_or(1.0, |cases| 1.0 + n / cases);
    let errors = standard_errors(probabilities, mix, &shares);
    let phi = training_cases.map(|cases| 1.0 + n / cases);
    Ok(SharesByLikelihood {
        standard_errors: errors.iter().map(|error| error * factor.sqrt()).collect(),
        rounds,
        converged,
        test: Statistic::chi_square(
            2.0 * log_likelihood(probabilities, mix, &shares),
            size - 1,
            phi,
            n,
            converged,
        ),
        shares,
    })
}

/// Mean of the probabilities after each record was weighted by the ratio of the shares.
fn round(probabilities: &[f64], mix: &[f64], shares: &[f64]) -> Vec<f64> {
    let mut sums = vec![0.0; mix.len()];
    for p in probabilities.chunks(mix.len()) {
        let total = weighted(p, mix, shares).sum::<f64>();
        for (sum, value) in sums.iter_mut().zip(weighted(p, mix, shares)) {
            *sum += value / total;
        }
    }
    let total: f64 = sums.iter().sum();
    sums.iter().map(|sum| sum / total).collect()
}

fn weighted(p: &[f64], mix: &[f64], shares: &[f64]) -> impl Iterator<Item = f64> {
    p.iter().zip(mix).zip(shares).map(|((p, before), now)| p * now / before)
}

/// Log-likelihood of the shares over that of the mix of the fit.
fn log_likelihood(probabilities: &[f64], mix: &[f64], shares: &[f64]) -> f64 {
    probabilities.chunks(mix.len()).map(|p| weighted(p, mix, shares).sum::<f64>().ln()).sum()
}

/// From the observed information about the shares of all categories but the last, which the
/// others determine.
fn standard_errors(probabilities: &[f64], mix: &[f64], shares: &[f64]) -> Vec<f64> {
    let last = mix.len() - 1;
    let mut information = vec![0.0; last * last];
    let mut scores = vec![0.0; mix.len()];
    for p in probabilities.chunks(mix.len()) {
        let total = weighted(p, mix, shares).sum::<f64>();
        for ((score, p), before) in scores.iter_mut().zip(p).zip(mix) {
            *score = p / before / total;
        }
        for row in 0..last {
            for column in 0..last {
                information[row * last + column] +=
                    (scores[row] - scores[last]) * (scores[column] - scores[last]);
            }
        }
    }
    let covariance = Spectrum::new(&information, last).inverse();
    let own = (0..last).map(|category| covariance[category * (last + 1)].sqrt());
    own.chain([covariance.iter().sum::<f64>().max(0.0).sqrt()]).collect()
}
