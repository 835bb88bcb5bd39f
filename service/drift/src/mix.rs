//! Class mix: how often each category came, against what the model promised and against the fit.

use serde::Serialize;

use crate::frame::Frame;
use crate::score_sums::{FEWEST_EXPECTED, FEWEST_RECORDS, FEWEST_VARIANCE, Pools, ScoreSums};
use crate::statistic::{Statistic, Status};
use crate::summary::Summary;
use crate::tails::{MidP, NORMAL_975, chi_square_upper, count_mid_p, wilson};
use crate::training::TrainingUncertainty;

/// Expected count from which a single category is judged by the normal distribution.
const NORMAL_FROM: f64 = 10.0;
/// Expected count below which a single category is not judged.
const COUNTS_ONLY_BELOW: f64 = 1.0;

/// One category: observed against promised.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CategoryMix {
    /// The category.
    pub category: String,
    /// How often it was observed.
    pub observed: f64,
    /// How often the model promised it: the sum of its probabilities.
    pub expected: f64,
    /// Share observed.
    pub observed_share: Option<f64>,
    /// Wilson 95 % interval of the share observed.
    pub observed_interval: Option<[f64; 2]>,
    /// Share promised.
    pub expected_share: Option<f64>,
    /// Share in the fit.
    pub training_share: Option<f64>,
    /// `(observed - expected)` in standard deviations; its p-value is from the normal distribution
    /// from 10 expected cases on, a mid-p of the count below.
    pub test: Statistic,
}

/// Class mix of a period.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ClassMix {
    /// Each category, model order.
    pub categories: Vec<CategoryMix>,
    /// Whether any intercept moved: all categories at once, those with few expected cases pooled.
    /// The same as the score test of the intercepts, given the slope to be expected.
    pub joint: Statistic,
    /// Observed counts against those of the fit (Pearson's homogeneity). Descriptive: it also
    /// answers to records of another kind, for which the model may be right.
    pub against_training: Statistic,
    /// Largest difference between shares observed and promised, in percentage points.
    pub gap: Option<f64>,
}

/// The class mix of the records with an outcome.
pub fn class_mix(frame: &Frame, summary: &Summary) -> ClassMix {
    let sums = ScoreSums::new(summary);
    let phi = TrainingUncertainty::new(frame, summary).phi;
    let training = frame.baseline.as_ref();
    let share = |value: f64| (sums.n > 0.0).then(|| value / sums.n);
    let categories = frame
        .categories
        .iter()
        .enumerate()
        .map(|(category, name)| CategoryMix {
            category: name.clone(),
            observed: sums.observed[category],
            expected: sums.expected[category],
            observed_share: share(sums.observed[category]),
            observed_interval: wilson(sums.observed[category], sums.n, NORMAL_975),
            expected_share: share(sums.expected[category]),
            training_share: training.map(|baseline| baseline.mix[category]),
            test: category_test(&sums, category, phi),
        })
        .collect();
    let gaps = sums.observed.iter().zip(&sums.expected).map(|(o, e)| 100.0 * (o - e).abs() / sums.n);
    ClassMix {
        categories,
        joint: joint_test(&sums.centred(frame.expected_slope()), phi, FEWEST_EXPECTED),
        against_training: training.map_or_else(
            || Statistic::unavailable(sums.n),
            |baseline| homogeneity(&sums.observed, &baseline.mix, baseline.cases),
        ),
        gap: (sums.n > 0.0).then(|| gaps.fold(0.0, f64::max)),
    }
}

/// One category against what was promised.
pub(crate) fn category_test(sums: &ScoreSums, category: usize, phi: Option<f64>) -> Statistic {
    let expected = sums.expected[category];
    let z = sums.score[category] / sums.variance(category).sqrt();
    // A confident model expects many cases and yet leaves little to chance.
    let enough = expected >= COUNTS_ONLY_BELOW
        && (expected < NORMAL_FROM || sums.variance(category) >= FEWEST_VARIANCE);
    let test = Statistic::normal(z, phi, sums.n, enough);
    if expected >= NORMAL_FROM || test.status == Status::NotAvailable {
        return test;
    }
    let p_of = |phi: f64| count_mid_p(sums.observed[category], expected, phi).map(MidP::two_sided);
    Statistic { p: phi.and_then(p_of), p_without_phi: phi.and_then(|_| p_of(1.0)), ..test }
}

