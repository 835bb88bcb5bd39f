//! Maximum likelihood on a table: which terms stay, where the optimum is.

use faer::Mat;

use crate::alias::{Sweep, sweep};
use crate::cross::CrossProducts;
use crate::error::FitError;
use crate::layout::Layout;
use crate::likelihood::{Coefficients, Order, add_weighted_products};
use crate::linear::Factor;
use crate::newton::{Iterate, Objective, Optimum, Stopped, maximise};
use crate::objective::{Likelihood, View};
use crate::resolve::Resolved;
use crate::start::near_optimum;
use crate::table::Table;
use crate::trouble::{diagnose, explain};

/// Largest number of coefficients: their information matrix then takes 72 megabytes.
const MOST_COEFFICIENTS: usize = 3000;

/// An optimum and the terms it is about.
#[derive(Debug)]
pub(crate) struct Solution {
    /// The terms that stay.
    pub(crate) layout: Layout,
    /// The terms that were left out.
    pub(crate) swept: Sweep,
    pub(crate) optimum: Optimum,
    /// Weighted cross-products of all terms, in design order.
    pub(crate) products: Mat<f64>,
    /// The log-likelihood itself, without a penalty.
    pub(crate) log_likelihood: f64,
    pub(crate) method: Method,
}

/// What the optimum is one of.
#[derive(Debug)]
pub(crate) enum Method {
    MaximumLikelihood,
    /// A penalised likelihood, with the effective number of each coefficient and the sampling
    /// covariance, which ignores the bias.
    Ridge {
        rho: f64,
        effective: Vec<f64>,
        sampling: Mat<f64>,
    },
    /// The likelihood with half the log-determinant of the information added.
    BiasReduced,
}

impl Solution {
    /// The coefficients as a pass needs them.
    pub(crate) fn coefficients(&self) -> Coefficients {
        let terms = self.layout.terms();
        Coefficients::from_vector(&self.optimum.point, terms, self.optimum.point.len() / terms)
    }
}

