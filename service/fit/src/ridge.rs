//! Ridge: maximum likelihood with a penalty on the size of the coefficients.
//!
//! What is maximised is `ll - (rho W / 2) tr(S B K B')`, with B the standardised coefficients (terms
//! x m), `K = I - 11'/J` and S block-diagonal: 0 for the intercept; 1 for a standardised column of
//! a number; `I - 11'/L` for the dummies of a field with L levels (1/2 for a flag); the variance
//! of the column for an interaction. K and the blocks of levels make the penalty the same as one on
//! the coefficients of all J categories and all L levels alike, so that fitted probabilities
//! depend on no reference. For numbers it is the usual multinomial ridge with penalty rho per case.

use faer::{Mat, MatRef};
use kilter_model::{DenseColumn, Field};

use crate::error::FitError;
use crate::estimate::{Method, Solution, cross_products, start_of};
use crate::layout::Layout;
use crate::likelihood::Order;
use crate::newton::{Evaluation, Iterate, Objective, maximise};
use crate::objective::Likelihood;
use crate::resolve::Resolved;
use crate::table::Table;

/// Penalties per case and per unit of rho, for the terms of a layout.
#[derive(Debug, Clone)]
pub(crate) struct Penalty {
    /// `K (x) S`, category by category.
    matrix: Mat<f64>,
}

impl Penalty {
    /// `products` are the cross-products of all terms in design order, up to a factor.
    pub(crate) fn new(resolved: &Resolved, layout: &Layout, products: MatRef<'_, f64>) -> Self {
        let shape = shape(resolved, layout, products);
        let categories = resolved.category_weights.len() as f64;
        let (terms, compared) = (layout.terms(), resolved.category_weights.len() - 1);
        let matrix = Mat::from_fn(terms * compared, terms * compared, |row, column| {
            let same = f64::from(u8::from(row / terms == column / terms));
            (same - 1.0 / categories) * shape[(row % terms, column % terms)]
        });
        Self { matrix }
    }

    /// The plain sum of squares of all coefficients but the intercepts.
    pub(crate) fn on_slopes(layout: &Layout, compared: usize) -> Self {
        let terms = layout.terms();
        let counts = |index: usize| f64::from(u8::from(layout.order()[index % terms] > 0));
        let matrix =
            Mat::from_fn(
                terms * compared,
                terms * compared,
                |row, column| {
                    if row == column { counts(row) } else { 0.0 }
                },
            );
        Self { matrix }
    }

    /// `P b` for a penalty of `strength`.
    fn times(&self, point: &[f64], strength: f64) -> Vec<f64> {
        let product = &self.matrix * MatRef::from_column_major_slice(point, point.len(), 1);
        (0..point.len()).map(|row| strength * product[(row, 0)]).collect()
    }
}

/// The matrix S.
fn shape(resolved: &Resolved, layout: &Layout, products: MatRef<'_, f64>) -> Mat<f64> {
    let terms = resolved.design.terms();
    let own = |index: usize| &terms[layout.order()[index]];
    let levels = |field: usize| match &resolved.fields[field] {
        Field::Levels(levels) => levels.levels.len() as f64,
        Field::Number(_) | Field::Flag(_) => 2.0,
    };
    let is_number = |column: usize| matches!(resolved.design.dense()[column], DenseColumn::Basis { .. });
    let variance = |term: usize| {
        let total = products[(0, 0)];
        products[(term, term)] / total - (products[(0, term)] / total).powi(2)
    };
    Mat::from_fn(layout.terms(), layout.terms(), |row, column| {
        let (left, right) = (own(row), own(column));
        match (left.fields[..].as_ref(), right.fields[..].as_ref()) {
            ([a], [b])
                if a == b && !(left.dense.iter().chain(&right.dense).any(|&column| is_number(column))) =>
            {
                // Dummies: of the levels of one field, of a flag, of a missing number.
                let same = f64::from(u8::from(row == column));
                if left.dense == right.dense { same - 1.0 / levels(*a) } else { 0.0 }
            }
            ([_], _) if row == column => 1.0,
            ([_, ..], _) if row == column => variance(layout.order()[row]),
            _ => 0.0,
        }
    })
}

