//! Weighted cross-products of the terms, for several weights at once.
//!
//! Dense terms go through blocked matrix products; terms with levels are added where they apply.

use faer::linalg::matmul::triangular::{self, BlockStructure};
use faer::{Accum, Mat, MatMut, MatRef, Par};
use pulp::{Arch, Simd, WithSimd};

use crate::layout::{Block, Layout};
use crate::reduce::{Merge, add_all};
use crate::vector::WeighColumns;

/// Weights of the rows of a block, several per row.
#[derive(Debug, Default)]
pub(crate) struct Weights {
    /// Weight by weight, the rows of each one after another.
    by_weight: Vec<f64>,
    /// Row by row, padded to a multiple of [`LANES`].
    by_row: Vec<f64>,
    weighted: Vec<f64>,
}

/// Numbers that are added at once.
const LANES: usize = 4;

impl Weights {
    /// Starts anew with `count` weights for each of `rows` rows; they are to be filled in weight
    /// by weight.
    pub(crate) fn begin(&mut self, rows: usize, count: usize) -> &mut [f64] {
        self.by_weight.clear();
        self.by_weight.resize(rows * count, 0.0);
        &mut self.by_weight
    }
}

/// Sums of `w x_a x_b` over rows, for pairs of terms a >= b and several weights w.
#[derive(Debug, Clone)]
pub(crate) struct CrossProducts {
    dense_terms: usize,
    terms: usize,
    count: usize,
    /// For each weight the products of dense terms, column by column, upper triangle.
    dense: Vec<f64>,
    /// For each term with levels (row) and each term up to it (column) all weights, padded.
    levels: Vec<f64>,
}

impl Merge for CrossProducts {
    fn merge(&mut self, later: Self) {
        add_all(&mut self.dense, &later.dense);
        add_all(&mut self.levels, &later.levels);
    }
}

impl CrossProducts {
    pub(crate) fn new(layout: &Layout, count: usize) -> Self {
        let (dense_terms, terms) = (layout.dense_terms(), layout.terms());
        let padded = count.next_multiple_of(LANES);
        Self {
            dense_terms,
            terms,
            count,
            dense: vec![0.0; count * dense_terms * dense_terms],
            levels: vec![0.0; (terms - dense_terms) * terms * padded],
        }
    }

    /// Number of weights.
    pub(crate) fn count(&self) -> usize {
        self.count
    }

    /// The sum for one weight and a pair of terms.
    pub(crate) fn at(&self, weight: usize, a: usize, b: usize) -> f64 {
        let (row, column) = (a.max(b), a.min(b));
        let q = self.dense_terms;
        if row < q {
            self.dense[(weight * q + row) * q + column]
        } else {
            self.levels[((row - q) * self.terms + column) * self.count.next_multiple_of(LANES) + weight]
        }
    }

    /// The sums for one weight, both triangles.
    pub(crate) fn matrix(&self, weight: usize) -> Mat<f64> {
        Mat::from_fn(self.terms, self.terms, |a, b| self.at(weight, a, b))
    }

    /// Adds the rows of a block.
    pub(crate) fn add(&mut self, block: &Block, weights: &mut Weights) {
        let (q, rows) = (self.dense_terms, block.rows);
        weights.weighted.resize(q * rows, 0.0);
        for (sums, weights_of) in self.dense.chunks_exact_mut(q * q).zip(weights.by_weight.chunks_exact(rows))
        {
            WeighColumns { columns: &block.dense, weights: weights_of, weighted: &mut weights.weighted }
                .run();
            // Written as the lower triangle row by row, the matrix product of faer 0.24 would fill
            // the other one.
            triangular::matmul(
                MatMut::from_column_major_slice_mut(sums, q, q),
                BlockStructure::TriangularUpper,
                Accum::Add,
                MatRef::from_column_major_slice(&block.dense, rows, q).transpose(),
                BlockStructure::Rectangular,
                MatRef::from_column_major_slice(&weights.weighted, rows, q),
                BlockStructure::Rectangular,
                1.0,
                Par::Seq,
            );
        }
        if self.terms > q {
            self.add_levels(block, weights);
        }
    }

    fn add_levels(&mut self, block: &Block, weights: &mut Weights) {
        let (rows, padded) = (block.rows, self.count.next_multiple_of(LANES));
        weights.by_row.clear();
        weights.by_row.resize(rows * padded, 0.0);
        for (weight, of_rows) in weights.by_weight.chunks_exact(rows).enumerate() {
            for (row, value) in of_rows.iter().enumerate() {
                weights.by_row[row * padded + weight] = *value;
            }
        }
        Arch::new().dispatch(AddLevels {
            sums: &mut self.levels,
            dense_terms: self.dense_terms,
            terms: self.terms,
            lanes: padded / LANES,
            block,
            weights: &weights.by_row,
        });
    }
}

/// Adds the products of terms with levels: with all dense terms, and with each other.
struct AddLevels<'a> {
    sums: &'a mut [f64],
    dense_terms: usize,
    terms: usize,
    lanes: usize,
    block: &'a Block,
    weights: &'a [f64],
}

impl WithSimd for AddLevels<'_> {
    type Output = ();

    #[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let Self { sums, dense_terms: q, terms: p, lanes, block, weights } = self;
        let (sums, _) = sums.as_chunks_mut::<LANES>();
        let (weights, _) = weights.as_chunks::<LANES>();
        for (row, weights) in weights.chunks_exact(lanes).enumerate() {
            let active = block.active_of(row);
            let dense = &block.by_row[row * q..(row + 1) * q];
            for (index, &(term, value)) in active.iter().enumerate() {
                let of_term = &mut sums[(term as usize - q) * p * lanes..][..p * lanes];
                for (slots, dense) in of_term.chunks_exact_mut(lanes).zip(dense) {
                    add_multiple(slots, weights, value * dense);
                }
                // Terms of a row ascend, so the others up to this one have smaller numbers.
                for &(other, other_value) in &active[..=index] {
                    let slots = &mut of_term[other as usize * lanes..][..lanes];
                    add_multiple(slots, weights, value * other_value);
                }
            }
        }
    }
}

#[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
#[inline(always)]
fn add_multiple(slots: &mut [[f64; LANES]], weights: &[[f64; LANES]], factor: f64) {
    for (slots, weights) in slots.iter_mut().zip(weights) {
        for (slot, weight) in slots.iter_mut().zip(weights) {
            *slot = weight.mul_add(factor, *slot);
        }
    }
}
