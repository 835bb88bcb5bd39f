//! One scored record, and what is computed from it before it is folded into sums.

use crate::error::DriftError;
use crate::frame::{Frame, check_length, check_number};

/// A scored record.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ScoredRecord<'a> {
    /// Log-odds of each category but the reference against the reference, model order (J-1).
    pub log_odds: &'a [f64],
    /// One value per model field: the number as it came; the index of the level; 0 or 1 of a flag.
    /// NaN where missing, -1 for a level that the model does not know.
    pub inputs: &'a [f64],
    /// The row of terms without the intercept, or empty where it is not at hand. With it the sums
    /// can tell how far the records have moved from those of the fit.
    pub terms: &'a [f64],
}

/// Probabilities of a record and their logarithms, all J categories.
pub(crate) struct Probabilities<'a> {
    /// Probabilities.
    pub(crate) p: &'a [f64],
    /// Their natural logarithms: finite also where the probability underflows.
    pub(crate) log_p: &'a [f64],
    /// `-sum p log p`.
    pub(crate) entropy: f64,
}

/// Largest number of categories whose probabilities are kept on the stack.
const ON_STACK: usize = 24;

/// Computes the probabilities of a record by log-sum-exp and hands them to `f`. Nothing is
/// allocated for up to 24 categories.
#[inline]
pub(crate) fn with_probabilities<R>(
    log_odds: &[f64],
    reference: usize,
    f: impl FnOnce(&Probabilities) -> R,
) -> R {
    let categories = log_odds.len() + 1;
    let mut stack = [0.0; 2 * ON_STACK];
    let mut heap = Vec::new();
    let buffer = if categories <= ON_STACK {
        &mut stack[..2 * categories]
    } else {
        heap.resize(2 * categories, 0.0);
        &mut heap[..]
    };
    let (p, log_p) = buffer.split_at_mut(categories);
    let entropy = fill_probabilities(log_odds, reference, p, log_p);
    f(&Probabilities { p, log_p, entropy })
}

/// Fills probabilities and their logarithms, and returns the entropy.
pub(crate) fn fill_probabilities(
    log_odds: &[f64],
    reference: usize,
    p: &mut [f64],
    log_p: &mut [f64],
) -> f64 {
    log_p[..reference].copy_from_slice(&log_odds[..reference]);
    log_p[reference] = 0.0;
    log_p[reference + 1..].copy_from_slice(&log_odds[reference..]);
    let largest = log_odds.iter().copied().fold(0.0, f64::max);
    let mut sum = 0.0;
    for (p, log_p) in p.iter_mut().zip(log_p.iter_mut()) {
        *log_p -= largest;
        *p = log_p.exp();
        sum += *p;
    }
    let log_sum = sum.ln();
    let mut entropy = 0.0;
    for (p, log_p) in p.iter_mut().zip(log_p.iter_mut()) {
        *p /= sum;
        *log_p -= log_sum;
        entropy -= *p * *log_p;
    }
    entropy
}

impl ScoredRecord<'_> {
    pub(crate) fn check(&self, frame: &Frame) -> Result<(), DriftError> {
        check_length("log_odds", self.log_odds.len(), frame.categories.len() - 1)?;
        check_length("inputs", self.inputs.len(), frame.fields.len())?;
        if !self.terms.is_empty() {
            check_length("terms", self.terms.len(), frame.terms)?;
        }
        for value in self.log_odds {
            check_number("log_odds", *value, true, "must be finite")?;
        }
        for value in self.terms {
            check_number("terms", *value, true, "must be finite")?;
        }
        Ok(())
    }
}

/// Smallest probability that is made of a rounded one.
const SMALLEST_ROUNDED: f64 = 1e-7;

/// Log-odds of probabilities that are known only as rounded numbers, such as imported scores:
/// every probability is raised to at least 1e-7, then all are normalised.
///
/// # Shapes
/// `probabilities`: J; `log_odds`: J-1, filled in model order without the reference. Returns
/// whether a probability had to be raised: count those records, because where they are more than
/// 0.1 % the log-loss is limited by the rounding.
///
/// # Errors
/// Lengths that do not fit, and probabilities that are negative or no numbers.
pub fn log_odds_of_rounded(
    probabilities: &[f64],
    reference: usize,
    log_odds: &mut [f64],
) -> Result<bool, DriftError> {
    check_length("log_odds", log_odds.len() + 1, probabilities.len())?;
    if reference >= probabilities.len() {
        return Err(DriftError::Reference { reference, categories: probabilities.len() });
    }
    for p in probabilities {
        check_number("probabilities", *p, *p >= 0.0, "must be finite and not negative")?;
    }
    let log_reference = probabilities[reference].max(SMALLEST_ROUNDED).ln();
    let others = probabilities.iter().enumerate().filter(|(category, _)| *category != reference);
    for (slot, (_, p)) in log_odds.iter_mut().zip(others) {
        *slot = p.max(SMALLEST_ROUNDED).ln() - log_reference;
    }
    Ok(probabilities.iter().any(|p| *p < SMALLEST_ROUNDED))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn probabilities_neither_overflow_nor_vanish_in_logarithms() {
        for (log_odds, reference) in [(&[800.0, -800.0][..], 0), (&[-750.0, 3.0], 1), (&[0.0, 0.0], 2)] {
            with_probabilities(log_odds, reference, |of| {
                let sum: f64 = of.p.iter().sum();
                assert!((sum - 1.0).abs() < 1e-15, "{log_odds:?}: {sum}");
                assert!(of.log_p.iter().all(|value| value.is_finite()));
                assert!(of.entropy >= 0.0);
            });
        }
        with_probabilities(&[800.0, -800.0], 0, |of| {
            assert_eq!(of.log_p, [-800.0, 0.0, -1600.0]);
        });
    }

    #[test]
    fn the_reference_may_stand_anywhere() {
        let p = [0.2, 0.5, 0.3];
        for reference in 0..3 {
            let mut log_odds = [0.0; 2];
            assert_eq!(log_odds_of_rounded(&p, reference, &mut log_odds), Ok(false));
            with_probabilities(&log_odds, reference, |of| {
                for (found, wanted) in of.p.iter().zip(p) {
                    assert!((found - wanted).abs() < 1e-15);
                }
            });
        }
    }

    #[test]
    fn a_rounded_zero_is_raised_and_told() {
        let mut log_odds = [0.0];
        assert_eq!(log_odds_of_rounded(&[1.0, 0.0], 0, &mut log_odds), Ok(true));
        assert!((log_odds[0] - 1e-7_f64.ln()).abs() < 1e-12);
        assert!(log_odds_of_rounded(&[1.0, -0.1], 0, &mut log_odds).is_err());
    }
}
