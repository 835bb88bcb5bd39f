//! Whether a matrix can be a covariance: no combination of coefficients has a variance below zero.

use crate::file::Covariance;
use crate::limits::LARGEST_FACTORED;

/// How far below zero a variance may fall, after scaling to unit variances. Covariances come from
/// the inverse of an information matrix in double precision: with a condition of 1e8 their scaled
/// entries are good to about 1e-8, and singular ones (fewer clusters than coefficients) scatter
/// around zero by the same.
const ROUNDING: f64 = 1e-7;

/// The finding.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Semidefinite {
    /// It is positive semidefinite up to rounding.
    Yes,
    /// A diagonal entry is below zero.
    Negative { at: usize, variance: f64 },
    /// An entry exceeds the product of the two standard errors.
    Pair { row: usize, column: usize },
    /// The leading block up to this coefficient has a negative eigenvalue.
    No { at: usize },
}

/// Looks at a covariance of `size` coefficients, whose list has the right length.
///
/// Coefficients of variance zero (left out of the fit) must have covariances of zero and are
/// passed over. Above [`LARGEST_FACTORED`] coefficients only pairs are looked at.
pub(super) fn semidefinite(covariance: &Covariance, size: usize) -> Semidefinite {
    for at in 0..size {
        let variance = covariance.at(at, at);
        if variance < 0.0 {
            return Semidefinite::Negative { at, variance };
        }
    }
    let errors: Vec<f64> = (0..size).map(|at| covariance.at(at, at).sqrt()).collect();
    for row in 0..size {
        for column in 0..row {
            // Divided one after another: the product of two variances can underflow.
            let entry = covariance.at(row, column);
            let scaled = (entry / errors[row] / errors[column]).abs();
            if entry != 0.0 && scaled > 1.0 + ROUNDING {
                return Semidefinite::Pair { row, column };
            }
        }
    }
    if size <= LARGEST_FACTORED { factor(covariance, &errors) } else { Semidefinite::Yes }
}

/// Cholesky's factorisation of the correlations with [`ROUNDING`] added to the diagonal: it exists
/// exactly where no eigenvalue is below minus that.
fn factor(covariance: &Covariance, errors: &[f64]) -> Semidefinite {
    let kept: Vec<usize> = (0..errors.len()).filter(|&at| errors[at] > 0.0).collect();
    let mut factor: Vec<Vec<f64>> = Vec::with_capacity(kept.len());
    for (i, &row) in kept.iter().enumerate() {
        let mut current = Vec::with_capacity(i + 1);
        for (j, &column) in kept[..i].iter().enumerate() {
            let correlation = covariance.at(row, column) / errors[row] / errors[column];
            current.push((correlation - dot(&current, &factor[j][..j])) / factor[j][j]);
        }
        let pivot = 1.0 + ROUNDING - dot(&current, &current);
        if pivot <= 0.0 {
            return Semidefinite::No { at: row };
        }
        current.push(pivot.sqrt());
        factor.push(current);
    }
    Semidefinite::Yes
}

/// Inner product in four running sums, which the processor adds side by side.
fn dot(a: &[f64], b: &[f64]) -> f64 {
    let (a4, b4) = (a.chunks_exact(4), b.chunks_exact(4));
    let rest: f64 = a4.remainder().iter().zip(b4.remainder()).map(|(x, y)| x * y).sum();
    let mut sums = [0.0; 4];
    for (x, y) in a4.zip(b4) {
        for lane in 0..4 {
            sums[lane] += x[lane] * y[lane];
        }
    }
    sums.iter().sum::<f64>() + rest
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::file::COVARIANCE_ORDER;

    fn finding(lower: &[f64]) -> Semidefinite {
        let size = (0..=lower.len()).find(|n| n * (n + 1) / 2 == lower.len()).unwrap();
        semidefinite(&Covariance { order: COVARIANCE_ORDER.into(), lower: lower.to_vec() }, size)
    }

    #[test]
    fn worked_cases() {
        for (case, lower, want) in [
            ("unit matrix", &[1.0, 0.0, 1.0][..], Semidefinite::Yes),
            ("one coefficient left out", &[2.0, 0.0, 0.0, 1.0, 0.0, 3.0], Semidefinite::Yes),
            ("left out, but with a covariance", &[2.0, 0.1, 0.0], Semidefinite::Pair { row: 1, column: 0 }),
            ("negative variance", &[1.0, 0.0, -2.0], Semidefinite::Negative { at: 1, variance: -2.0 }),
            ("correlation above one", &[1.0, 1.1, 1.0], Semidefinite::Pair { row: 1, column: 0 }),
            // All three pairs are possible alone; the determinant is 1 - 3 * 0.81 - 2 * 0.729 < 0.
            ("impossible triangle", &[1.0, -0.9, 1.0, -0.9, -0.9, 1.0], Semidefinite::No { at: 2 }),
            // Rank one: (1, 2, 3) times its transpose.
            ("singular", &[1.0, 2.0, 4.0, 3.0, 6.0, 9.0], Semidefinite::Yes),
            ("tiny and huge", &[1e-300, 0.9e-5, 1e290], Semidefinite::Yes),
            ("no coefficient", &[], Semidefinite::Yes),
        ] {
            assert_eq!(finding(lower), want, "{case}");
        }
    }

    /// A Gram matrix of fewer vectors than rows is singular; its rounding must not be a fault.
    #[test]
    fn singular_gram_matrices_pass_and_lose_their_standing_when_an_entry_is_exchanged() {
        let size = 40;
        let vector = |row: usize, k: usize| ((row * 37 + k * 91 + row * k * 13) % 101) as f64 / 50.0 - 1.0;
        let mut lower = Vec::new();
        for row in 0..size {
            for column in 0..=row {
                lower.push((0..7).map(|k| vector(row, k) * vector(column, k)).sum::<f64>());
            }
        }
        assert_eq!(finding(&lower), Semidefinite::Yes);
        let at = 20 * 21 / 2 + 3;
        lower[at] = -lower[at];
        assert!(matches!(finding(&lower), Semidefinite::No { .. } | Semidefinite::Pair { .. }));
    }
}
