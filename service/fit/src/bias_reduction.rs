//! Bias-reduced fits (Firth 1993; for several categories Kosmidis and Firth 2011): the maximum of
//! `ll + 1/2 ln det I`. It exists also where the data separate the categories.
//!
//! Its derivative adds to the score of category j the pseudo-count `w_i c_ij / 2` for each row, with
//! `c_ij = p_ij (h_j - 2 (H q)_j - sum_a q_a h_a + 2 q'H q)`, where `H_jk = x_i'V_jk x_i`, V is the
//! inverse of the information, h the diagonal of H, and q the probabilities without the reference.

use faer::{Mat, MatRef};

use crate::alias::sweep;
use crate::chunk::Chunk;
use crate::error::FitError;
use crate::estimate::{Method, Solution, cross_products, layout_after};
use crate::layout::Layout;
use crate::likelihood::{Coefficients, Order, add_linear, for_each_block};
use crate::linear::{Factor, dot};
use crate::newton::{Evaluation, Iterate, Objective, Optimum};
use crate::objective::Likelihood;
use crate::reduce::{Merge, add_all};
use crate::resolve::Resolved;
use crate::table::Table;

/// Stop when the remaining step is below this many standard errors.
const CLOSE: f64 = 1e-8;
/// Convergence is linear, but fast: some twenty steps.
const MOST_STEPS: u64 = 500;
const HALVINGS: i32 = 20;

/// Half the adjustments of the score, terms x m.
struct Adjustment(Vec<f64>);

impl Merge for Adjustment {
    fn merge(&mut self, later: Self) {
        add_all(&mut self.0, &later.0);
    }
}

/// The adjusted likelihood of the rows of a table.
pub(crate) struct BiasReduction<'s, 'a> {
    table: &'s mut Table<'a>,
    layout: &'s Layout,
    resolved: &'s Resolved,
    /// Coefficients that may move; the others stay at 0.
    free: Vec<bool>,
}

/// The adjusted likelihood at a point.
struct Adjusted {
    /// Log-likelihood and half the log-determinant of the information as value.
    at: Evaluation,
    log_likelihood: f64,
}

impl<'s, 'a> BiasReduction<'s, 'a> {
    pub(crate) fn new(table: &'s mut Table<'a>, layout: &'s Layout, resolved: &'s Resolved) -> Self {
        let size = layout.terms() * (resolved.category_weights.len() - 1);
        Self { table, layout, resolved, free: vec![true; size] }
    }

    /// The same with some coefficients held at 0.
    pub(crate) fn holding(mut self, held: &[usize]) -> Self {
        for &index in held {
            self.free[index] = false;
        }
        self
    }

    /// Intercepts of the mix with half a case more in each category, so that an empty category
    /// does no harm.
    fn start(&self) -> Vec<f64> {
        let weights = &self.resolved.category_weights;
        let intercept = |weight: &f64| ((weight + 0.5) / (weights[0] + 0.5)).ln();
        let order = self.layout.order();
        let block = |weight: &f64| {
            order.iter().map(|&term| if term == 0 { intercept(weight) } else { 0.0 }).collect()
        };
        weights[1..].iter().flat_map(|weight| -> Vec<f64> { block(weight) }).collect()
    }

    fn evaluate(&mut self, point: &[f64]) -> Result<(Adjusted, Factor), FitError> {
        let mut at =
            Likelihood::new(self.table, self.layout, self.resolved).evaluate(point, Order::Information)?;
        let factor =
            Factor::new(at.information.as_ref()).map_err(|_| FitError::NotFinite { rows: at.not_finite })?;
        let log_likelihood = at.value;
        at.value += 0.5 * factor.log_determinant();
        Ok((Adjusted { at, log_likelihood }, factor))
    }

    /// Adds the adjustment to the score.
    fn adjust(&mut self, point: &[f64], factor: &Factor, at: &mut Evaluation) -> Result<(), FitError> {
        let compared = point.len() / self.layout.terms();
        let coefficients = Coefficients::from_vector(point, self.layout.terms(), compared);
        let (layout, covariance) = (self.layout, factor.inverse());
        let found =
            self.table.reduce(|chunk| Adjustment::of(layout, &coefficients, covariance.as_ref(), chunk))?;
        for (index, slope) in at.gradient.iter_mut().enumerate() {
            let place = (index % layout.terms()) * compared + index / layout.terms();
            *slope += found.as_ref().map_or(0.0, |found| found.0[place]);
        }
        Ok(())
    }

    /// The step of the free coefficients and its length in standard errors.
    fn step(&self, at: &Evaluation) -> Result<(Vec<f64>, f64), FitError> {
        let free: Vec<usize> = (0..self.free.len()).filter(|&index| self.free[index]).collect();
        let information =
            Mat::from_fn(free.len(), free.len(), |row, column| at.information[(free[row], free[column])]);
        let score: Vec<f64> = free.iter().map(|&index| at.gradient[index]).collect();
        let factor =
            Factor::new(information.as_ref()).map_err(|_| FitError::NotFinite { rows: at.not_finite })?;
        let solved = factor.solve(&score);
        let mut step = vec![0.0; self.free.len()];
        for (&index, value) in free.iter().zip(&solved) {
            step[index] = *value;
        }
        Ok((step, dot(&score, &solved).max(0.0).sqrt()))
    }

