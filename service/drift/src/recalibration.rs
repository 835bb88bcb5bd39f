//! Recalibration by maximum likelihood on single records, and which recalibration is needed.

use serde::Serialize;

use crate::error::DriftError;
use crate::frame::{check_length, check_number};
use crate::quadratic::Spectrum;
use crate::record::fill_probabilities;
use crate::statistic::Statistic;

/// Squared Newton decrement below which a fit has converged.
const CONVERGED: f64 = 1e-10;
/// Share of a log-likelihood that may be lost to rounding.
const ROUNDING: f64 = 1e-13;
const MOST_STEPS: usize = 50;
const MOST_HALVINGS: usize = 30;

/// Records with their outcomes.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Observations<'a> {
    /// Number of categories J.
    pub categories: usize,
    /// Index of the reference category.
    pub reference: usize,
    /// Log-odds of the categories but the reference against it, n x (J-1), row by row.
    pub log_odds: &'a [f64],
    /// Outcomes, n.
    pub outcomes: &'a [usize],
}

/// What a recalibration may change. R are the log-odds of the model, q those after recalibration.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Recalibration {
    /// `q_j = a_j + R_j`.
    Intercepts,
    /// `q_j = s R_j`.
    Slope,
    /// `q_j = a_j + s R_j`.
    InterceptsAndSlope,
    /// `q_j = a_j + b_j R_j`; depends on which category is the reference.
    SlopePerCategory,
    /// `q_j = a_j + sum_m S_jm R_m`.
    FullMatrix,
}

/// A recalibration fitted by maximum likelihood.
#[derive(Debug, Clone, PartialEq)]
pub struct RecalibrationFit {
    /// What was changed.
    pub recalibration: Recalibration,
    /// Intercepts of the categories but the reference; 0 where they were not changed.
    pub intercepts: Vec<f64>,
    /// The matrix S of slopes, (J-1) x (J-1), row by row; a multiple of the identity for one slope.
    pub slopes: Vec<f64>,
    /// Parameters: the intercepts in model order, then the slope or the slopes; for the full matrix
    /// row by row, the intercept of a row first. Slopes as they are, 1 for no change.
    pub parameters: Vec<f64>,
    /// Inverse of the information about them, row by row, without training uncertainty.
    pub covariance: Vec<f64>,
    /// Log-likelihood of the records.
    pub log_likelihood: f64,
    /// Newton steps taken.
    pub steps: usize,
}

/// One parameter: where it enters the log-odds.
#[derive(Debug, Clone, Copy)]
enum Direction {
    /// Entry `basis` of (1, R) in the log-odds of one row.
    Row { row: usize, basis: usize },
    /// R itself, in all rows.
    Common,
}

impl Recalibration {
    fn directions(self, rows: usize) -> Vec<Direction> {
        let intercepts = (0..rows).map(|row| Direction::Row { row, basis: 0 });
        match self {
            Self::Intercepts => intercepts.collect(),
            Self::Slope => vec![Direction::Common],
            Self::InterceptsAndSlope => intercepts.chain([Direction::Common]).collect(),
            Self::SlopePerCategory => {
                let slopes = (0..rows).map(|row| Direction::Row { row, basis: row + 1 });
                intercepts.chain(slopes).collect()
            }
            Self::FullMatrix => {
                (0..rows).flat_map(|row| (0..=rows).map(move |basis| Direction::Row { row, basis })).collect()
            }
        }
    }
}

impl Direction {
    /// The value of the parameter that changes nothing.
    fn neutral(self) -> f64 {
        match self {
            Self::Common => 1.0,
            Self::Row { row, basis } if basis == row + 1 => 1.0,
            Self::Row { .. } => 0.0,
        }
    }
}

/// Intercepts and slopes as a map of log-odds.
#[derive(Debug, Clone)]
struct Map {
    intercepts: Vec<f64>,
    slopes: Vec<f64>,
}

