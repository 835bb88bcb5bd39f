//! Newton's method for a concave function.
//!
//! The Newton decrement `lambda = sqrt(g' I^-1 g)` says how far the optimum is, in standard errors
//! of the coefficients: no coefficient is further from it than about `lambda` of its standard
//! errors, whatever the scale of the columns. It decides when to stop; changes of the
//! log-likelihood and the length of the gradient depend on scale and do not.

use faer::{Mat, MatRef};

use crate::error::FitError;
use crate::likelihood::Order;
use crate::linear::{Factor, dot};

/// Stop when the decrement is below this, and take the last step all the same: its error is of the
/// order of the decrement squared.
const CLOSE: f64 = 1e-6;
/// Relative error of the information that is small enough where evaluations are slow: standard
/// errors are then right to six digits.
pub(crate) const EXACT: f64 = 2e-6;
/// Further away the inverse of the information is not worth computing to see how near it is.
const WITHIN_REACH: f64 = 0.01;
/// Largest number of steps.
const MOST_STEPS: u64 = 50;
/// Share of the gain expected from a step that it must reach (Armijo).
const LEAST_GAIN: f64 = 1e-4;
/// Below this share of the log-likelihood its differences drown in rounding.
const ROUNDING: f64 = 1e-9;
/// How often a step is halved.
const HALVINGS: i32 = 10;
/// Length of the gradient per unit of weight that counts as zero.
const FLAT: f64 = 1e-8;
/// How many steps may be taken after the decrement is below [`CLOSE`].
const LAST_STEPS: usize = 5;

/// A function to maximise, with its derivatives.
pub(crate) trait Objective {
    /// Value, gradient and information (the negative second derivatives) as far as `order` asks.
    fn evaluate(&mut self, point: &[f64], order: Order) -> Result<Evaluation, FitError>;

    /// Whether going on in this direction separates categories, so that there is no maximum:
    /// `Some(true)` where it separates all of them completely.
    fn separates(&mut self, direction: &[f64]) -> Result<Option<bool>, FitError>;

    /// Sum of the weights, the scale of value and gradient.
    fn weight(&self) -> f64;

    /// Whether an evaluation takes so long that the information is not worth another one for its
    /// last digits.
    fn is_slow(&self) -> bool;
}

/// A function at a point.
#[derive(Debug, Clone)]
pub(crate) struct Evaluation {
    pub(crate) value: f64,
    pub(crate) gradient: Vec<f64>,
    pub(crate) information: Mat<f64>,
    /// Length of the longest standardised row.
    pub(crate) longest_row: f64,
    /// Rows whose log-odds are not finite.
    pub(crate) not_finite: u64,
}

/// A step of the optimiser.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Iterate {
    pub(crate) value: f64,
    pub(crate) decrement: f64,
}

/// A maximum.
#[derive(Debug)]
pub(crate) struct Optimum {
    pub(crate) point: Vec<f64>,
    pub(crate) at: Evaluation,
    /// Inverse of the information.
    pub(crate) covariance: Mat<f64>,
    pub(crate) decrement: f64,
    pub(crate) steps: u64,
}

/// Why no maximum was found.
#[derive(Debug)]
pub(crate) enum Stopped {
    Failed(FitError),
    /// The function grows for ever in this direction.
    Separated {
        direction: Vec<f64>,
        complete: Option<bool>,
    },
    /// The information is singular in this row.
    NotPositive {
        row: usize,
        steps: u64,
        point: Vec<f64>,
    },
    NotConverged {
        decrement: f64,
        steps: u64,
        point: Vec<f64>,
    },
}

impl From<FitError> for Stopped {
    fn from(error: FitError) -> Self {
        Self::Failed(error)
    }
}

/// A Newton step: the factored information, the step, the decrement.
struct Step {
    factor: Factor,
    direction: Vec<f64>,
    decrement: f64,
}

impl Step {
    fn at(evaluation: &Evaluation, point: &[f64], steps: u64) -> Result<Self, Stopped> {
        let factor = Factor::new(evaluation.information.as_ref()).map_err(|error| Stopped::NotPositive {
            row: error.row,
            steps,
            point: point.to_vec(),
        })?;
        let direction = factor.solve(&evaluation.gradient);
        let decrement = dot(&evaluation.gradient, &direction).max(0.0).sqrt();
        Ok(Self { factor, direction, decrement })
    }

    /// Whether the information changes by less than [`EXACT`], relatively, on the way to the
    /// optimum.
    fn is_exact_enough(&self, at: &Evaluation) -> bool {
        let within_reach = self.decrement <= WITHIN_REACH;
        within_reach
            && self.decrement * largest_spread(self.factor.inverse().as_ref(), at.longest_row) <= EXACT
    }
}

