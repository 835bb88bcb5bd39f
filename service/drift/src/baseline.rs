//! What a fit writes into its model file for the monitor: the baseline over its own rows and the
//! figures over the rows kept out.

use kilter_model::{Baseline, FieldBaseline, Holdout};

use crate::error::DriftError;
use crate::frame::{FieldBins, Frame, PROBABILITY_BINS, check_length, check_number};
use crate::quadratic::Spectrum;
use crate::score_sums::ScoreSums;
use crate::summary::{Summary, lower};

/// Smallest slope that is expected of a fit.
const SMALLEST_SLOPE: f64 = 0.5;
/// Coefficients up to which a fit is not too extreme.
const FEWEST_SLOPES: u64 = 2;

/// What the fit knows and its summary does not.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct FitFacts {
    /// Number of cases N: the sum of the weights where they count cases, `(sum w)^2 / sum w^2`
    /// where they are sampling weights.
    pub cases: f64,
    /// Number of coefficients that are not intercepts.
    pub slopes: u64,
    /// Whether the fit was penalised; its slope is then taken to be right.
    pub penalised: bool,
    /// Mean of each term but the intercept, or empty.
    pub term_means: Vec<f64>,
    /// Their covariance, divisor N, rows of the lower triangle, or empty.
    pub term_covariance: Vec<f64>,
    /// For each field the numbers of levels seen once and twice, absent for numbers and flags.
    /// Empty where they are not known.
    pub rare_levels: Vec<Option<[u64; 2]>>,
}

/// The baseline of a fit from the full or light summary of its own rows, scored and with their
/// outcomes, each with its case weight.
///
/// # Errors
/// [`DriftError::Missing`] for a summary without rows or one whose rows were not all given with
/// their outcomes, lists of the wrong length, and numbers that cannot be.
pub fn baseline(frame: &Frame, summary: &Summary, facts: FitFacts) -> Result<Baseline, DriftError> {
    summary.check(frame)?;
    check_number("cases", facts.cases, facts.cases > 0.0, "must be above 0")?;
    let weight = summary.scored();
    if weight == 0.0 || (summary.outcomes() / weight - 1.0).abs() > 1e-9 {
        return Err(DriftError::Missing {
            what: "baseline",
            needed: "every row of the fit both as scored record and with its outcome",
        });
    }
    if !facts.term_means.is_empty() {
        check_length("term_means", facts.term_means.len(), frame.terms)?;
        check_length("term_covariance", facts.term_covariance.len(), frame.terms * (frame.terms + 1) / 2)?;
    }
    if !facts.rare_levels.is_empty() {
        check_length("rare_levels", facts.rare_levels.len(), frame.fields.len())?;
    }
    let scale = facts.cases / weight;
    let sums = ScoreSums::new(summary);
    let categories = frame.categories.len();
    let mean_probability: Vec<f64> = summary.predicted().iter().map(|sum| sum / weight).collect();
    let slope_information = scale * slope_information(frame, &sums);
    let histogram = &summary.scored.histogram;
    Ok(Baseline {
        cases: facts.cases,
        mix: sums.observed.iter().map(|count| count / weight).collect(),
        slopes: facts.slopes,
        slope_information,
        expected_slope: expected_slope(facts.slopes, slope_information, facts.penalised),
        variance: (0..categories).map(|category| scale * sums.variance(category)).collect(),
        probability_covariance: probability_covariance(summary, &mean_probability),
        mean_probability,
        probability_histogram: histogram
            .chunks(PROBABILITY_BINS)
            .map(|bins| bins.iter().map(|count| scale * count).collect())
            .collect(),
        decile_edges: frame.decile_edges.clone(),
        log_loss: summary.outcomes.loss.values().iter().sum::<f64>() / weight,
        fields: fields(frame, summary, &facts.rare_levels, scale),
        term_means: facts.term_means,
        term_covariance: facts.term_covariance,
    })
}