impl Map {
    fn new(directions: &[Direction], parameters: &[f64], rows: usize) -> Self {
        let mut map = Self { intercepts: vec![0.0; rows], slopes: vec![0.0; rows * rows] };
        for (direction, value) in directions.iter().zip(parameters) {
            match *direction {
                Direction::Common => (0..rows).for_each(|row| map.slopes[row * (rows + 1)] = *value),
                Direction::Row { row, basis: 0 } => map.intercepts[row] = *value,
                Direction::Row { row, basis } => map.slopes[row * rows + basis - 1] = *value,
            }
        }
        if directions.iter().all(|direction| matches!(direction, Direction::Row { basis: 0, .. })) {
            (0..rows).for_each(|row| map.slopes[row * (rows + 1)] = 1.0);
        }
        map
    }

    fn apply(&self, log_odds: &[f64], mapped: &mut [f64]) {
        let rows = log_odds.len();
        for (row, slot) in mapped.iter_mut().enumerate() {
            let slopes = &self.slopes[row * rows..(row + 1) * rows];
            *slot = self.intercepts[row] + slopes.iter().zip(log_odds).map(|(s, r)| s * r).sum::<f64>();
        }
    }
}

/// One record under a map of its log-odds, over the categories but the reference.
struct Mapped {
    compared: Vec<usize>,
    reference: usize,
    log_odds: Vec<f64>,
    all_p: Vec<f64>,
    all_log_p: Vec<f64>,
    /// Probabilities.
    p: Vec<f64>,
    /// Outcome less probability.
    residual: Vec<f64>,
    /// (1, R).
    basis: Vec<f64>,
}

impl Mapped {
    fn new(data: &Observations) -> Self {
        let rows = data.categories - 1;
        Self {
            compared: (0..data.categories).filter(|category| *category != data.reference).collect(),
            reference: data.reference,
            log_odds: vec![0.0; rows],
            all_p: vec![0.0; data.categories],
            all_log_p: vec![0.0; data.categories],
            p: vec![0.0; rows],
            residual: vec![0.0; rows],
            basis: vec![1.0; rows + 1],
        }
    }

    /// Takes up a record; returns the logarithm of the probability of its outcome.
    fn set(&mut self, map: &Map, log_odds: &[f64], outcome: usize) -> f64 {
        map.apply(log_odds, &mut self.log_odds);
        fill_probabilities(&self.log_odds, self.reference, &mut self.all_p, &mut self.all_log_p);
        self.basis[1..].copy_from_slice(log_odds);
        for (row, category) in self.compared.iter().enumerate() {
            self.p[row] = self.all_p[*category];
            self.residual[row] = f64::from(u8::from(*category == outcome)) - self.p[row];
        }
        self.all_log_p[outcome]
    }

    /// Score of a parameter.
    fn score(&self, direction: Direction) -> f64 {
        match direction {
            Direction::Row { row, basis } => self.residual[row] * self.basis[basis],
            Direction::Common => self.residual.iter().zip(&self.basis[1..]).map(|(r, odds)| r * odds).sum(),
        }
    }

    /// What a parameter changes in the log-odds, times diag(p) - p p', over the rows.
    fn weigh(&self, direction: Direction, weights: &mut [f64]) {
        match direction {
            Direction::Row { row, basis } => {
                let factor = self.basis[basis] * self.p[row];
                for (weight, p) in weights.iter_mut().zip(&self.p) {
                    *weight = -factor * p;
                }
                weights[row] += factor;
            }
            Direction::Common => {
                let odds = &self.basis[1..];
                let mean: f64 = self.p.iter().zip(odds).map(|(p, odds)| p * odds).sum();
                for ((weight, p), odds) in weights.iter_mut().zip(&self.p).zip(odds) {
                    *weight = p * (odds - mean);
                }
            }
        }
    }

