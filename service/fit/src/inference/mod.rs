//! What the joint covariance of a model file says about its coefficients: standard errors, tests,
//! intervals, ratios, and comparisons of any two categories.

mod intervals;
mod normal;
mod student;

use kilter_model::{INTERCEPT, ModelFile};

use crate::covariance::FEW_CLUSTERS;

pub use intervals::{IntervalError, ProbabilityInterval, ProbabilityIntervals};
pub use normal::{log10_two_sided_p, normal_quantile, two_sided_p};

/// Why nothing can be inferred.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum InferenceError {
    /// A category that the model does not have.
    #[error("`{found}` is no category of the model; it has {categories}")]
    UnknownCategory {
        /// What was asked for.
        found: String,
        /// What there is.
        categories: String,
    },
    /// A level of confidence that is none.
    #[error("confidence level {0} is not between 0 and 1")]
    Level(f64),
}

/// How sure an estimate is.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Uncertainty {
    /// Standard error.
    pub standard_error: f64,
    /// Ends of the confidence interval.
    pub interval: [f64; 2],
    /// Test of the estimate being 0; `None` for a penalised fit, whose estimates are pulled
    /// towards 0.
    pub significance: Option<Significance>,
}

/// Test of an estimate being 0.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Significance {
    /// Estimate by standard error.
    pub z: f64,
    /// Two-sided p-value: from the normal distribution, or, where the standard errors are those
    /// of fewer than 50 clusters, from Student's t distribution with one degree of freedom less
    /// than there are clusters. The former underflows to 0 for `z` beyond 38.
    pub p: f64,
    /// Its decimal logarithm, which does not underflow with the normal distribution.
    pub log10_p: f64,
}

/// The log-odds of one category against another that a term adds, per unit of the term.
#[derive(Debug, Clone, PartialEq)]
pub struct Estimate {
    /// The term.
    pub term: String,
    /// The category.
    pub category: String,
    /// The category that it is compared against.
    pub against: String,
    /// The coefficient.
    pub estimate: f64,
    /// How sure it is; `None` where the file has no covariance, and for a term that was left out
    /// because others determine it.
    pub uncertainty: Option<Uncertainty>,
}

impl Estimate {
    /// Factor by which the odds of the category against the other change per unit of the term
    /// (relative risk ratio), `exp` of the estimate; `None` for the intercept.
    pub fn ratio(&self) -> Option<f64> {
        (self.term != INTERCEPT).then(|| self.estimate.exp())
    }

    /// Ends of the confidence interval of the ratio: `exp` of those of the estimate.
    pub fn ratio_interval(&self) -> Option<[f64; 2]> {
        let interval = self.uncertainty?.interval;
        self.ratio().map(|_| interval.map(f64::exp))
    }
}

/// All coefficients: category by category in model order, the terms of each in order, each against
/// the reference category.
///
/// # Errors
/// [`InferenceError::Level`] where `level`, the confidence level of the intervals, is not between
/// 0 and 1.
pub fn coefficients(model: &ModelFile, level: f64) -> Result<Vec<Estimate>, InferenceError> {
    let reference = &model.outcome.reference;
    let mut estimates = Vec::new();
    for category in model.compared_categories() {
        estimates.extend(contrast(model, category, reference, level)?);
    }
    Ok(estimates)
}

/// The log-odds of one category against another, term by term: the difference of their
/// coefficients, with its variance `V_jj + V_kk - V_jk - V_kj` from the joint covariance. A fit
/// with the second category as the reference would give the same.
///
/// # Errors
/// [`InferenceError`] where a category is none of the model's, or `level` is not between 0 and 1.
pub fn contrast(
    model: &ModelFile,
    category: &str,
    against: &str,
    level: f64,
) -> Result<Vec<Estimate>, InferenceError> {
    if !(level > 0.0 && level < 1.0) {
        return Err(InferenceError::Level(level));
    }
    let measure = Measure::new(model, level);
    let blocks = [block(model, category)?, block(model, against)?];
    let terms = model.terms.len();
    let estimates = (0..terms).map(|term| {
        let coefficient = |category: &str| model.coefficients.get(category).map_or(0.0, |row| row[term]);
        let estimate = coefficient(category) - coefficient(against);
        let variance = model.covariance.as_ref().map(|covariance| {
            let places = blocks.map(|block| block.map(|block| block * terms + term));
            let of = |a: Option<usize>, b: Option<usize>| match (a, b) {
                (Some(a), Some(b)) => covariance.at(a, b),
                _ => 0.0,
            };
            let [a, b] = places;
            of(a, a) + of(b, b) - 2.0 * of(a, b)
        });
        Estimate {
            term: model.terms[term].clone(),
            category: category.to_owned(),
            against: against.to_owned(),
            estimate,
            uncertainty: variance.filter(|v| *v > 0.0).map(|v| measure.uncertainty(estimate, v.sqrt())),
        }
    });
    Ok(estimates.collect())
}

/// Number of a category's block in the covariance; `None` for the reference.
fn block(model: &ModelFile, category: &str) -> Result<Option<usize>, InferenceError> {
    if !model.outcome.categories.iter().any(|known| known == category) {
        let categories = model.outcome.categories.iter().map(|c| format!("`{c}`")).collect::<Vec<_>>();
        let (found, categories) = (category.to_owned(), categories.join(", "));
        return Err(InferenceError::UnknownCategory { found, categories });
    }
    Ok(model.compared_categories().position(|compared| compared == category))
}

/// The distribution of an estimate in units of its standard error.
#[derive(Debug, Clone, Copy)]
struct Measure {
    /// Degrees of freedom of Student's t; `None` for the normal distribution.
    freedom: Option<f64>,
    quantile: f64,
    penalised: bool,
}

impl Measure {
    fn new(model: &ModelFile, level: f64) -> Self {
        let probability = 0.5 + level / 2.0;
        let clusters = model.fit.as_ref().and_then(|fit| fit.clusters);
        let penalised = model.fit.as_ref().is_some_and(|fit| fit.ridge > 0.0);
        match clusters.filter(|&clusters| clusters < FEW_CLUSTERS) {
            Some(clusters) => {
                let freedom = clusters as f64 - 1.0;
                Self { freedom: Some(freedom), quantile: student::quantile(probability, freedom), penalised }
            }
            None => Self { freedom: None, quantile: normal_quantile(probability), penalised },
        }
    }

    fn uncertainty(self, estimate: f64, standard_error: f64) -> Uncertainty {
        let half = self.quantile * standard_error;
        let significance = (!self.penalised).then(|| self.significance(estimate / standard_error));
        Uncertainty { standard_error, interval: [estimate - half, estimate + half], significance }
    }

    fn significance(self, z: f64) -> Significance {
        match self.freedom {
            None => Significance { z, p: two_sided_p(z), log10_p: log10_two_sided_p(z) },
            Some(freedom) => {
                let p = student::two_sided_p(z, freedom);
                Significance { z, p, log10_p: p.log10() }
            }
        }
    }
}