/// Efficient information about a common slope, the intercepts allowed for.
fn slope_information(frame: &Frame, sums: &ScoreSums) -> f64 {
    let size = sums.categories() + 1;
    let at = |row: usize, column: usize| sums.information[row * size + column];
    let intercepts: Vec<f64> = frame
        .compared()
        .flat_map(|row| frame.compared().map(move |column| (row, column)))
        .map(|(r, c)| at(r, c))
        .collect();
    let shared: Vec<f64> = frame.compared().map(|row| at(row, size - 1)).collect();
    let taken = Spectrum::new(&intercepts, shared.len()).form(&shared).value;
    (at(size - 1, size - 1) - taken).max(0.0)
}

/// The slope to be expected on new records: `1 - (k - 2) / information`, the bias of the shrinkage
/// of Van Houwelingen and le Cessie (1990) with the information of the slope score, between 0.5
/// and 1.
pub fn expected_slope(slopes: u64, information: f64, penalised: bool) -> f64 {
    if slopes <= FEWEST_SLOPES || penalised {
        return 1.0;
    }
    if information <= 0.0 {
        return SMALLEST_SLOPE;
    }
    (1.0 - (slopes - FEWEST_SLOPES) as f64 / information).clamp(SMALLEST_SLOPE, 1.0)
}

fn probability_covariance(summary: &Summary, means: &[f64]) -> Vec<f64> {
    let size = means.len();
    (0..size * size)
        .map(|at| {
            let (row, column) = (at / size, at % size);
            summary.scored.products.value(lower(row, column)) / summary.scored() - means[row] * means[column]
        })
        .collect()
}

fn fields(
    frame: &Frame,
    summary: &Summary,
    rare_levels: &[Option<[u64; 2]>],
    scale: f64,
) -> Vec<FieldBaseline> {
    let field = |(index, layout): (usize, &crate::frame::FieldLayout)| {
        let part = &summary.fields[index];
        let (edges, observed) = match &layout.bins {
            FieldBins::Number { edges, observed } => (edges.clone(), *observed),
            FieldBins::Levels { .. } | FieldBins::Flag => (Vec::new(), None),
        };
        FieldBaseline {
            name: layout.name.clone(),
            edges,
            counts: part.bins.iter().map(|count| scale * count).collect(),
            missing: scale * part.missing,
            rare_levels: rare_levels.get(index).copied().flatten(),
            observed,
        }
    };
    frame.fields.iter().enumerate().map(field).collect()
}

/// The figures of rows kept out of the fit. `mix` is the mix of the fit, `rows` the number of rows
/// behind the weights.
///
/// # Errors
/// [`DriftError::Missing`] for a summary without outcomes, a mix of the wrong length.
pub fn holdout(summary: &Summary, mix: &[f64], rows: u64) -> Result<Holdout, DriftError> {
    let part = &summary.outcomes;
    let n = part.total();
    if n == 0.0 {
        return Err(DriftError::Missing { what: "holdout", needed: "rows with an outcome" });
    }
    check_length("mix", mix.len(), part.observed.len())?;
    let loss = part.loss.values().iter().sum::<f64>() / n;
    let expected = part.entropy.value() / n;
    let excess = loss - expected;
    let sample = if n > 1.0 { n - 1.0 } else { 1.0 };
    let seen = part.observed.iter().zip(mix).filter(|(count, _)| **count > 0.0);
    Ok(Holdout {
        rows,
        weight: n,
        log_loss: loss,
        log_loss_variance: ((part.loss_squared.value() - n * loss * loss) / sample).max(0.0),
        log_loss_expected: expected,
        excess_variance: ((part.excess_squared.value() - n * excess * excess) / sample).max(0.0),
        log_loss_null: seen.map(|(count, share)| -count * share.ln()).sum::<f64>() / n,
        brier: part.brier.value() / n,
        brier_expected: part.brier_expected.value() / n,
        observed_mix: part.observed.iter().map(|count| count / n).collect(),
        predicted_mix: part.expected.values().iter().map(|sum| sum / n).collect(),
    })
}
