//! From standardised columns back to the scale of the fields.
//!
//! A standardised term is the product of its standardised dense columns `(x - c) / s`, so it is a
//! combination of the plain terms that have some of those columns left out; all of these are in
//! the design, because main effects always are. With that linear map `T` the plain coefficients
//! are `T b` and their covariance is `T V T'`, category by category.

use faer::{Mat, MatRef};

use kilter_model::Design;

use crate::alias::Aliased;
use crate::layout::Scaling;

/// Coefficients of combinations below this count as rounding.
const ROUNDING: f64 = 1e-8;

/// The linear map from coefficients of the kept standardised terms to those of all plain terms.
#[derive(Debug, Clone)]
pub(crate) struct BackTransform {
    /// All terms x kept terms.
    map: Mat<f64>,
}

/// A term that is left out, and the combination of plain terms that equals it.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct LeftOut {
    pub(crate) term: usize,
    pub(crate) combination: Vec<(usize, f64)>,
}

/// Each standardised term as a combination of plain terms: all terms x all terms.
fn standardised_terms(design: &Design, scaling: &Scaling) -> Mat<f64> {
    let terms = design.terms();
    let mut map = Mat::zeros(terms.len(), terms.len());
    for (index, term) in terms.iter().enumerate() {
        for subset in 0..1usize << term.dense.len() {
            let (mut factor, mut left) = (1.0, Vec::new());
            for (position, &column) in term.dense.iter().enumerate() {
                let (centre, scale) = (scaling.centre[column], scaling.scale[column]);
                if subset >> position & 1 == 0 {
                    left.push(column);
                    factor /= scale;
                } else {
                    factor *= -centre / scale;
                }
            }
            if factor != 0.0
                && let Some(plain) =
                    terms.iter().position(|other| other.dense == left && other.levels == term.levels)
            {
                map[(plain, index)] += factor;
            }
        }
    }
    map
}

impl BackTransform {
    /// The map for the terms `kept` (by index in the design), and the terms left out.
    ///
    /// `aliased` are in design order with combinations of all standardised terms. A combination
    /// is the same whether it is written in standardised or in plain terms; any plain coefficient
    /// that a left-out term would get (from an interaction that stays) is moved to the terms that
    /// equal it.
    pub(crate) fn new(
        design: &Design,
        scaling: &Scaling,
        kept: &[usize],
        aliased: &[Aliased],
    ) -> (Self, Vec<LeftOut>) {
        let standardised = standardised_terms(design, scaling);
        let size = design.terms().len();
        // For each term left out: plain coefficients, other than 0 for the term itself, of a
        // combination that is 0 in every row.
        let mut vanishing: Vec<(usize, Vec<f64>)> = Vec::new();
        for left_out in aliased {
            let mut null: Vec<f64> = (0..size).map(|row| standardised[(row, left_out.column)]).collect();
            for (other, coefficient) in left_out.combination.iter().enumerate().filter(|(_, c)| **c != 0.0) {
                for row in 0..size {
                    null[row] -= coefficient * standardised[(row, other)];
                }
            }
            for (term, earlier) in vanishing.iter().rev() {
                subtract(&mut null, earlier, *term);
            }
            vanishing.push((left_out.column, null));
        }
        let mut map = Mat::zeros(size, kept.len());
        for (column, &term) in kept.iter().enumerate() {
            let mut plain: Vec<f64> = (0..size).map(|row| standardised[(row, term)]).collect();
            for (left_out, null) in vanishing.iter().rev() {
                subtract(&mut plain, null, *left_out);
            }
            for row in 0..size {
                map[(row, column)] = plain[row];
            }
        }
        let left_out = vanishing.into_iter().map(|(term, null)| combination(term, &null)).collect();
        (Self { map }, left_out)
    }

    /// For each plain term the size of what standardised coefficients can make of it.
    pub(crate) fn reach(&self) -> Vec<f64> {
        let size =
            |row: usize| (0..self.map.ncols()).map(|column| self.map[(row, column)].powi(2)).sum::<f64>();
        (0..self.map.nrows()).map(|row| size(row).sqrt()).collect()
    }

    /// Plain coefficients, category by category.
    pub(crate) fn coefficients(&self, standardised: &[f64]) -> Vec<Vec<f64>> {
        let row =
            |kept: &[f64], row: usize| kept.iter().enumerate().map(|(c, b)| self.map[(row, c)] * b).sum();
        let all = |kept: &[f64]| (0..self.map.nrows()).map(|term| row(kept, term)).collect();
        standardised.chunks_exact(self.map.ncols()).map(all).collect()
    }

    /// Covariance of all plain coefficients, category by category.
    pub(crate) fn covariance(&self, standardised: MatRef<'_, f64>) -> Mat<f64> {
        let (size, kept) = (self.map.nrows(), self.map.ncols());
        let compared = standardised.nrows() / kept;
        let mut covariance = Mat::zeros(size * compared, size * compared);
        for j in 0..compared {
            for k in 0..compared {
                let block = standardised.submatrix(j * kept, k * kept, kept, kept);
                let plain = &self.map * block * self.map.transpose();
                covariance.submatrix_mut(j * size, k * size, size, size).copy_from(&plain);
            }
        }
        covariance
    }
}

/// Removes a coefficient by subtracting the right multiple of a combination that is 0.
fn subtract(coefficients: &mut [f64], null: &[f64], term: usize) {
    let factor = coefficients[term] / null[term];
    if factor != 0.0 {
        for (coefficient, value) in coefficients.iter_mut().zip(null) {
            *coefficient -= factor * value;
        }
    }
    coefficients[term] = 0.0;
}

fn combination(term: usize, null: &[f64]) -> LeftOut {
    let others = null.iter().enumerate().filter(|&(other, _)| other != term);
    let combination = others
        .map(|(other, value)| (other, -value / null[term]))
        .filter(|(_, coefficient)| coefficient.abs() > ROUNDING)
        .collect();
    LeftOut { term, combination }
}

/// A combination in words: `1 - 2 rain + snow`.
pub(crate) fn describe(left_out: &LeftOut, names: &[String]) -> String {
    let mut text = String::new();
    for &(term, coefficient) in &left_out.combination {
        let rounded = (coefficient / ROUNDING).round() * ROUNDING;
        let size = shortest(rounded.abs());
        let sign = match (text.is_empty(), rounded < 0.0) {
            (true, false) => "",
            (true, true) => "-",
            (false, false) => " + ",
            (false, true) => " - ",
        };
        text.push_str(sign);
        match (names[term].as_str(), size.as_str()) {
            (kilter_model::INTERCEPT, size) => text.push_str(size),
            (name, "1") => text.push_str(name),
            (name, size) => text.extend([size, " ", name]),
        }
    }
    if text.is_empty() { "0".to_owned() } else { text }
}

fn shortest(value: f64) -> String {
    let text = format!("{value:.8}");
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}
