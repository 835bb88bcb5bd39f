//! Coverage: for how many of the records that are old enough an outcome came, and whether those
//! without one are like the others.

use serde::Serialize;

use crate::frame::Frame;
use crate::quadratic::quadratic;
use crate::score_sums::FEWEST_RECORDS;
use crate::statistic::Statistic;
use crate::summary::{Summary, lower};

/// Share with an outcome below which outcomes are incomplete.
const SMALLEST_SHARE: f64 = 0.8;
/// Ratio of the coverages of two categories above which outcomes are incomplete.
const LARGEST_RATIO: f64 = 1.25;

/// Coverage of the records of closed windows.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Coverage {
    /// Records scored.
    pub scored: f64,
    /// Those of them with an outcome.
    pub with_outcome: f64,
    /// Their share.
    pub share: Option<f64>,
    /// For each category, model order, the share of its predicted cases that have an outcome.
    pub categories: Vec<CategoryCoverage>,
    /// Largest over smallest coverage of a category.
    pub ratio: Option<f64>,
    /// Whether having an outcome depends on the prediction. It cannot see whether it depends on
    /// the outcome itself; act on the ratio, not on the p-value.
    pub test: Statistic,
    /// Whether outcomes are too incomplete for the calibration figures to be taken at face value.
    pub incomplete: bool,
}

/// Coverage of one category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CategoryCoverage {
    /// The category.
    pub category: String,
    /// Share of its predicted cases with an outcome.
    pub share: Option<f64>,
}

/// Coverage of a summary of closed windows: its scored part against its outcome part.
pub fn coverage(frame: &Frame, summary: &Summary) -> Coverage {
    let (scored, with_outcome) = (summary.scored(), summary.outcomes());
    let predicted = summary.predicted();
    let shares: Vec<Option<f64>> = summary
        .expected()
        .iter()
        .zip(&predicted)
        .map(|(with, all)| (*all > 0.0).then(|| with / all))
        .collect();
    let share = (scored > 0.0).then(|| with_outcome / scored);
    let largest = shares.iter().flatten().copied().fold(f64::NEG_INFINITY, f64::max);
    let smallest = shares.iter().flatten().copied().fold(f64::INFINITY, f64::min);
    let ratio = (with_outcome > 0.0 && smallest > 0.0).then(|| largest / smallest);
    let incomplete =
        share.is_some_and(|share| share < SMALLEST_SHARE) || ratio.is_some_and(|ratio| ratio > LARGEST_RATIO);
    let name =
        |(name, share): (&String, &Option<f64>)| CategoryCoverage { category: name.clone(), share: *share };
    Coverage {
        scored,
        with_outcome,
        share,
        categories: frame.categories.iter().zip(&shares).map(name).collect(),
        ratio,
        test: coverage_test(frame, summary, &predicted),
        incomplete,
    }
}

/// Score test that the chance of an outcome does not depend on the probabilities:
/// `U = sum (o - c) p` with the overall share c, `I = c (1 - c) sum (p - mean)(p - mean)'`.
fn coverage_test(frame: &Frame, summary: &Summary, predicted: &[f64]) -> Statistic {
    let (scored, with_outcome) = (summary.scored(), summary.outcomes());
    let share = with_outcome / scored;
    let expected = summary.expected();
    if !(share > 0.0 && share < 1.0) {
        return Statistic::unavailable(scored);
    }
    let score: Vec<f64> = frame.compared().map(|j| expected[j] - share * predicted[j]).collect();
    let information: Vec<f64> = frame
        .compared()
        .flat_map(|j| frame.compared().map(move |k| (j, k)))
        .map(|(j, k)| {
            let products = summary.scored.products.value(lower(j, k));
            share * (1.0 - share) * (products - predicted[j] * predicted[k] / scored)
        })
        .collect();
    let form = quadratic(&score, &information);
    Statistic::chi_square(form.value, form.rank, Some(1.0), scored, scored >= FEWEST_RECORDS)
}
