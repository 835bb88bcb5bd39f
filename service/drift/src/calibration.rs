//! Calibration by score tests: intercepts, a common slope, a full matrix of slopes.

use serde::Serialize;

use crate::frame::Frame;
use crate::losses::FEWEST_LOSS_VARIANCE;
use crate::quadratic::{Quadratic, quadratic};
use crate::score_sums::{FEWEST_EXPECTED, Pools, ScoreSums};
use crate::statistic::{Statistic, Status};
use crate::summary::{Summary, lower, lower_length};
use crate::tails::NORMAL_975;
use crate::training::TrainingUncertainty;

/// Expected count that every category must reach before the full matrix is judged.
const FEWEST_EXPECTED_MATRIX: f64 = 20.0;
/// Intercept error from which slope and intercepts cannot be told apart by one step.
const LARGEST_INTERCEPT: f64 = 0.3;

/// Calibration of a period.
///
/// The intercepts alone are judged by [`crate::ClassMix::joint`] and the slope with known
/// intercepts by [`crate::LogLoss::excess`]; the same tests are not given twice.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Calibration {
    /// The main test: intercepts 0 and slope as expected.
    pub joint: Statistic,
    /// The slope, after allowing for intercepts.
    pub slope: Statistic,
    /// The full matrix of slopes.
    pub matrix: Statistic,
    /// What intercepts and a common slope cannot repair.
    pub beyond_slope: Statistic,
    /// One-step estimates of the recalibration.
    pub estimates: Estimates,
}

/// One-step estimates of the recalibration `log(q_j / q_r) = a_j + s log(p_j / p_r)`: good to about
/// |a| < 0.5 and |s - 1| < 0.3, beyond that they overstate.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Estimates {
    /// The category that the others are compared against.
    pub reference: String,
    /// For each other category its intercept: the odds are off by the factor `exp` of it.
    pub intercepts: Vec<Intercept>,
    /// The common slope: below 1 the probabilities are too extreme.
    pub slope: Estimate,
    /// The slope to be expected of a fitted model.
    pub expected_slope: f64,
}

/// Intercept of one category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Intercept {
    /// The category.
    pub category: String,
    /// Its intercept.
    #[serde(flatten)]
    pub estimate: Estimate,
    /// Factor by which the odds against the reference are off, with its 95 % interval.
    pub odds_factor: f64,
    /// 95 % interval of the factor.
    pub odds_interval: Option<[f64; 2]>,
}

/// An estimate with its uncertainty, the training uncertainty of the model included.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Estimate {
    /// The estimate.
    pub estimate: f64,
    /// Its standard error; absent where the number of training cases is not known.
    pub standard_error: Option<f64>,
    /// Its 95 % interval.
    pub interval: Option<[f64; 2]>,
}

impl Estimate {
    pub(crate) fn new(estimate: f64, variance: f64, phi: Option<f64>) -> Self {
        let standard_error = phi.map(|phi| (phi * variance).sqrt());
        let interval =
            standard_error.map(|error| [estimate - NORMAL_975 * error, estimate + NORMAL_975 * error]);
        Self { estimate, standard_error, interval }
    }
}

/// Score tests and one-step estimates of the records with an outcome.
pub fn calibration(frame: &Frame, summary: &Summary) -> Calibration {
    let sums = ScoreSums::new(summary);
    let phi = TrainingUncertainty::new(frame, summary).phi;
    let tests = ScoreTests::new(&sums, frame.expected_slope(), FEWEST_EXPECTED);
    let estimates = estimates(frame, &sums, phi);
    let enough = tests.enough;
    let matrix = matrix_form(frame, summary);
    let smallest = sums.expected.iter().copied().fold(f64::INFINITY, f64::min);
    let matrix_enough = enough && smallest >= FEWEST_EXPECTED_MATRIX;
    let chi_square =
        |form: Quadratic, enough| Statistic::chi_square(form.value, form.rank, phi, sums.n, enough);
    let slope_enough = enough && sums.variance(sums.categories()) >= FEWEST_LOSS_VARIANCE;
    let mut slope = chi_square(tests.slope(), slope_enough);
    if estimates.intercepts.iter().any(is_large) && slope.status == Status::Valid {
        slope = slope.with_status(Status::NeedsRecords);
    }
    Calibration {
        joint: chi_square(tests.joint, enough),
        slope,
        matrix: matrix.map_or_else(|| Statistic::unavailable(sums.n), |form| chi_square(form, matrix_enough)),
        beyond_slope: matrix.map_or_else(
            || Statistic::unavailable(sums.n),
            |form| chi_square(difference(form, tests.joint), matrix_enough),
        ),
        estimates,
    }
}

