//! Log-likelihood, gradient and information of the baseline-category logit, in one pass.
//!
//! With categories 0 (reference) to m and coefficients `b_j` (`b_0 = 0`), the log-odds of row i are
//! `eta_ij = x_i'b_j`, its probabilities `p_ij = exp(eta_ij) / sum_k exp(eta_ik)`. The
//! log-likelihood is `sum_i w_i log p_iy`, its gradient in `b_j` is `sum_i w_i (1[y = j] - p_ij) x_i`.
//! The information is assembled from one cross-product per pair of categories,
//! `S_jk = sum_i w_i p_ij p_ik x_i x_i'` for `0 <= j < k <= m`: block (j, k) is `-S_jk`, block
//! (j, j) the sum of all `S_jk` that hold j. All of these are sums of positive numbers, so a
//! probability close to 1 costs no digits.

use faer::linalg::matmul::matmul;
use faer::{Accum, Mat, MatMut, MatRef, Par};

use crate::chunk::Chunk;
use crate::cross::{CrossProducts, Weights};
use crate::layout::{BLOCK_ROWS, Block, Layout};
use crate::reduce::{Compensated, Merge, add_all};
use crate::vector::Softmax;

/// What a pass sums.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub(crate) enum Order {
    /// The log-likelihood.
    Value,
    /// And the gradient.
    Gradient,
    /// And the information.
    Information,
}

/// Coefficients, terms x m, row by row, in the internal order of a layout.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Coefficients {
    pub(crate) terms: usize,
    pub(crate) compared: usize,
    by_term: Vec<f64>,
}

impl Coefficients {
    /// From coefficients category by category.
    pub(crate) fn from_vector(vector: &[f64], terms: usize, compared: usize) -> Self {
        let mut by_term = vec![0.0; terms * compared];
        for (index, value) in vector.iter().enumerate() {
            by_term[(index % terms) * compared + index / terms] = *value;
        }
        Self { terms, compared, by_term }
    }
}

/// All pairs of categories j < k, in the order of their weights.
fn pairs(categories: usize) -> impl Iterator<Item = (usize, usize)> {
    (0..categories).flat_map(move |j| (j + 1..categories).map(move |k| (j, k)))
}

/// Sums over rows.
#[derive(Debug, Clone)]
pub(crate) struct Sums {
    terms: usize,
    compared: usize,
    log_likelihood: Compensated,
    /// Terms x m.
    gradient: Vec<f64>,
    /// One weight for each pair of categories.
    pairs: Option<CrossProducts>,
    /// Largest squared length of a row.
    longest: f64,
    /// Rows whose log-odds are not finite.
    pub(crate) not_finite: u64,
}

impl Merge for Sums {
    fn merge(&mut self, later: Self) {
        self.log_likelihood.merge(later.log_likelihood);
        add_all(&mut self.gradient, &later.gradient);
        if let (Some(pairs), Some(later)) = (&mut self.pairs, later.pairs) {
            pairs.merge(later);
        }
        self.longest = self.longest.max(later.longest);
        self.not_finite += later.not_finite;
    }
}

impl Sums {
    pub(crate) fn new(layout: &Layout, compared: usize, order: Order) -> Self {
        let terms = layout.terms();
        Self {
            terms,
            compared,
            log_likelihood: Compensated::default(),
            gradient: vec![0.0; if order >= Order::Gradient { terms * compared } else { 0 }],
            pairs: (order >= Order::Information)
                .then(|| CrossProducts::new(layout, compared * (compared + 1) / 2)),
            longest: 0.0,
            not_finite: 0,
        }
    }

    pub(crate) fn log_likelihood(&self) -> f64 {
        if self.not_finite > 0 { f64::NEG_INFINITY } else { self.log_likelihood.value() }
    }

    pub(crate) fn longest_row(&self) -> f64 {
        self.longest.sqrt()
    }

    /// The gradient, category by category.
    pub(crate) fn gradient(&self) -> Vec<f64> {
        let entry = |index: usize| self.gradient[(index % self.terms) * self.compared + index / self.terms];
        (0..self.gradient.len()).map(entry).collect()
    }

    /// The information matrix, category by category, both triangles.
    pub(crate) fn information(&self) -> Mat<f64> {
        let (p, m) = (self.terms, self.compared);
        let mut information = Mat::zeros(p * m, p * m);
        let Some(products) = &self.pairs else { return information };
        for (pair, (j, k)) in pairs(m + 1).enumerate() {
            for row in 0..p {
                for column in 0..p {
                    let value = products.at(pair, row, column);
                    let (at_k, also_k) = ((k - 1) * p + row, (k - 1) * p + column);
                    information[(at_k, also_k)] += value;
                    if j > 0 {
                        let (at_j, also_j) = ((j - 1) * p + row, (j - 1) * p + column);
                        information[(at_j, also_j)] += value;
                        information[(at_j, also_k)] -= value;
                        information[(at_k, also_j)] -= value;
                    }
                }
            }
        }
        information
    }
}