/// Maximises a concave function from a point at which it has been evaluated.
pub(crate) fn maximise(
    objective: &mut dyn Objective,
    point: Vec<f64>,
    at: Evaluation,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Optimum, Stopped> {
    let near = climb(objective, point, at, CLOSE, watch)?;
    finish(objective, near, watch)
}

/// The maximum to about the square of `close`, in standard errors, without derivatives there.
pub(crate) fn approach(
    objective: &mut dyn Objective,
    point: Vec<f64>,
    at: Evaluation,
    close: f64,
) -> Result<Vec<f64>, Stopped> {
    let near = climb(objective, point, at, close, &mut |_, _| {})?;
    Ok(moved(&near.point, &near.step.direction, 1.0))
}

/// A point so near the maximum that the next step may be taken without looking.
struct Near {
    point: Vec<f64>,
    at: Evaluation,
    step: Step,
    steps: u64,
}

fn climb(
    objective: &mut dyn Objective,
    mut point: Vec<f64>,
    mut at: Evaluation,
    close: f64,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Near, Stopped> {
    let mut before = f64::INFINITY;
    for steps in 0..=MOST_STEPS {
        let step = Step::at(&at, &point, steps)?;
        watch(steps, Iterate { value: at.value, decrement: step.decrement });
        if step.decrement <= close || (objective.is_slow() && step.is_exact_enough(&at)) {
            return Ok(Near { point, at, step, steps });
        }
        let ratio = (step.decrement / before).powi(2);
        let suspicious = steps >= 5 && step.decrement < 1.0 && (0.25..0.75).contains(&ratio);
        if suspicious && let Some(all) = objective.separates(&step.direction)? {
            return Err(Stopped::Separated { direction: step.direction, complete: all.then_some(true) });
        }
        before = step.decrement;
        match advance(objective, &point, &at, &step)? {
            Some(next) => (point, at) = next,
            None => return Err(Stopped::NotConverged { decrement: step.decrement, steps, point }),
        }
    }
    Err(Stopped::NotConverged { decrement: before, steps: MOST_STEPS, point })
}

/// The last steps, taken without looking at the value, until the gradient is flat.
fn finish(
    objective: &mut dyn Objective,
    near: Near,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Optimum, Stopped> {
    let Near { mut point, mut at, mut step, mut steps } = near;
    let flat = FLAT * objective.weight();
    for round in 0..LAST_STEPS {
        point = moved(&point, &step.direction, 1.0);
        steps += 1;
        if round == 0 && objective.is_slow() {
            // The information changes by less than is asked for.
            let there = objective.evaluate(&point, Order::Gradient)?;
            at = Evaluation { information: at.information, longest_row: at.longest_row, ..there };
        } else {
            at = objective.evaluate(&point, Order::Information)?;
        }
        step = Step::at(&at, &point, steps)?;
        watch(steps, Iterate { value: at.value, decrement: step.decrement });
        if dot(&at.gradient, &at.gradient).sqrt() <= flat {
            let covariance = step.factor.inverse();
            return Ok(Optimum { point, at, covariance, decrement: step.decrement, steps });
        }
    }
    Err(Stopped::NotConverged { decrement: step.decrement, steps, point })
}

/// A bound for the largest standard deviation, over all rows, of a difference of two log-odds:
/// twice the longest row times the root of the Frobenius norm of the covariance.
///
/// Times the Newton decrement it bounds how much the information changes on the way to the optimum
/// (self-concordance, Bach 2010): relatively by no more than about that product, and if it is
/// below 1 the optimum exists and is unique.
pub(crate) fn largest_spread(covariance: MatRef<'_, f64>, longest_row: f64) -> f64 {
    2.0 * longest_row * covariance.norm_l2().sqrt()
}

pub(crate) fn moved(point: &[f64], direction: &[f64], length: f64) -> Vec<f64> {
    point.iter().zip(direction).map(|(at, step)| at + length * step).collect()
}

/// The next point, `None` where no step gains anything.
fn advance(
    objective: &mut dyn Objective,
    point: &[f64],
    at: &Evaluation,
    step: &Step,
) -> Result<Option<(Vec<f64>, Evaluation)>, FitError> {
    let expected = step.decrement.powi(2);
    let unseen = expected < ROUNDING * at.value.abs().max(1.0);
    let full = moved(point, &step.direction, 1.0);
    let there = objective.evaluate(&full, Order::Information)?;
    if there.value.is_finite() && (unseen || there.value >= at.value + LEAST_GAIN * expected) {
        return Ok(Some((full, there)));
    }
    for halving in 1..=HALVINGS {
        let length = 0.5f64.powi(halving);
        let candidate = moved(point, &step.direction, length);
        let value = objective.evaluate(&candidate, Order::Value)?.value;
        if value >= at.value + LEAST_GAIN * length * expected {
            let there = objective.evaluate(&candidate, Order::Information)?;
            return Ok(Some((candidate, there)));
        }
    }
    damped(objective, point, at)
}

/// A step with a larger and larger multiple of the diagonal added to the information (Levenberg
/// 1944, Marquardt 1963).
fn damped(
    objective: &mut dyn Objective,
    point: &[f64],
    at: &Evaluation,
) -> Result<Option<(Vec<f64>, Evaluation)>, FitError> {
    for power in 0..20 {
        let damping = 1.0 + 1e-4 * 4.0f64.powi(power);
        let Ok(factor) = Factor::new(with_diagonal(at.information.as_ref(), damping).as_ref()) else {
            continue;
        };
        let direction = factor.solve(&at.gradient);
        let candidate = moved(point, &direction, 1.0);
        let value = objective.evaluate(&candidate, Order::Value)?.value;
        if value >= at.value + LEAST_GAIN * dot(&at.gradient, &direction) {
            let there = objective.evaluate(&candidate, Order::Information)?;
            return Ok(Some((candidate, there)));
        }
    }
    Ok(None)
}

fn with_diagonal(matrix: MatRef<'_, f64>, factor: f64) -> Mat<f64> {
    Mat::from_fn(matrix.nrows(), matrix.ncols(), |row, column| {
        matrix[(row, column)] * if row == column { factor } else { 1.0 }
    })
}
