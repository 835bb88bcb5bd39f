//! Terms that others determine.

use faer::{Mat, MatRef};

/// Share of a column's sum of squares that the columns before it must leave unexplained.
const LEAST_LEFT: f64 = 1e-10;
/// Below this share a column is kept, but its coefficient is hardly determined (variance inflation
/// above a million).
const HARDLY_LEFT: f64 = 1e-6;

/// A column that columns before it determine.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Aliased {
    /// Its index.
    pub(crate) column: usize,
    /// Coefficients of all columns in the combination that equals it; 0 for columns that are left
    /// out themselves. Empty for a column of zeros.
    pub(crate) combination: Vec<f64>,
}

/// What a sweep over columns found.
#[derive(Debug, Clone, PartialEq, Default)]
pub(crate) struct Sweep {
    pub(crate) aliased: Vec<Aliased>,
    /// Columns that others almost determine.
    pub(crate) nearly: Vec<usize>,
}

impl Sweep {
    /// Leaves out columns of zeros only.
    pub(crate) fn zeros(products: &Mat<f64>) -> Self {
        let zeros = (0..products.nrows()).filter(|&column| products[(column, column)] <= 0.0);
        let aliased = zeros.map(|column| Aliased { column, combination: Vec::new() }).collect();
        Self { aliased, nearly: Vec::new() }
    }
}

/// Goes through the columns of a cross-product matrix in order and leaves out each that the kept
/// ones before it determine.
///
/// The matrix is scaled to unit diagonal and swept column by column (Beaton 1964): a column is
/// kept if its pivot, `1 - R^2` on the kept columns, is above a bound. The columns must be centred
/// and scaled, or the cross-products have no digits left to tell.
pub(crate) fn sweep(products: MatRef<'_, f64>) -> Sweep {
    let size = products.nrows();
    let scale: Vec<f64> = (0..size).map(|column| products[(column, column)].max(0.0).sqrt()).collect();
    let mut swept = Mat::from_fn(size, size, |row, column| {
        let product = scale[row] * scale[column];
        if product > 0.0 { products[(row, column)] / product } else { 0.0 }
    });
    let mut found = Sweep::default();
    let mut kept = vec![false; size];
    for column in 0..size {
        let pivot = swept[(column, column)];
        if scale[column] == 0.0 {
            found.aliased.push(Aliased { column, combination: Vec::new() });
        } else if pivot > LEAST_LEFT {
            if pivot < HARDLY_LEFT {
                found.nearly.push(column);
            }
            kept[column] = true;
            sweep_column(&mut swept, column);
        } else {
            let coefficient = |other: usize| {
                if kept[other] { swept[(other, column)] * scale[column] / scale[other] } else { 0.0 }
            };
            found.aliased.push(Aliased { column, combination: (0..size).map(coefficient).collect() });
        }
    }
    found
}

/// Regresses all columns on one more: rows of kept columns then hold regression coefficients, the
/// rest holds residual products.
fn sweep_column(matrix: &mut Mat<f64>, column: usize) {
    let size = matrix.nrows();
    let pivot = matrix[(column, column)];
    let row: Vec<f64> = (0..size).map(|other| matrix[(column, other)] / pivot).collect();
    for other in 0..size {
        let factor = matrix[(other, column)];
        if other != column && factor != 0.0 {
            for (target, value) in row.iter().enumerate() {
                matrix[(other, target)] -= factor * value;
            }
            matrix[(other, column)] = -factor / pivot;
        }
    }
    for (other, value) in row.iter().enumerate() {
        matrix[(column, other)] = *value;
    }
    matrix[(column, column)] = pivot.recip();
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Columns 1, z1, z2, gl, gm, then gk = 1 - gl - gm, a column of zeros and 2 z1 - z2.
    #[test]
    fn combinations_are_found_in_order() {
        let columns = 8;
        let rows: Vec<Vec<f64>> = (0..30)
            .map(|i| {
                let (z1, z2) = ((f64::from(i) * 0.7).sin(), (f64::from(i * i) * 0.3).cos());
                let level = |l: i32| f64::from(u8::from(i % 3 == l));
                vec![1.0, z1, z2, level(1), level(2), level(0), 0.0, 2.0 * z1 - z2]
            })
            .collect();
        let products =
            Mat::from_fn(columns, columns, |a, b| rows.iter().map(|row| row[a] * row[b]).sum::<f64>());
        let found = sweep(products.as_ref());
        let wanted = [
            (5, vec![1.0, 0.0, 0.0, -1.0, -1.0, 0.0, 0.0, 0.0]),
            (6, vec![]),
            (7, vec![0.0, 2.0, -1.0, 0.0, 0.0, 0.0, 0.0, 0.0]),
        ];
        assert_eq!(found.aliased.len(), 3);
        for (aliased, (column, combination)) in found.aliased.iter().zip(wanted) {
            assert_eq!(aliased.column, column);
            assert_eq!(aliased.combination.len(), combination.len());
            for (found, wanted) in aliased.combination.iter().zip(combination) {
                assert!((found - wanted).abs() < 1e-12, "{column}: {found} {wanted}");
            }
        }
        assert!(found.nearly.is_empty());
    }

    #[test]
    fn a_column_with_little_of_its_own_is_kept_and_named() {
        let noise = 1e-4;
        let products = [[1.0, 1.0], [1.0, 1.0 + noise * noise]];
        let matrix = Mat::from_fn(2, 2, |row, column| products[row][column]);
        let found = sweep(matrix.as_ref());
        assert_eq!((found.aliased.len(), found.nearly), (0, vec![1]));
    }
}
