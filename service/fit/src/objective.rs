//! The log-likelihood of the rows of a table as a function to maximise.

use std::borrow::Cow;

use faer::Mat;

use crate::chunk::Chunk;
use crate::error::FitError;
use crate::layout::Layout;
use crate::likelihood::{Coefficients, Order, Sums, Workspace, add_chunk};
use crate::newton::{Evaluation, Objective};
use crate::resolve::Resolved;
use crate::separation::Margins;
use crate::table::Table;

/// Up to this many products of terms, over all rows and pairs of categories, a pass is quick.
const QUICK_PRODUCTS: f64 = 1e9;

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

    fn separates(&mut self, direction: &[f64]) -> Result<Option<bool>, FitError> {
        let direction = Coefficients::from_vector(direction, self.layout.terms(), self.compared);
        let (layout, view) = (self.layout, self.view);
        let margins = self.table.reduce(|chunk| {
            let seen = view.map_or(Cow::Borrowed(chunk), |view| Cow::Owned(view(chunk)));
            Margins::of(layout, &direction, &seen)
        })?;
        Ok(margins.filter(|margins| margins.separate()).map(Margins::separate_completely))
    }

    fn weight(&self) -> f64 {
        self.weight
    }

    fn is_slow(&self) -> bool {
        let pairs = (self.compared * (self.compared + 1) / 2) as f64;
        self.table.rows() as f64 * (self.layout.terms() as f64).powi(2) * pairs > QUICK_PRODUCTS
    }
}
