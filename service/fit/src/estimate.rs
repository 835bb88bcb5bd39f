//! Maximum likelihood on a table: which terms stay, where the optimum is.

use std::borrow::Cow;

use faer::Mat;

use crate::alias::{Sweep, sweep};
use crate::chunk::Chunk;
use crate::error::FitError;
use crate::layout::Layout;
use crate::likelihood::{Coefficients, Order, Sums, Workspace, add_chunk};
use crate::linear::Factor;
use crate::newton::{Evaluation, Iterate, Objective, Optimum, Stopped, maximise};
use crate::resolve::Resolved;
use crate::separation::{Margins, SeparationReport};
use crate::table::Table;

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
    /// Cross-products of all terms, up to a factor, in design order.
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
    let terms = resolved.design.terms().len();
    check_size(resolved)?;
    let mut layout = Layout::new(&resolved.design, &resolved.scaling, &vec![true; terms]);
    let mut start = start_of(&resolved.category_weights, layout.order());
    let (mut at, products) = Likelihood::new(table, &layout, resolved).evaluate_with_products(&start)?;
    let swept = sweep(products.as_ref());
    if !swept.aliased.is_empty() {
        layout = layout_after(resolved, &swept);
        start = start_of(&resolved.category_weights, layout.order());
        at = Likelihood::new(table, &layout, resolved).evaluate(&start, Order::Information)?;
    }
    if at.not_finite > 0 {
        return Err(FitError::NotFinite { rows: at.not_finite });
    }
    match maximise(&mut Likelihood::new(table, &layout, resolved), start, at, watch) {
        Ok(optimum) => {
            let (log_likelihood, method) = (optimum.at.value, Method::MaximumLikelihood);
            Ok(Solution { layout, swept, optimum, products, log_likelihood, method })
        }
        Err(stopped) => Err(explain(resolved, &layout, stopped)),
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

/// Cross-products of all terms, up to a factor, in design order.
pub(crate) fn products_at_start(table: &mut Table, resolved: &Resolved) -> Result<Mat<f64>, FitError> {
    check_size(resolved)?;
    let layout = Layout::new(&resolved.design, &resolved.scaling, &vec![true; resolved.design.terms().len()]);
    let start = start_of(&resolved.category_weights, layout.order());
    Ok(Likelihood::new(table, &layout, resolved).evaluate_with_products(&start)?.1)
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

pub(crate) fn explain(resolved: &Resolved, layout: &Layout, stopped: Stopped) -> FitError {
    match stopped {
        Stopped::Failed(error) => error,
        Stopped::Separated { direction, .. } => {
            FitError::Separated(Box::new(SeparationReport::new(resolved, layout.order(), &direction)))
        }
        Stopped::NotPositive { row, steps } => {
            let term = &resolved.design.terms()[layout.order()[row % layout.terms()]].name;
            let category = resolved.category_names()[1 + row / layout.terms()];
            FitError::NotUnique { iterations: steps, terms: format!("`{term}` of category `{category}`") }
        }
        Stopped::NotConverged { decrement, steps } => FitError::NotConverged { iterations: steps, decrement },
    }
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

/// The log-likelihood of the rows of a table.
pub(crate) struct Likelihood<'s, 'a> {
    table: &'s mut Table<'a>,
    layout: &'s Layout,
    compared: usize,
    weight: f64,
    /// What the rows are changed to before they are summed.
    view: Option<&'s View<'s>>,
}

/// Makes other rows of a chunk: a part of them, or with other categories.
pub(crate) type View<'v> = dyn Fn(&Chunk) -> Chunk + Sync + 'v;

impl<'s, 'a> Likelihood<'s, 'a> {
    pub(crate) fn new(table: &'s mut Table<'a>, layout: &'s Layout, resolved: &Resolved) -> Self {
        let compared = resolved.category_weights.len() - 1;
        Self { table, layout, compared, weight: resolved.category_weights.iter().sum(), view: None }
    }

    /// The likelihood of a view of the rows.
    pub(crate) fn of_view(
        table: &'s mut Table<'a>,
        layout: &'s Layout,
        category_weights: &[f64],
        view: &'s View<'s>,
    ) -> Self {
        let weight = category_weights.iter().sum();
        Self { table, layout, compared: category_weights.len() - 1, weight, view: Some(view) }
    }

    fn sums(&mut self, point: &[f64], order: Order) -> Result<Sums, FitError> {
        let coefficients = Coefficients::from_vector(point, self.layout.terms(), self.compared);
        let (layout, view) = (self.layout, self.view);
        let sums = self.table.reduce(|chunk| {
            let mut sums = Sums::new(layout, coefficients.compared, order);
            let seen = view.map_or(Cow::Borrowed(chunk), |view| Cow::Owned(view(chunk)));
            add_chunk(&mut sums, &mut Workspace::default(), layout, &coefficients, &seen, order);
            sums
        })?;
        Ok(sums.unwrap_or_else(|| Sums::new(layout, self.compared, order)))
    }

    /// Evaluation with intercepts only: then the probabilities are the same in all rows, and the
    /// sum over pairs of categories is proportional to the cross-products of the terms, which are
    /// returned in the order of the design.
    fn evaluate_with_products(&mut self, start: &[f64]) -> Result<(Evaluation, Mat<f64>), FitError> {
        let sums = self.sums(start, Order::Information)?;
        let products = in_design_order(self.layout, &sums.all_pairs());
        Ok((evaluation(&sums, Order::Information), products))
    }
}

fn evaluation(sums: &Sums, order: Order) -> Evaluation {
    Evaluation {
        value: sums.log_likelihood(),
        gradient: if order >= Order::Gradient { sums.gradient() } else { Vec::new() },
        information: if order >= Order::Information { sums.information() } else { Mat::new() },
        longest_row: sums.longest_row(),
        not_finite: sums.not_finite,
    }
}

impl Objective for Likelihood<'_, '_> {
    fn evaluate(&mut self, point: &[f64], order: Order) -> Result<Evaluation, FitError> {
        Ok(evaluation(&self.sums(point, order)?, order))
    }

    fn separates(&mut self, direction: &[f64]) -> Result<bool, FitError> {
        let direction = Coefficients::from_vector(direction, self.layout.terms(), self.compared);
        let (layout, view) = (self.layout, self.view);
        let margins = self.table.reduce(|chunk| {
            let seen = view.map_or(Cow::Borrowed(chunk), |view| Cow::Owned(view(chunk)));
            Margins::of(layout, &direction, &seen)
        })?;
        Ok(margins.is_some_and(Margins::separate))
    }

    fn weight(&self) -> f64 {
        self.weight
    }
}
