//! What each term of a record adds to the log-odds of one category against another.

use crate::design::{Design, DesignError};
use crate::file::ModelFile;

/// Takes the log-odds of category A against category B apart: term by term the difference of the two
/// coefficients times the value of the term. The parts sum to the log-odds, up to rounding.
#[derive(Debug, Clone)]
pub struct Explanation {
    design: Design,
    differences: Vec<f64>,
}

/// Why a comparison cannot be explained.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum ExplanationError {
    /// A category that the model does not have.
    #[error("`{found}` is no category of the model; it has `{}`", .known.join("`, `"))]
    UnknownCategory {
        /// What was asked for.
        found: String,
        /// What there is.
        known: Vec<String>,
    },
    /// Both are the same category.
    #[error("`{0}` cannot be compared with itself")]
    Same(String),
    /// The fields make no design.
    #[error(transparent)]
    Design(#[from] DesignError),
}

impl Explanation {
    /// Of `category` against `against`, for a checked model file.
    ///
    /// # Errors
    /// [`ExplanationError`] where one of them is no category of the model, or both are the same.
    pub fn new(model: &ModelFile, category: &str, against: &str) -> Result<Self, ExplanationError> {
        let known = &model.outcome.categories;
        if let Some(found) = [category, against].into_iter().find(|name| !known.iter().any(|own| own == name))
        {
            return Err(ExplanationError::UnknownCategory { found: found.into(), known: known.clone() });
        }
        if category == against {
            return Err(ExplanationError::Same(category.into()));
        }
        let design = Design::of_model(model)?;
        // The reference category has no coefficients: they are 0.
        let coefficient = |name: &str, term: usize| {
            model.coefficients.get(name).and_then(|row| row.get(term)).unwrap_or(&0.0)
        };
        let differences =
            (0..design.terms().len()).map(|term| coefficient(category, term) - coefficient(against, term));
        Ok(Self { differences: differences.collect(), design })
    }

    /// Names of the terms, the intercept first.
    pub fn terms(&self) -> Vec<String> {
        self.design.term_names()
    }

    /// The parts of one record, one per term.
    ///
    /// `values` are the record's values as they are used, one per field (see [`crate::Coded::values`]).
    pub fn of_record(&self, values: &[f64]) -> Vec<f64> {
        let mut dense = vec![0.0; self.design.dense().len()];
        let mut terms = vec![0.0; self.differences.len()];
        self.design.fill_row(values, &mut dense, &mut terms);
        terms.iter().zip(&self.differences).map(|(term, difference)| term * difference).collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::batch::{Batch, Column, TextColumn};
    use crate::check::tests::programme;
    use crate::scorer::Scorer;

    #[test]
    fn the_parts_sum_to_the_log_odds_of_any_two_categories() {
        let model = programme();
        let texts = TextColumn { codes: vec![0, 1], dictionary: vec!["high".into(), "low".into()] };
        let columns = vec![Column::Text(texts), Column::Number(vec![52.0, 31.5])];
        let scored = Scorer::new(&model).unwrap().score(&Batch { rows: 2, columns, bad_cells: vec![] });
        for (a, b) in [(0, 1), (1, 2), (2, 0)] {
            let names = &model.outcome.categories;
            let explanation = Explanation::new(&model, &names[a], &names[b]).unwrap();
            for row in 0..2 {
                let values: Vec<f64> = scored.coded.values.iter().map(|column| column[row]).collect();
                let parts = explanation.of_record(&values);
                assert_eq!(parts.len(), explanation.terms().len());
                let p = scored.probabilities_of(row);
                let wanted = (p[a] / p[b]).ln();
                assert!((parts.iter().sum::<f64>() - wanted).abs() < 1e-12, "{a} {b} {row}");
            }
        }
    }

    #[test]
    fn what_cannot_be_compared_is_named() {
        let model = programme();
        let error = Explanation::new(&model, "general", "generl").unwrap_err().to_string();
        assert!(error.contains("`generl`") && error.contains("`vocational`"), "{error}");
        let same = Explanation::new(&model, "general", "general").unwrap_err();
        assert_eq!(same, ExplanationError::Same("general".into()));
    }
}
