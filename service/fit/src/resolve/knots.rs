//! Where the knots of a spline lie.

use crate::survey::Sampled;

/// Probabilities of the knots of a restricted cubic spline, for 3 to 7 knots (Harrell 2001).
const KNOT_QUANTILES: [&[f64]; 5] = [
    &[0.10, 0.50, 0.90],
    &[0.05, 0.35, 0.65, 0.95],
    &[0.05, 0.275, 0.50, 0.725, 0.95],
    &[0.05, 0.23, 0.41, 0.59, 0.77, 0.95],
    &[0.025, 0.1833, 0.3417, 0.50, 0.6583, 0.8167, 0.975],
];

/// Knots at the usual quantiles of the cases; fewer where quantiles coincide.
///
/// A quantile lies at position `(N - 1) q` among the N cases in order, between its neighbours by
/// linear interpolation. Knots of a sample are rounded to four significant digits.
pub(super) fn spline_knots(sample: &[Sampled], knots: u32, partial: bool) -> Vec<f64> {
    let mut cases: Vec<(f64, f64)> = sample.iter().map(|sampled| (sampled.value, sampled.count)).collect();
    cases.sort_by(|a, b| a.0.total_cmp(&b.0));
    let total: f64 = cases.iter().map(|(_, count)| count).sum();
    let mut chosen: Vec<f64> = KNOT_QUANTILES[knots as usize - 3]
        .iter()
        .map(|probability| quantile(&cases, total, *probability))
        .map(|knot| if partial { rounded(knot) } else { knot })
        .collect();
    chosen.dedup();
    chosen
}

fn quantile(cases: &[(f64, f64)], total: f64, probability: f64) -> f64 {
    let position = ((total - 1.0) * probability).max(0.0);
    let below = value_at(cases, position.floor());
    below + (value_at(cases, position.floor() + 1.0) - below) * position.fract()
}

/// The value of the case with this number, counted from 0 in ascending order.
fn value_at(cases: &[(f64, f64)], number: f64) -> f64 {
    let mut before = 0.0;
    for &(value, count) in cases {
        before += count;
        if before > number {
            return value;
        }
    }
    cases.last().map_or(f64::NAN, |&(value, _)| value)
}

fn rounded(value: f64) -> f64 {
    format!("{value:.3e}").parse().unwrap_or(value)
}
