//! Symmetric positive definite systems.

use faer::linalg::solvers::{DenseSolveCore, Solve};
use faer::{Mat, MatRef, Side};

/// Smallest pivot of the scaled matrix (diagonal 1) that counts as positive: below it rounding
/// errors have eaten the digits.
const SMALLEST_PIVOT: f64 = 1e-12;

/// The matrix is not positive definite to working precision.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct NotPositive {
    /// Row at which elimination broke down.
    pub(crate) row: usize,
}

/// Cholesky factor of a matrix scaled to unit diagonal.
#[derive(Debug)]
pub(crate) struct Factor {
    factor: faer::linalg::solvers::Llt<f64>,
    /// Reciprocal square roots of the diagonal.
    scale: Vec<f64>,
}

impl Factor {
    /// Factors a symmetric matrix of which the lower triangle is read.
    pub(crate) fn new(matrix: MatRef<'_, f64>) -> Result<Self, NotPositive> {
        let size = matrix.nrows();
        let diagonal = |row: usize| matrix[(row, row)];
        if let Some(row) = (0..size).find(|&row| !(diagonal(row) > 0.0 && diagonal(row).is_finite())) {
            return Err(NotPositive { row });
        }
        let scale: Vec<f64> = (0..size).map(|row| diagonal(row).sqrt().recip()).collect();
        let scaled = Mat::from_fn(size, size, |row, column| {
            let (row_, column_) = (row.max(column), row.min(column));
            matrix[(row_, column_)] * scale[row] * scale[column]
        });
        let factor = scaled.llt(Side::Lower).map_err(|error| match error {
            faer::linalg::cholesky::llt::factor::LltError::NonPositivePivot { index } => {
                NotPositive { row: index }
            }
        })?;
        let pivot = |row: usize| factor.L()[(row, row)].powi(2);
        match (0..size).find(|&row| pivot(row) < SMALLEST_PIVOT || pivot(row).is_nan()) {
            Some(row) => Err(NotPositive { row }),
            None => Ok(Self { factor, scale }),
        }
    }

    /// Solution of the system.
    pub(crate) fn solve(&self, right: &[f64]) -> Vec<f64> {
        let scaled = Mat::from_fn(right.len(), 1, |row, _| right[row] * self.scale[row]);
        let solution = self.factor.solve(&scaled);
        (0..right.len()).map(|row| solution[(row, 0)] * self.scale[row]).collect()
    }

    /// Natural logarithm of the determinant of the matrix.
    pub(crate) fn log_determinant(&self) -> f64 {
        let of = |(row, scale): (usize, &f64)| 2.0 * (self.factor.L()[(row, row)] / scale).ln();
        self.scale.iter().enumerate().map(of).sum()
    }

    /// Inverse of the matrix, both triangles.
    pub(crate) fn inverse(&self) -> Mat<f64> {
        let inverse = self.factor.inverse();
        let size = inverse.nrows();
        Mat::from_fn(size, size, |row, column| {
            let (row_, column_) = (row.max(column), row.min(column));
            inverse[(row_, column_)] * self.scale[row] * self.scale[column]
        })
    }
}

/// Inner product.
pub(crate) fn dot(left: &[f64], right: &[f64]) -> f64 {
    left.iter().zip(right).map(|(a, b)| a * b).sum()
}
