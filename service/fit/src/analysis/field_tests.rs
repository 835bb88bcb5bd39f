//! Tests of whole fields: does leaving one out cost more than chance explains?

use statrs::distribution::{ChiSquared, ContinuousCDF, FisherSnedecor};

use faer::Mat;
use kilter_model::{Design, Field, Form, StandardErrors};
use serde::Serialize;

use crate::analysis::Analysis;
use crate::analysis::wald::{too_few_clusters, wald};
use crate::bias_reduction::BiasReduction;
use crate::error::FitError;
use crate::estimate::{Method, estimate_without};

/// What is tested to be without effect.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Tested {
    /// A field with all its interactions.
    Field(String),
    /// The terms of a number beyond the straight line.
    Curvature(String),
    /// The interaction of two fields.
    Interaction([String; 2]),
    /// All terms but the intercept.
    Everything,
}

/// The distribution that a statistic has if nothing is there.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Distribution {
    /// Chi-squared.
    ChiSquared {
        /// Degrees of freedom.
        freedom: f64,
    },
    /// F.
    F {
        /// Degrees of freedom of the numerator.
        numerator: f64,
        /// Degrees of freedom of the denominator.
        denominator: f64,
    },
}

/// A statistic and how unlikely it is.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct TestResult {
    /// The statistic.
    pub statistic: f64,
    /// Its distribution if nothing is there.
    pub distribution: Distribution,
    /// Probability of a statistic as large as this or larger, if nothing is there.
    pub p: f64,
}

impl TestResult {
    /// The result of a statistic.
    pub(crate) fn new(statistic: f64, distribution: Distribution) -> Self {
        let p = match distribution {
            Distribution::ChiSquared { freedom } => ChiSquared::new(freedom).map(|d| d.sf(statistic)).ok(),
            Distribution::F { numerator, denominator } => {
                FisherSnedecor::new(numerator, denominator).map(|d| d.sf(statistic)).ok()
            }
        };
        Self { statistic, distribution, p: p.unwrap_or(f64::NAN) }
    }
}

/// Tests of one field, interaction or of everything.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct FieldTest {
    /// What is tested.
    pub tested: Tested,
    /// Number of coefficients that it takes.
    pub degrees_of_freedom: u64,
    /// Wald test `b_f' V_ff^-1 b_f` with the covariance of the model file; `None` where that has
    /// too small a rank.
    pub wald: Option<TestResult>,
    /// Likelihood-ratio test `2 (ll - ll without)`, for a bias-reduced fit that of the adjusted
    /// likelihoods; `None` with sampling weights or clusters, where the likelihood is none.
    pub likelihood_ratio: Option<TestResult>,
    /// With few clusters: whether there are too few for the F distribution to be more than a
    /// rough guide.
    pub approximate: bool,
}

impl FieldTest {
    /// Whether the effect is so large that the Wald test loses its power (Hauck and Donner 1977):
    /// its p-value is above ten times that of the likelihood ratio, which is below 0.05.
    pub fn wald_collapses(&self) -> bool {
        match (self.wald, self.likelihood_ratio) {
            (Some(wald), Some(ratio)) => ratio.p < 0.05 && wald.p > 10.0 * ratio.p,
            _ => false,
        }
    }
}