/// A log-likelihood less a penalty.
pub(crate) struct Penalised<'s, 'a> {
    pub(crate) likelihood: Likelihood<'s, 'a>,
    pub(crate) penalty: &'s Penalty,
    /// `rho W`.
    pub(crate) strength: f64,
}

impl<'s, 'a> Penalised<'s, 'a> {
    /// With penalty rho per case.
    pub(crate) fn new(likelihood: Likelihood<'s, 'a>, penalty: &'s Penalty, rho: f64) -> Self {
        let strength = rho * likelihood.weight();
        Self { likelihood, penalty, strength }
    }

    /// What is taken off the log-likelihood.
    fn cost(&self, point: &[f64]) -> f64 {
        0.5 * crate::linear::dot(point, &self.penalty.times(point, self.strength))
    }
}

impl Objective for Penalised<'_, '_> {
    fn evaluate(&mut self, point: &[f64], order: Order) -> Result<Evaluation, FitError> {
        let mut at = self.likelihood.evaluate(point, order)?;
        let pull = self.penalty.times(point, self.strength);
        at.value -= 0.5 * crate::linear::dot(point, &pull);
        if order >= Order::Gradient {
            for (slope, pull) in at.gradient.iter_mut().zip(&pull) {
                *slope -= pull;
            }
        }
        if order >= Order::Information {
            at.information += &self.penalty.matrix * faer::Scale(self.strength);
        }
        Ok(at)
    }

    fn separates(&mut self, _: &[f64]) -> Result<Option<bool>, FitError> {
        // A penalised likelihood has a maximum whatever the data.
        Ok(None)
    }

    fn weight(&self) -> f64 {
        self.likelihood.weight()
    }

    fn is_slow(&self) -> bool {
        self.likelihood.is_slow()
    }
}

/// The terms that a penalised fit keeps, all but columns of zeros, with their penalty.
pub(crate) fn penalised_layout(
    table: &mut Table,
    resolved: &Resolved,
) -> Result<(Layout, Penalty, Mat<f64>), FitError> {
    let products = cross_products(table, resolved)?;
    let keep: Vec<bool> = (0..products.nrows()).map(|term| products[(term, term)] > 0.0).collect();
    let layout = Layout::new(&resolved.design, &resolved.scaling, &keep);
    let penalty = Penalty::new(resolved, &layout, products.as_ref());
    Ok((layout, penalty, products))
}

/// Fits with a penalty.
pub(crate) fn estimate_ridge(
    table: &mut Table,
    resolved: &Resolved,
    rho: f64,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Solution, FitError> {
    let (layout, penalty, products) = penalised_layout(table, resolved)?;
    let start = start_of(&resolved.category_weights, layout.order());
    let mut objective = Penalised::new(Likelihood::new(table, &layout, resolved), &penalty, rho);
    let at = objective.evaluate(&start, Order::Information)?;
    if at.not_finite > 0 {
        return Err(FitError::NotFinite { rows: at.not_finite });
    }
    let optimum = maximise(&mut objective, start, at, watch)
        .map_err(|stopped| crate::trouble::explain(resolved, &layout, stopped))?;
    let cost = objective.cost(&optimum.point);
    let strength = objective.strength;
    let unpenalised = &optimum.at.information - &penalty.matrix * faer::Scale(strength);
    // tr[(I + P)^-1 I], coefficient by coefficient.
    let kept = &optimum.covariance * &unpenalised;
    let effective: Vec<f64> = (0..optimum.point.len()).map(|index| kept[(index, index)]).collect();
    let sampling = &kept * &optimum.covariance;
    let method = Method::Ridge { rho, effective, sampling };
    let log_likelihood = optimum.at.value + cost;
    let swept = crate::alias::Sweep::zeros(&products);
    Ok(Solution { layout, swept, optimum, products, log_likelihood, method })
}