    /// Information about a parameter and one that was weighed.
    fn information(&self, direction: Direction, weights: &[f64]) -> f64 {
        match direction {
            Direction::Row { row, basis } => weights[row] * self.basis[basis],
            Direction::Common => weights.iter().zip(&self.basis[1..]).map(|(w, odds)| w * odds).sum(),
        }
    }
}

/// Log-likelihood of records under a map of their log-odds.
fn log_likelihood(data: &Observations, map: &Map) -> f64 {
    let mut mapped = Mapped::new(data);
    data.records().map(|(log_odds, outcome)| mapped.set(map, log_odds, outcome)).sum()
}

/// Score and information of the parameters.
fn derivatives(data: &Observations, map: &Map, directions: &[Direction]) -> (Vec<f64>, Vec<f64>) {
    let size = directions.len();
    let mut mapped = Mapped::new(data);
    let mut weights = vec![0.0; data.categories - 1];
    let mut score = vec![0.0; size];
    let mut information = vec![0.0; size * size];
    for (log_odds, outcome) in data.records() {
        mapped.set(map, log_odds, outcome);
        for (row, direction) in directions.iter().enumerate() {
            score[row] += mapped.score(*direction);
            mapped.weigh(*direction, &mut weights);
            for (column, other) in directions[..=row].iter().enumerate() {
                information[row * size + column] += mapped.information(*other, &weights);
            }
        }
    }
    for row in 0..size {
        for column in 0..row {
            information[column * size + row] = information[row * size + column];
        }
    }
    (score, information)
}

impl Observations<'_> {
    fn check(&self) -> Result<(), DriftError> {
        if self.categories < 2 {
            return Err(DriftError::TooFewCategories { found: self.categories });
        }
        if self.reference >= self.categories {
            return Err(DriftError::Reference { reference: self.reference, categories: self.categories });
        }
        check_length("log_odds", self.log_odds.len(), self.outcomes.len() * (self.categories - 1))?;
        for value in self.log_odds {
            check_number("log_odds", *value, true, "must be finite")?;
        }
        match self.outcomes.iter().find(|y| **y >= self.categories) {
            Some(y) => Err(DriftError::UnknownCategory { found: *y, categories: self.categories }),
            None => Ok(()),
        }
    }

    fn records(&self) -> impl Iterator<Item = (&[f64], usize)> {
        self.log_odds.chunks(self.categories - 1).zip(self.outcomes.iter().copied())
    }

    /// Log-likelihood of the records under the model as it is.
    ///
    /// # Errors
    /// Lengths that do not fit, log-odds that are not finite, unknown categories.
    pub fn log_likelihood(&self) -> Result<f64, DriftError> {
        self.check()?;
        let directions = Recalibration::Intercepts.directions(self.categories - 1);
        let neutral = vec![0.0; self.categories - 1];
        Ok(log_likelihood(self, &Map::new(&directions, &neutral, self.categories - 1)))
    }
}

/// Fits a recalibration by Newton's method with step halving.
///
/// # Errors
/// As [`Observations::log_likelihood`]; [`DriftError::NotIdentified`] where the log-odds are linearly
/// dependent or a category never came; [`DriftError::NoConvergence`] where the likelihood has no
/// finite maximum.
pub fn recalibrate(
    data: &Observations,
    recalibration: Recalibration,
) -> Result<RecalibrationFit, DriftError> {
    data.check()?;
    let rows = data.categories - 1;
    let directions = recalibration.directions(rows);
    let mut parameters: Vec<f64> = directions.iter().map(|direction| direction.neutral()).collect();
    let mut reached = log_likelihood(data, &Map::new(&directions, &parameters, rows));
    let mut converged = false;
    for steps in 0..MOST_STEPS {
        let (score, information) = derivatives(data, &Map::new(&directions, &parameters, rows), &directions);
        let spectrum = Spectrum::new(&information, directions.len());
        if spectrum.rank() < directions.len() {
            return Err(DriftError::NotIdentified { reason: "the log-odds are linearly dependent" });
        }
        if converged {
            let map = Map::new(&directions, &parameters, rows);
            return Ok(RecalibrationFit {
                recalibration,
                intercepts: map.intercepts,
                slopes: map.slopes,
                parameters,
                covariance: spectrum.inverse(),
                log_likelihood: reached,
                steps,
            });
        }
        let step = spectrum.solve(&score);
        let decrement: f64 = step.iter().zip(&score).map(|(step, score)| step * score).sum();
        // This step is still taken: it squares what is left of the distance.
        converged = decrement < CONVERGED;
        (parameters, reached) = halved_step(data, &directions, &parameters, &step, reached)
            .ok_or(DriftError::NoConvergence { steps })?;
    }
    Err(DriftError::NoConvergence { steps: MOST_STEPS })
}