/// Scratch space of one thread.
#[derive(Debug, Default)]
pub(crate) struct Workspace {
    block: Block,
    /// Log-odds, then probabilities of all categories but the reference: m columns.
    odds: Vec<f64>,
    /// Probabilities of the reference.
    reference: Vec<f64>,
    /// `w_i (1[y = j] - p_ij)`: m columns.
    residuals: Vec<f64>,
    log_probability: Vec<f64>,
    weights: Weights,
    scratch: [Vec<f64>; 3],
}

impl Workspace {
    /// The block filled last.
    pub(crate) fn block(&self) -> &Block {
        &self.block
    }

    /// Fills the block and its log-odds, m columns.
    pub(crate) fn log_odds(
        &mut self,
        layout: &Layout,
        coefficients: &Coefficients,
        chunk: &Chunk,
        start: usize,
        end: usize,
    ) -> &mut [f64] {
        layout.fill(chunk, start, end, &mut self.block);
        self.odds.resize((end - start) * coefficients.compared, 0.0);
        products(&mut self.odds, &self.block, coefficients, layout);
        &mut self.odds
    }

    /// Turns the log-odds into probabilities and residuals.
    fn probabilities(&mut self, category: &[u32], weight: &[f64]) {
        let rows = category.len();
        self.residuals.resize(self.odds.len(), 0.0);
        let [largest, others, sum] = &mut self.scratch;
        for column in [&mut self.reference, &mut self.log_probability, &mut *largest, &mut *others, &mut *sum]
        {
            column.resize(rows, 0.0);
        }
        Softmax {
            odds: &mut self.odds,
            reference: &mut self.reference,
            category,
            weight,
            residuals: &mut self.residuals,
            log_probability: &mut self.log_probability,
            largest,
            others,
            sum,
        }
        .run();
    }

    /// Probabilities of a category.
    fn probabilities_of(&self, category: usize) -> &[f64] {
        let rows = self.block.rows;
        if category == 0 { &self.reference } else { &self.odds[(category - 1) * rows..][..rows] }
    }

    fn add_value(&self, sums: &mut Sums, weight: &[f64]) {
        let losses = self.log_probability.iter().zip(weight);
        sums.log_likelihood.add(losses.clone().map(|(log_p, weight)| weight * log_p).sum());
        sums.not_finite += losses.filter(|(log_p, _)| !log_p.is_finite()).count() as u64;
    }

    fn add_information(&mut self, sums: &mut Sums, weight: &[f64]) {
        let rows = self.block.rows;
        sums.longest = sums.longest.max(self.block.longest_squared());
        let Some(products) = &mut sums.pairs else { return };
        let mut weights = std::mem::take(&mut self.weights);
        let columns = weights.begin(rows, products.count()).chunks_exact_mut(rows);
        for ((j, k), column) in pairs(sums.compared + 1).zip(columns) {
            let probabilities = self.probabilities_of(j).iter().zip(self.probabilities_of(k));
            for ((slot, (of_j, of_k)), weight) in column.iter_mut().zip(probabilities).zip(weight) {
                *slot = weight * of_j * of_k;
            }
        }
        products.add(&self.block, &mut weights);
        self.weights = weights;
    }
}

/// Adds `x_i c_i'` to sums (terms x k, row by row), for the rows of a block with the k columns `c`.
pub(crate) fn add_linear(sums: &mut [f64], block: &Block, columns: &[f64], layout: &Layout) {
    let (rows, q, p) = (block.rows, layout.dense_terms(), layout.terms());
    let k = columns.len() / rows;
    matmul(
        MatMut::from_row_major_slice_mut(&mut sums[..q * k], q, k),
        Accum::Add,
        MatRef::from_column_major_slice(&block.dense, rows, q).transpose(),
        MatRef::from_column_major_slice(columns, rows, k),
        1.0,
        Par::Seq,
    );
    if p > q {
        for row in 0..rows {
            for &(term, value) in block.active_of(row) {
                for (column, slot) in sums[term as usize * k..][..k].iter_mut().enumerate() {
                    *slot += value * columns[column * rows + row];
                }
            }
        }
    }
}

/// Writes `x_i'b_j` of the rows of a block into m columns.
pub(crate) fn products(odds: &mut [f64], block: &Block, coefficients: &Coefficients, layout: &Layout) {
    let (m, q, rows) = (coefficients.compared, layout.dense_terms(), block.rows);
    matmul(
        MatMut::from_column_major_slice_mut(odds, rows, m),
        Accum::Replace,
        MatRef::from_column_major_slice(&block.dense, rows, q),
        MatRef::from_row_major_slice(&coefficients.by_term[..q * m], q, m),
        1.0,
        Par::Seq,
    );
    if layout.terms() > q {
        for row in 0..rows {
            for &(term, value) in block.active_of(row) {
                let coefficients = &coefficients.by_term[term as usize * m..][..m];
                for (j, coefficient) in coefficients.iter().enumerate() {
                    odds[j * rows + row] += value * coefficient;
                }
            }
        }
    }
}

