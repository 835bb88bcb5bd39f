//! Quadratic forms of scores in an information matrix that may be singular.

use faer::{Mat, Side};

/// Eigenvalues of the scaled information up to this, times its size, count as zero.
const SINGULAR: f64 = 1e-9;

/// Value and rank of a quadratic form.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Quadratic {
    /// `score' information^- score`.
    pub value: f64,
    /// Number of directions that carry information: the degrees of freedom.
    pub rank: usize,
}

/// A symmetric positive semi-definite matrix taken apart: rows without information dropped,
/// scaled to unit diagonal, eigenvalues near zero dropped.
#[derive(Debug, Clone)]
pub(crate) struct Spectrum {
    /// Size of the whole matrix.
    size: usize,
    /// Rows that carry information.
    rows: Vec<usize>,
    /// Their scales: square roots of the diagonal.
    scales: Vec<f64>,
    /// Kept eigenvalues, each with its eigenvector over `rows`.
    kept: Vec<(f64, Vec<f64>)>,
}

impl Spectrum {
    /// Takes a symmetric matrix, row by row, apart. A matrix that is not finite has rank 0.
    pub(crate) fn new(matrix: &[f64], size: usize) -> Self {
        let rows: Vec<usize> = (0..size).filter(|row| matrix[row * size + row] > 0.0).collect();
        let scales: Vec<f64> = rows.iter().map(|row| matrix[row * size + row].sqrt()).collect();
        let scaled = Mat::from_fn(rows.len(), rows.len(), |a, b| {
            matrix[rows[a] * size + rows[b]] / (scales[a] * scales[b])
        });
        let smallest = SINGULAR * rows.len() as f64;
        let usable = !rows.is_empty() && matrix.iter().all(|value| value.is_finite());
        let kept = match usable.then(|| scaled.self_adjoint_eigen(Side::Lower)) {
            Some(Ok(eigen)) => (0..rows.len())
                .map(|at| (eigen.S()[at], eigen.U().col(at).iter().copied().collect()))
                .filter(|(value, _)| *value > smallest)
                .collect(),
            _ => Vec::new(),
        };
        Self { size, rows, scales, kept }
    }

    /// Number of directions that carry information.
    pub(crate) fn rank(&self) -> usize {
        self.kept.len()
    }

    /// `score' matrix^- score` with its rank.
    pub(crate) fn form(&self, score: &[f64]) -> Quadratic {
        let value = self.kept.iter().map(|(value, vector)| self.project(score, vector).powi(2) / value);
        Quadratic { value: value.sum(), rank: self.rank() }
    }

    /// `matrix^- score`; 0 in rows without information.
    pub(crate) fn solve(&self, score: &[f64]) -> Vec<f64> {
        let mut solution = vec![0.0; self.size];
        for (value, vector) in &self.kept {
            let factor = self.project(score, vector) / value;
            for ((row, scale), entry) in self.rows.iter().zip(&self.scales).zip(vector) {
                solution[*row] += factor * entry / scale;
            }
        }
        solution
    }

    /// `matrix^-`, row by row.
    pub(crate) fn inverse(&self) -> Vec<f64> {
        let mut inverse = vec![0.0; self.size * self.size];
        for (value, vector) in &self.kept {
            for (a, row) in self.rows.iter().enumerate() {
                for (b, column) in self.rows.iter().enumerate() {
                    inverse[row * self.size + column] +=
                        vector[a] * vector[b] / (value * self.scales[a] * self.scales[b]);
                }
            }
        }
        inverse
    }

    fn project(&self, score: &[f64], vector: &[f64]) -> f64 {
        let rows = self.rows.iter().zip(&self.scales).zip(vector);
        rows.map(|((row, scale), entry)| score[*row] / scale * entry).sum()
    }
}

/// The rank-revealing quadratic form `score' information^- score`.
///
/// # Shapes
/// `score`: d; `information`: d x d, symmetric, row by row.
pub fn quadratic(score: &[f64], information: &[f64]) -> Quadratic {
    Spectrum::new(information, score.len()).form(score)
}

/// Maps a score and its information through indicator rows: entries of one group are added.
///
/// `groups[i]` is the group of entry i, `None` to leave it out. Returns the grouped score and the
/// grouped information of `count` groups.
pub(crate) fn grouped(
    score: &[f64],
    information: &[f64],
    groups: &[Option<usize>],
    count: usize,
) -> (Vec<f64>, Vec<f64>) {
    let size = score.len();
    let mut sums = vec![0.0; count];
    let mut matrix = vec![0.0; count * count];
    for (i, to) in groups.iter().enumerate() {
        let Some(to) = to else { continue };
        sums[*to] += score[i];
        for (k, other) in groups.iter().enumerate() {
            if let Some(other) = other {
                matrix[to * count + other] += information[i * size + k];
            }
        }
    }
    (sums, matrix)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::test_data::close;

    #[test]
    fn regular_form() {
        // (1, 2) with [[2, 1], [1, 3]]: inverse [[3, -1], [-1, 2]] / 5, form (3 - 4 + 8) / 5.
        let found = quadratic(&[1.0, 2.0], &[2.0, 1.0, 1.0, 3.0]);
        close("value", found.value, 1.4, 1e-14);
        assert_eq!(found.rank, 2);
        let solved = Spectrum::new(&[2.0, 1.0, 1.0, 3.0], 2).solve(&[1.0, 2.0]);
        close("first", solved[0], 0.2, 1e-14);
        close("second", solved[1], 0.6, 1e-14);
        let inverse = Spectrum::new(&[2.0, 1.0, 1.0, 3.0], 2).inverse();
        for (found, wanted) in inverse.iter().zip([0.6, -0.2, -0.2, 0.4]) {
            close("inverse", *found, wanted, 1e-14);
        }
    }

    #[test]
    fn what_carries_no_information_lowers_the_rank() {
        let dependent = quadratic(&[1.0, 1.0], &[1.0, 1.0, 1.0, 1.0]);
        close("value", dependent.value, 1.0, 1e-12);
        assert_eq!(dependent.rank, 1);
        let absent = quadratic(&[1.0, 5.0], &[4.0, 0.0, 0.0, 0.0]);
        close("value", absent.value, 0.25, 1e-14);
        assert_eq!(absent.rank, 1);
        assert_eq!(quadratic(&[1.0], &[f64::NAN]).rank, 0);
        assert_eq!(quadratic(&[], &[]).rank, 0);
    }

    #[test]
    fn scale_does_not_matter() {
        let plain = quadratic(&[1.0, 2.0], &[2.0, 1.0, 1.0, 3.0]);
        let scaled = quadratic(&[1e6, 2e-6], &[2e12, 1.0, 1.0, 3e-12]);
        close("value", scaled.value, plain.value, 1e-12);
    }
}