/// The first of the step, half of it, a quarter and so on that does not lower the log-likelihood.
fn halved_step(
    data: &Observations,
    directions: &[Direction],
    from: &[f64],
    step: &[f64],
    reached: f64,
) -> Option<(Vec<f64>, f64)> {
    let rows = data.categories - 1;
    let mut length = 1.0;
    for _ in 0..MOST_HALVINGS {
        let to: Vec<f64> = from.iter().zip(step).map(|(from, step)| from + length * step).collect();
        let value = log_likelihood(data, &Map::new(directions, &to, rows));
        if value >= reached - ROUNDING * reached.abs() {
            return Some((to, value));
        }
        length *= 0.5;
    }
    None
}

/// Which recalibration is needed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Need {
    /// None: the model holds.
    None,
    /// Intercepts.
    Intercepts,
    /// Intercepts and a common slope.
    InterceptsAndSlope,
    /// Neither will do.
    Refit,
}

/// Closed testing of the recalibrations.
#[derive(Debug, Clone, PartialEq)]
pub struct ClosedTest {
    /// Log-likelihood of the model as it is.
    pub log_likelihood: f64,
    /// The three fits, from the smallest to the full matrix.
    pub fits: [RecalibrationFit; 3],
    /// The full matrix against the model as it is, against intercepts, and against intercepts and
    /// slope: likelihood ratios, corrected for training uncertainty.
    pub tests: [Statistic; 3],
    /// The first recalibration that the full matrix does not surpass.
    pub need: Need,
}

/// Closed testing (Vergouwe et al. 2017; Van Calster et al. 2017): the smallest recalibration that the
/// full matrix does not significantly surpass at `level`.
///
/// # Errors
/// As [`recalibrate`].
pub fn closed_test(data: &Observations, phi: f64, level: f64) -> Result<ClosedTest, DriftError> {
    check_number("phi", phi, phi >= 1.0, "must be at least 1")?;
    let as_given = data.log_likelihood()?;
    let fits = [
        recalibrate(data, Recalibration::Intercepts)?,
        recalibrate(data, Recalibration::InterceptsAndSlope)?,
        recalibrate(data, Recalibration::FullMatrix)?,
    ];
    let full = &fits[2];
    let n = data.outcomes.len() as f64;
    let against = |log_likelihood: f64, parameters: usize| {
        let ratio = (2.0 * (full.log_likelihood - log_likelihood)).max(0.0);
        Statistic::chi_square(ratio, full.parameters.len().saturating_sub(parameters), Some(phi), n, true)
    };
    let tests = [
        against(as_given, 0),
        against(fits[0].log_likelihood, fits[0].parameters.len()),
        against(fits[1].log_likelihood, fits[1].parameters.len()),
    ];
    let surpassed = tests.iter().take_while(|test| test.p.is_some_and(|p| p < level)).count();
    let need = [Need::None, Need::Intercepts, Need::InterceptsAndSlope, Need::Refit][surpassed];
    Ok(ClosedTest { log_likelihood: as_given, fits, tests, need })
}
