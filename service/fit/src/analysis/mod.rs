//! What a fit tells beside its coefficients.

mod alternatives;
mod effects;
mod field_tests;
mod goodness;
mod statistics;
mod wald;

pub use alternatives::{Hausman, IndependenceTest, SeparateFit, SeparateTerm, SmallHsiao};
pub use effects::{Change, Effect};
pub use field_tests::{Distribution, FieldTest, TestResult, Tested};
pub use goodness::{GoodnessOfFit, GroupedFit, ObservedExpected};
pub use statistics::{FitStatistics, fit_statistics};
pub use wald::wald_tests;

use crate::estimate::{Method, Solution};
use crate::fitted::Fitted;
use crate::plan::Plan;
use crate::resolve::Resolved;
use crate::session::ErrorKind;
use crate::table::Table;

/// A fit with its rows at hand, for what needs another pass over them.
pub struct Analysis<'a> {
    /// The fitted model.
    pub fitted: Fitted,
    pub(crate) plan: Plan,
    pub(crate) table: Table<'a>,
    pub(crate) resolved: Resolved,
    pub(crate) solution: Solution,
    pub(crate) covariance: ErrorKind,
}

impl Analysis<'_> {
    /// Whether the likelihood is one of cases that all count the same, and nothing else.
    fn counts_cases(&self) -> bool {
        self.plan.data.weight.is_none() && matches!(self.solution.method, Method::MaximumLikelihood)
    }

    /// Number of categories but the reference.
    fn compared(&self) -> usize {
        self.resolved.category_weights.len() - 1
    }
}