    /// The maximum, and the log-likelihood there.
    pub(crate) fn maximise(
        mut self,
        watch: &mut dyn FnMut(u64, Iterate),
    ) -> Result<(Optimum, f64), FitError> {
        let mut point = self.start();
        let (mut here, mut factor) = self.evaluate(&point)?;
        for steps in 0..MOST_STEPS {
            self.adjust(&point, &factor, &mut here.at)?;
            let (step, decrement) = self.step(&here.at)?;
            watch(steps, Iterate { value: here.at.value, decrement });
            if decrement <= CLOSE {
                let covariance = factor.inverse();
                let log_likelihood = here.log_likelihood;
                return Ok((Optimum { point, at: here.at, covariance, decrement, steps }, log_likelihood));
            }
            (point, (here, factor)) = self.advance(&point, &step, decrement, here.at.value)?;
        }
        Err(FitError::NotConverged { iterations: MOST_STEPS, decrement: f64::NAN })
    }

    /// The first of the step, half of it, a quarter and so on that loses nothing.
    fn advance(
        &mut self,
        point: &[f64],
        step: &[f64],
        decrement: f64,
        value: f64,
    ) -> Result<(Vec<f64>, (Adjusted, Factor)), FitError> {
        // Differences of values below this drown in rounding.
        let rounding = 1e-12 * value.abs().max(1.0);
        for halving in 0..=HALVINGS {
            let length = 0.5f64.powi(halving);
            let candidate: Vec<f64> = point.iter().zip(step).map(|(at, step)| at + length * step).collect();
            let there = self.evaluate(&candidate)?;
            if there.0.at.value >= value - rounding {
                return Ok((candidate, there));
            }
        }
        Err(FitError::NotConverged { iterations: 0, decrement })
    }
}

impl Adjustment {
    fn of(layout: &Layout, coefficients: &Coefficients, covariance: MatRef<'_, f64>, chunk: &Chunk) -> Self {
        let (terms, m) = (layout.terms(), coefficients.compared);
        let mut sums = Self(vec![0.0; terms * m]);
        for_each_block(layout, coefficients, chunk, &mut |rows, block, p| {
            let n = block.rows;
            let mut x = vec![0.0; terms * n];
            for (row, x) in x.chunks_exact_mut(terms).enumerate() {
                block.fill_row(row, layout.dense_terms(), x);
            }
            let spread = spreads(MatRef::from_row_major_slice(&x, n, terms), covariance, m);
            let mut columns = vec![0.0; n * m];
            let (mut q, mut h) = (vec![0.0; m], vec![0.0; m * m]);
            for (i, row) in rows.enumerate() {
                for j in 0..m {
                    q[j] = p[(j + 1) * n + i];
                    for k in 0..m {
                        h[j * m + k] = spread[(j.max(k) * m + j.min(k)) * n + i];
                    }
                }
                for (j, pseudo_count) in pseudo_counts(&q, &h).into_iter().enumerate() {
                    columns[j * n + i] = 0.5 * chunk.weight[row] * pseudo_count;
                }
            }
            add_linear(&mut sums.0, block, &columns, layout);
        });
        sums
    }
}

/// `x_i'V_jk x_i` for j >= k: one column of rows for each, at place `j m + k`.
fn spreads(x: MatRef<'_, f64>, covariance: MatRef<'_, f64>, m: usize) -> Vec<f64> {
    let (n, terms) = (x.nrows(), x.ncols());
    let mut found = vec![0.0; m * m * n];
    for j in 0..m {
        for k in 0..=j {
            let product = x * covariance.submatrix(j * terms, k * terms, terms, terms);
            for (i, slot) in found[(j * m + k) * n..][..n].iter_mut().enumerate() {
                *slot = (0..terms).map(|term| product[(i, term)] * x[(i, term)]).sum();
            }
        }
    }
    found
}

/// The pseudo-counts `c_j` of one row, from its probabilities and `H`, m x m.
fn pseudo_counts(q: &[f64], h: &[f64]) -> Vec<f64> {
    let m = q.len();
    let hq: Vec<f64> = h.chunks_exact(m).map(|row| dot(row, q)).collect();
    let quadratic = dot(q, &hq);
    let mean: f64 = (0..m).map(|a| q[a] * h[a * m + a]).sum();
    (0..m).map(|j| q[j] * (h[j * m + j] - 2.0 * hq[j] - mean + 2.0 * quadratic)).collect()
}

/// Fits with bias reduction.
pub(crate) fn estimate_bias_reduced(
    table: &mut Table,
    resolved: &Resolved,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Solution, FitError> {
    let products = cross_products(table, resolved)?;
    let swept = sweep(products.as_ref());
    let layout = layout_after(resolved, &swept);
    let (optimum, log_likelihood) = BiasReduction::new(table, &layout, resolved).maximise(watch)?;
    Ok(Solution { layout, swept, optimum, products, log_likelihood, method: Method::BiasReduced })
}

#[cfg(test)]
#[path = "bias_reduction_tests.rs"]
mod tests;