/// The score tests as plain numbers, not corrected for training uncertainty.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct ScoreTests {
    /// T1: intercepts.
    pub(crate) intercepts: Quadratic,
    /// T2: intercepts and slope.
    pub(crate) joint: Quadratic,
    /// Whether there is enough to judge them by.
    pub(crate) enough: bool,
}

impl ScoreTests {
    /// Centred at `slope`, categories pooled to at least `minimum` expected cases.
    pub(crate) fn new(sums: &ScoreSums, slope: f64, minimum: f64) -> Self {
        let pools = Pools::new(&sums.expected, minimum);
        let centred = sums.centred(slope);
        Self {
            intercepts: centred.intercepts(&pools),
            joint: centred.joint(&pools),
            enough: sums.is_enough(&pools),
        }
    }

    /// T2 - T1: the slope after allowing for intercepts.
    pub(crate) fn slope(&self) -> Quadratic {
        difference(self.joint, self.intercepts)
    }
}

fn difference(larger: Quadratic, smaller: Quadratic) -> Quadratic {
    Quadratic {
        value: (larger.value - smaller.value).max(0.0),
        rank: larger.rank.saturating_sub(smaller.rank),
    }
}

/// Whether an intercept is both large and not mere chance.
fn is_large(intercept: &Intercept) -> bool {
    let estimate = intercept.estimate;
    estimate.estimate.abs() > LARGEST_INTERCEPT
        && estimate.interval.is_none_or(|[low, high]| low > 0.0 || high < 0.0)
}

pub(crate) fn estimates(frame: &Frame, sums: &ScoreSums, phi: Option<f64>) -> Estimates {
    let (theta, covariance) = sums.one_step(frame.reference);
    let size = theta.len();
    let at = |entry: usize| Estimate::new(theta[entry], covariance[entry * (size + 1)], phi);
    let intercepts = frame
        .compared()
        .enumerate()
        .map(|(entry, category)| {
            let estimate = at(entry);
            Intercept {
                category: frame.categories[category].clone(),
                estimate,
                odds_factor: estimate.estimate.exp(),
                odds_interval: estimate.interval.map(|ends| ends.map(f64::exp)),
            }
        })
        .collect();
    let slope = Estimate::new(1.0 + theta[size - 1], covariance[size * size - 1], phi);
    Estimates {
        reference: frame.categories[frame.reference].clone(),
        intercepts,
        slope,
        expected_slope: frame.expected_slope(),
    }
}

/// T3 of the full matrix of slopes, centred at the slope to be expected.
pub(crate) fn matrix_form(frame: &Frame, summary: &Summary) -> Option<Quadratic> {
    let part = summary.full.as_ref()?.matrix.as_ref()?;
    let categories = frame.categories.len();
    let size = (categories - 1) * categories;
    let triangle = lower_length(categories);
    let mut score = part.score.values();
    let mut information = vec![0.0; size * size];
    for row in 0..size {
        for column in 0..size {
            let pair = lower(row / categories, column / categories);
            let entry = lower(row % categories, column % categories);
            information[row * size + column] = part.information.value(pair * triangle + entry);
        }
    }
    let shift = frame.expected_slope() - 1.0;
    for row in 0..size {
        for category in 0..categories - 1 {
            let own_slope = category * categories + category + 1;
            score[row] -= information[row * size + own_slope] * shift;
        }
    }
    Some(quadratic(&score, &information))
}