impl Analysis<'_> {
    /// Tests each field, each curved form, each interaction, and everything together.
    ///
    /// Empty for a penalised fit. Each likelihood ratio takes a fit of its own, which starts near its end.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read, or a smaller model has no estimate.
    pub fn field_tests(&mut self) -> Result<Vec<FieldTest>, FitError> {
        let mut tests = Vec::new();
        if matches!(self.solution.method, Method::Ridge { .. }) {
            return Ok(tests);
        }
        for (tested, gone) in hypotheses(&self.resolved.design, &self.plan.interactions) {
            if let Some(test) = self.test(tested, &gone)? {
                tests.push(test);
            }
        }
        Ok(tests)
    }

    /// The tests of some terms; `None` where others determine all of them.
    fn test(&mut self, tested: Tested, gone: &[bool]) -> Result<Option<FieldTest>, FitError> {
        let full = self.solution.layout.terms();
        if matches!(self.solution.method, Method::BiasReduced) {
            return self.test_bias_reduced(tested, gone);
        }
        let (kept, log_likelihood) = if tested == Tested::Everything {
            let null = self.fitted.model.fit.as_ref().map_or(f64::NAN, |fit| fit.log_likelihood_null);
            (1, Some(null))
        } else if self.has_likelihood() {
            let (layout, optimum) = estimate_without(&mut self.table, &self.resolved, &self.solution, gone)?;
            (layout.terms(), Some(optimum.at.value))
        } else {
            let gone = self.solution.layout.order().iter().filter(|&&term| gone[term]).count();
            (full - gone, None)
        };
        if kept == full {
            return Ok(None);
        }
        let freedom = (full - kept) * self.compared();
        let ratio = log_likelihood.filter(|_| self.has_likelihood()).map(|without| {
            let statistic = 2.0 * (self.solution.optimum.at.value - without);
            TestResult::new(statistic.max(0.0), Distribution::ChiSquared { freedom: freedom as f64 })
        });
        Ok(Some(FieldTest {
            tested,
            degrees_of_freedom: freedom as u64,
            wald: self.wald(gone),
            likelihood_ratio: ratio,
            approximate: too_few_clusters(self.covariance.clusters, freedom),
        }))
    }

    /// Tests of a bias-reduced fit: the ratio is that of the adjusted likelihoods, with the
    /// information of the full model in both (Heinze and Schemper 2002).
    fn test_bias_reduced(&mut self, tested: Tested, gone: &[bool]) -> Result<Option<FieldTest>, FitError> {
        let held = self.coefficients_of(gone);
        if held.is_empty() {
            return Ok(None);
        }
        let restricted =
            BiasReduction::new(&mut self.table, &self.solution.layout, &self.resolved).holding(&held);
        let (optimum, _) = restricted.maximise(&mut |_, _| {})?;
        let statistic = 2.0 * (self.solution.optimum.at.value - optimum.at.value);
        let freedom = held.len() as f64;
        Ok(Some(FieldTest {
            tested,
            degrees_of_freedom: held.len() as u64,
            wald: self.wald(gone),
            likelihood_ratio: Some(TestResult::new(statistic.max(0.0), Distribution::ChiSquared { freedom })),
            approximate: false,
        }))
    }

    /// The coefficients of some terms, as far as they were estimated.
    fn coefficients_of(&self, terms: &[bool]) -> Vec<usize> {
        let layout = &self.solution.layout;
        let all = 0..self.solution.optimum.point.len();
        all.filter(|index| terms[layout.order()[index % layout.terms()]]).collect()
    }

    /// Whether the log-likelihood is one of independent cases.
    fn has_likelihood(&self) -> bool {
        self.counts_cases() && self.plan.fit.standard_errors != StandardErrors::Cluster
    }

    fn wald(&self, gone: &[bool]) -> Option<TestResult> {
        let tested = self.coefficients_of(gone);
        let covariance = Mat::from_fn(tested.len(), tested.len(), |row, column| {
            self.covariance.matrix[(tested[row], tested[column])]
        });
        let point: Vec<f64> = tested.iter().map(|&index| self.solution.optimum.point[index]).collect();
        wald(&point, &covariance, self.covariance.clusters)
    }
}

/// What is tested, each with the terms that are gone then.
pub(super) fn hypotheses(design: &Design, interactions: &[[String; 2]]) -> Vec<(Tested, Vec<bool>)> {
    let terms = design.terms();
    let position = |name: &str| design.fields().iter().position(|field| field.name() == name);
    let mut found = Vec::new();
    for (index, field) in design.fields().iter().enumerate() {
        let gone = terms.iter().map(|term| term.fields.contains(&index)).collect();
        found.push((Tested::Field(field.name().to_owned()), gone));
        if let Field::Number(number) = field
            && matches!(number.form, Form::Polynomial(_) | Form::Spline(_))
        {
            found.push((Tested::Curvature(number.name.clone()), curved_terms(design, index)));
        }
    }
    for pair in interactions {
        let fields = [position(&pair[0]), position(&pair[1])];
        let both = |field: &usize| fields.contains(&Some(*field));
        let gone = terms.iter().map(|term| term.fields.len() == 2 && term.fields.iter().all(both)).collect();
        found.push((Tested::Interaction(pair.clone()), gone));
    }
    found.push((Tested::Everything, (0..terms.len()).map(|term| term > 0).collect()));
    found
}

/// Terms that hold a column of a field beyond the first of its form.
fn curved_terms(design: &Design, field: usize) -> Vec<bool> {
    let curved = |&column: &usize| matches!(design.dense()[column], kilter_model::DenseColumn::Basis { field: own, basis } if own == field && basis > 0);
    design.terms().iter().map(|term| term.dense.iter().any(curved)).collect()
}