/// Fits all terms of a design by maximum likelihood.
pub(crate) fn estimate(
    table: &mut Table,
    resolved: &Resolved,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Solution, FitError> {
    let products = cross_products(table, resolved)?;
    let swept = sweep(products.as_ref());
    let layout = layout_after(resolved, &swept);
    let mut passes = 0;
    let mut counted = |number: u64, iterate| {
        passes = number + 1;
        watch(number, iterate);
    };
    let start = match near_optimum(table, resolved, &layout, products.as_ref(), &mut counted)? {
        Some(near) => near,
        None => start_of(&resolved.category_weights, layout.order()),
    };
    let at = Likelihood::new(table, &layout, resolved).evaluate(&start, Order::Information)?;
    let mut watch_on = |number, iterate| watch(passes + number, iterate);
    match maximise(&mut Likelihood::new(table, &layout, resolved), start, at, &mut watch_on) {
        Ok(optimum) => {
            let (log_likelihood, method) = (optimum.at.value, Method::MaximumLikelihood);
            Ok(Solution { layout, swept, optimum, products, log_likelihood, method })
        }
        Err(stopped) => Err(diagnose(table, resolved, &layout, stopped)?),
    }
}

/// The layout of the terms that a sweep keeps.
pub(crate) fn layout_after(resolved: &Resolved, swept: &Sweep) -> Layout {
    let mut keep = vec![true; resolved.design.terms().len()];
    for aliased in &swept.aliased {
        keep[aliased.column] = false;
    }
    Layout::new(&resolved.design, &resolved.scaling, &keep)
}

/// Weighted cross-products of all terms, in design order.
pub(crate) fn cross_products(table: &mut Table, resolved: &Resolved) -> Result<Mat<f64>, FitError> {
    check_size(resolved)?;
    let layout = Layout::new(&resolved.design, &resolved.scaling, &vec![true; resolved.design.terms().len()]);
    let found = table.reduce(|chunk| {
        let mut products = CrossProducts::new(&layout, 1);
        add_weighted_products(&mut products, &layout, chunk);
        products
    })?;
    let products = found.map_or_else(Mat::new, |products| in_design_order(&layout, &products.matrix(0)));
    if products.norm_max().is_finite() {
        return Ok(products);
    }
    let start = start_of(&resolved.category_weights, layout.order());
    let rows = Likelihood::new(table, &layout, resolved).evaluate(&start, Order::Value)?.not_finite;
    Err(FitError::NotFinite { rows })
}

fn check_size(resolved: &Resolved) -> Result<(), FitError> {
    let terms = resolved.design.terms().len();
    let compared = resolved.category_weights.len() - 1;
    let (coefficients, most) = (terms * compared, MOST_COEFFICIENTS);
    if coefficients > most {
        return Err(FitError::TooLarge { coefficients, terms, compared, most });
    }
    Ok(())
}

/// Fits a part of the terms, starting near the optimum of all of them.
///
/// Returns the optimum and how many terms it has. Terms that were left out because of terms that
/// are now gone come in again.
pub(crate) fn estimate_without(
    table: &mut Table,
    resolved: &Resolved,
    full: &Solution,
    gone: &[bool],
) -> Result<(Layout, Optimum), FitError> {
    let candidates: Vec<usize> = (0..gone.len()).filter(|&term| !gone[term]).collect();
    let products = Mat::from_fn(candidates.len(), candidates.len(), |row, column| {
        full.products[(candidates[row], candidates[column])]
    });
    let mut keep: Vec<bool> = gone.iter().map(|gone| !gone).collect();
    for aliased in sweep(products.as_ref()).aliased {
        keep[candidates[aliased.column]] = false;
    }
    let layout = Layout::new(&resolved.design, &resolved.scaling, &keep);
    let start = full.start_without(&layout);
    let at = Likelihood::new(table, &layout, resolved).evaluate(&start, Order::Information)?;
    match maximise(&mut Likelihood::new(table, &layout, resolved), start, at, &mut |_, _| {}) {
        Ok(optimum) => Ok((layout, optimum)),
        Err(stopped) => Err(explain(resolved, &layout, stopped)),
    }
}

/// Fits a view of the rows, all terms of a layout.
///
/// `category_weights` are those of the view.
pub(crate) fn estimate_view(
    table: &mut Table,
    layout: &Layout,
    category_weights: &[f64],
    view: &View,
    start: Vec<f64>,
) -> Result<Optimum, Stopped> {
    let mut likelihood = Likelihood::of_view(table, layout, category_weights, view);
    let at = likelihood.evaluate(&start, Order::Information)?;
    maximise(&mut likelihood, start, at, &mut |_, _| {})
}

impl Solution {
    /// Where the optimum of a part of the terms lies if the log-likelihood is a parabola:
    /// `b_r - V_rf V_ff^-1 b_f`, with f the terms that are gone.
    fn start_without(&self, part: &Layout) -> Vec<f64> {
        let (own, terms) = (self.layout.order(), self.layout.terms());
        let position = |term: &usize| part.order().iter().position(|other| other == term);
        let size = self.optimum.point.len();
        let gone: Vec<usize> = (0..size).filter(|index| position(&own[index % terms]).is_none()).collect();
        let covariance = &self.optimum.covariance;
        let block = Mat::from_fn(gone.len(), gone.len(), |row, column| covariance[(gone[row], gone[column])]);
        let point: Vec<f64> = gone.iter().map(|&index| self.optimum.point[index]).collect();
        let pull =
            Factor::new(block.as_ref()).map_or_else(|_| vec![0.0; gone.len()], |factor| factor.solve(&point));
        let mut start = vec![0.0; part.terms() * (size / terms)];
        for index in 0..size {
            if let Some(position) = position(&own[index % terms]) {
                let shift: f64 =
                    gone.iter().zip(&pull).map(|(&other, pull)| covariance[(index, other)] * pull).sum();
                start[index / terms * part.terms() + position] = self.optimum.point[index] - shift;
            }
        }
        start
    }
}

/// Coefficients of the model with intercepts only, category by category: `ln(n_j / n_0)`, then
/// zeros. It is the optimum of that model.
pub(crate) fn start_of(category_weights: &[f64], order: &[usize]) -> Vec<f64> {
    let intercept = |weight: &f64| (weight / category_weights[0]).ln();
    let block =
        |weight: &f64| order.iter().map(|&term| if term == 0 { intercept(weight) } else { 0.0 }).collect();
    category_weights[1..].iter().flat_map(|weight| -> Vec<f64> { block(weight) }).collect()
}

/// Cross-products of all terms in the order of the design.
fn in_design_order(layout: &Layout, products: &Mat<f64>) -> Mat<f64> {
    let size = layout.terms();
    let mut internal = vec![0; size];
    for (index, &term) in layout.order().iter().enumerate() {
        internal[term] = index;
    }
    Mat::from_fn(size, size, |row, column| products[(internal[row], internal[column])])
}