/// All categories at once: T1, the categories pooled to at least `minimum` expected cases.
pub(crate) fn joint_test(sums: &ScoreSums, phi: Option<f64>, minimum: f64) -> Statistic {
    let pools = Pools::new(&sums.expected, minimum);
    if pools.count < 2 {
        return Statistic::unavailable(sums.n);
    }
    let form = sums.intercepts(&pools);
    Statistic::chi_square(form.value, form.rank, phi, sums.n, sums.is_enough(&pools))
}

/// Pearson's homogeneity of observed counts and the counts of the fit, `shares` of `cases`.
/// Categories that occur in neither are left out. No training uncertainty enters: both are counts.
pub(crate) fn homogeneity(observed: &[f64], shares: &[f64], cases: f64) -> Statistic {
    let n: f64 = observed.iter().sum();
    let training: f64 = shares.iter().sum::<f64>() * cases;
    let mut value = 0.0;
    let mut cells = 0_usize;
    let mut smallest = f64::INFINITY;
    for (count, share) in observed.iter().zip(shares) {
        let known = share * cases;
        let total = count + known;
        if total > 0.0 {
            cells += 1;
            let expected = total * n / (n + training);
            let expected_known = total * training / (n + training);
            value +=
                (count - expected).powi(2) / expected + (known - expected_known).powi(2) / expected_known;
            smallest = smallest.min(expected);
        }
    }
    let df = cells.saturating_sub(1);
    if df == 0 || !value.is_finite() {
        return Statistic::unavailable(n);
    }
    let enough = n >= FEWEST_RECORDS && smallest >= FEWEST_EXPECTED;
    let p = chi_square_upper(value, df);
    Statistic {
        statistic: Some(value),
        df: Some(df),
        p,
        p_without_phi: p,
        n,
        status: if enough { Status::Valid } else { Status::TooFew },
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::test_data::{close, plain_frame, summary_of};

    #[test]
    fn a_rare_category_is_judged_by_its_count() {
        // 200 records with 1 % each: 2 cases expected, 6 came. Poisson: P(X >= 7) + P(X = 6) / 2.
        let frame = plain_frame(&["handed-over", "carded"], &[]);
        let y: Vec<usize> = (0..200).map(|row| usize::from(row < 6)).collect();
        let sums = ScoreSums::new(&summary_of(&frame, &vec![[0.99, 0.01]; 200], &y));
        let poisson = |k: i32| (-2.0_f64).exp() * 2.0_f64.powi(k) / (1..=k).map(f64::from).product::<f64>();
        let upper = 1.0 - (0..=6).map(poisson).sum::<f64>() + 0.5 * poisson(6);
        let test = category_test(&sums, 1, Some(1.0));
        close("p", test.p.expect("a value"), 2.0 * upper, 1e-12);
        assert_eq!(test.status, Status::Valid);
        // The more records per training case, the less six cases prove.
        let milder = category_test(&sums, 1, Some(3.0));
        assert!(milder.p > test.p);
        assert_eq!(milder.p_without_phi, test.p);
    }

    #[test]
    fn what_leaves_nothing_to_chance_is_not_judged() {
        let frame = plain_frame(&["handed-over", "carded"], &[]);
        let p: Vec<[f64; 2]> =
            (0..400).map(|row| if row % 2 == 0 { [1.0 - 1e-6, 1e-6] } else { [1e-6, 1.0 - 1e-6] }).collect();
        let y: Vec<usize> = (0..400).map(|row| row % 2).collect();
        let sums = ScoreSums::new(&summary_of(&frame, &p, &y));
        assert_eq!(category_test(&sums, 0, Some(1.0)).status, Status::TooFew);
        assert_eq!(joint_test(&sums, Some(1.0), 5.0).status, Status::TooFew);
    }

    #[test]
    fn categories_that_never_came_are_left_out_of_homogeneity() {
        let test = homogeneity(&[30.0, 70.0, 0.0], &[0.5, 0.5, 0.0], 1000.0);
        assert_eq!(test.df, Some(1));
        assert_eq!(homogeneity(&[0.0, 0.0], &[0.5, 0.5], 1000.0).status, Status::NotAvailable);
    }
}