/// Adds the rows of a chunk to the sums.
pub(crate) fn add_chunk(
    sums: &mut Sums,
    work: &mut Workspace,
    layout: &Layout,
    coefficients: &Coefficients,
    chunk: &Chunk,
    order: Order,
) {
    for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
        let end = (start + BLOCK_ROWS).min(chunk.rows());
        work.log_odds(layout, coefficients, chunk, start, end);
        let weight = &chunk.weight[start..end];
        work.probabilities(&chunk.category[start..end], weight);
        work.add_value(sums, weight);
        if order >= Order::Gradient {
            add_linear(&mut sums.gradient, &work.block, &work.residuals, layout);
        }
        if order >= Order::Information {
            work.add_information(sums, weight);
        }
    }
}

/// Adds to cross-products those of the terms, each row by its weight.
pub(crate) fn add_weighted_products(products: &mut CrossProducts, layout: &Layout, chunk: &Chunk) {
    let mut work = Workspace::default();
    for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
        let end = (start + BLOCK_ROWS).min(chunk.rows());
        layout.fill(chunk, start, end, &mut work.block);
        work.weights.begin(end - start, 1).copy_from_slice(&chunk.weight[start..end]);
        products.add(&work.block, &mut work.weights);
    }
}

/// Adds to cross-products the products of the scores of cases, with one weight for each pair of
/// categories j <= k: a row of c cases with total weight w counts `w^2 / c` times
/// `(1[y = j] - p_j) (1[y = k] - p_k)`.
pub(crate) fn add_score_products(
    products: &mut CrossProducts,
    work: &mut Workspace,
    layout: &Layout,
    coefficients: &Coefficients,
    chunk: &Chunk,
) {
    let m = coefficients.compared;
    for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
        let end = (start + BLOCK_ROWS).min(chunk.rows());
        let rows = end - start;
        work.log_odds(layout, coefficients, chunk, start, end);
        work.probabilities(&chunk.category[start..end], &chunk.weight[start..end]);
        let mut columns = work.weights.begin(rows, products.count()).chunks_exact_mut(rows);
        for (j, k) in (0..m).flat_map(|j| (j..m).map(move |k| (j, k))) {
            let Some(column) = columns.next() else { break };
            for (row, slot) in column.iter_mut().enumerate() {
                let residuals = work.residuals[j * rows + row] * work.residuals[k * rows + row];
                *slot = residuals / chunk.count[start + row];
            }
        }
        products.add(&work.block, &mut work.weights);
    }
}

/// Takes the range of rows of a block, the block and its probabilities.
type VisitBlock<'a> = dyn FnMut(std::ops::Range<usize>, &Block, &[f64]) + 'a;

/// Hands on each block of a chunk with the probabilities of its rows: J columns, the reference
/// first.
pub(crate) fn for_each_block(
    layout: &Layout,
    coefficients: &Coefficients,
    chunk: &Chunk,
    visit: &mut VisitBlock,
) {
    let mut work = Workspace::default();
    let mut probabilities = Vec::new();
    for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
        let end = (start + BLOCK_ROWS).min(chunk.rows());
        work.log_odds(layout, coefficients, chunk, start, end);
        work.probabilities(&chunk.category[start..end], &chunk.weight[start..end]);
        probabilities.clear();
        probabilities.extend_from_slice(&work.reference);
        probabilities.extend_from_slice(&work.odds);
        visit(start..end, &work.block, &probabilities);
    }
}

/// Hands on the score of each row of a chunk, `w (1[y = j] - p_j) x`, category by category.
pub(crate) fn for_each_score(
    layout: &Layout,
    coefficients: &Coefficients,
    chunk: &Chunk,
    visit: &mut dyn FnMut(usize, &[f64]),
) {
    let mut work = Workspace::default();
    let (p, q, m) = (layout.terms(), layout.dense_terms(), coefficients.compared);
    let (mut x, mut score) = (vec![0.0; p], vec![0.0; p * m]);
    for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
        let end = (start + BLOCK_ROWS).min(chunk.rows());
        let rows = end - start;
        work.log_odds(layout, coefficients, chunk, start, end);
        work.probabilities(&chunk.category[start..end], &chunk.weight[start..end]);
        for row in 0..rows {
            work.block.fill_row(row, q, &mut x);
            for (j, part) in score.chunks_exact_mut(p).enumerate() {
                let residual = work.residuals[j * rows + row];
                for (slot, value) in part.iter_mut().zip(&x) {
                    *slot = residual * value;
                }
            }
            visit(start + row, &score);
        }
    }
}

#[cfg(test)]
#[path = "likelihood_tests.rs"]
mod tests;
