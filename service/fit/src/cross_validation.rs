//! Choosing the ridge penalty by cross-validation.

use serde::Serialize;

use crate::chunk::Chunk;
use crate::error::FitError;
use crate::estimate::start_of;
use crate::layout::Layout;
use crate::likelihood::Order;
use crate::newton::{Objective, approach};
use crate::objective::Likelihood;
use crate::reduce::{Merge, add_all};
use crate::resolve::Resolved;
use crate::ridge::{Penalised, Penalty, penalised_layout};
use crate::split::draw;
use crate::table::Table;
use crate::trouble::explain;

/// Penalties tried: powers of ten from 1 down to -5 in steps of a quarter.
const STEPS: i32 = 24;
/// How near the optimum a fit is left, in standard errors: its loss is then right to the square.
const NEAR: f64 = 1e-4;
/// Seed of the folds.
const SEED: u64 = 0;

/// How the ridge penalty was chosen.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CrossValidation {
    /// Number of folds.
    pub folds: usize,
    /// What was tried, from large to small penalties.
    pub candidates: Vec<Candidate>,
    /// The penalty with the smallest loss.
    pub smallest_loss: f64,
    /// The penalty that was taken: the largest one whose loss is within one standard error of the
    /// smallest. That rule is a convention; the standard error is too small on principle (Bengio
    /// and Grandvalet 2004).
    pub chosen: f64,
    /// Whether the smallest loss lies at an end of what was tried.
    pub at_end: bool,
}

/// One penalty that was tried.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Candidate {
    /// The penalty.
    pub ridge: f64,
    /// Mean over the folds of the mean log-loss of the cases left out, nats per case.
    pub loss: f64,
    /// Standard deviation of the folds' losses by the root of their number.
    pub error: f64,
}

/// The fold of a row.
type FoldOf<'f> = dyn Fn(&Chunk, usize) -> usize + Sync + 'f;

/// Penalties from large to small.
pub(crate) fn grid() -> Vec<f64> {
    (0..=STEPS).map(|step| 10f64.powf(1.0 - 0.25 * f64::from(step))).collect()
}

/// The fold that a row is drawn into: by its cluster, so that clusters stay together, or by its id
/// or number.
pub(crate) fn drawn_fold(folds: usize) -> impl Fn(&Chunk, usize) -> usize + Sync {
    move |chunk, row| {
        let key = chunk.cluster.get(row).unwrap_or(&chunk.key[row]);
        (draw(*key, SEED) % folds as u64) as usize
    }
}

/// Ten folds, or five where the smallest category has fewer than 200 cases.
pub(crate) fn number_of_folds(resolved: &Resolved) -> usize {
    let smallest = resolved.category_cases.iter().copied().fold(f64::INFINITY, f64::min);
    if smallest < 200.0 { 5 } else { 10 }
}

/// Fits each penalty on each set of all folds but one, and takes the loss on that one.
pub(crate) fn cross_validate(
    table: &mut Table,
    resolved: &Resolved,
    grid: &[f64],
    folds: usize,
    fold_of: &FoldOf,
) -> Result<CrossValidation, FitError> {
    let (layout, penalty, _) = penalised_layout(table, resolved)?;
    let weights = fold_weights(table, resolved, folds, fold_of)?;
    let mut losses = vec![Vec::new(); grid.len()];
    for (fold, held_out) in weights.iter().enumerate() {
        let path = Path { resolved, layout: &layout, penalty: &penalty, fold, fold_of };
        for (losses, loss) in losses.iter_mut().zip(path.losses(table, grid, &weights, held_out)?) {
            losses.push(loss);
        }
    }
    let candidates = grid.iter().zip(&losses).map(|(ridge, losses)| candidate(*ridge, losses)).collect();
    Ok(choose(folds, candidates))
}

fn candidate(ridge: f64, losses: &[f64]) -> Candidate {
    let count = losses.len() as f64;
    let loss = losses.iter().sum::<f64>() / count;
    let variance = losses.iter().map(|value| (value - loss).powi(2)).sum::<f64>() / (count - 1.0);
    Candidate { ridge, loss, error: (variance / count).sqrt() }
}

fn choose(folds: usize, candidates: Vec<Candidate>) -> CrossValidation {
    let by_loss = |a: &(usize, &Candidate), b: &(usize, &Candidate)| a.1.loss.total_cmp(&b.1.loss);
    let (index, best) = candidates
        .iter()
        .enumerate()
        .min_by(by_loss)
        .map_or((0, Candidate { ridge: 0.0, loss: f64::NAN, error: 0.0 }), |(index, best)| (index, *best));
    let good_enough = candidates.iter().find(|candidate| candidate.loss <= best.loss + best.error);
    CrossValidation {
        folds,
        smallest_loss: best.ridge,
        chosen: good_enough.map_or(best.ridge, |candidate| candidate.ridge),
        at_end: index == 0 || index + 1 == candidates.len(),
        candidates,
    }
}

/// Weights by fold and category.
struct FoldWeights(Vec<Vec<f64>>);

impl Merge for FoldWeights {
    fn merge(&mut self, later: Self) {
        for (sums, later) in self.0.iter_mut().zip(&later.0) {
            add_all(sums, later);
        }
    }
}

/// Weights by fold and category; every category must occur in every fold and outside it.
fn fold_weights(
    table: &mut Table,
    resolved: &Resolved,
    folds: usize,
    fold_of: &FoldOf,
) -> Result<Vec<Vec<f64>>, FitError> {
    let categories = resolved.category_weights.len();
    let found = table.reduce(|chunk| {
        let mut sums = FoldWeights(vec![vec![0.0; categories]; folds]);
        for row in 0..chunk.rows() {
            sums.0[fold_of(chunk, row)][chunk.category[row] as usize] += chunk.weight[row];
        }
        sums
    })?;
    let weights = found.map_or_else(Vec::new, |weights| weights.0);
    let enough = |category: usize| {
        let occurs = weights.iter().filter(|fold| fold[category] > 0.0).count();
        resolved.category_cases[category] >= 2.0 * folds as f64 && occurs >= 2
    };
    let filled = |fold: &Vec<f64>| fold.iter().sum::<f64>() > 0.0;
    let lacking = (0..categories).find(|&category| !enough(category));
    match lacking.or_else(|| if weights.iter().all(filled) { None } else { Some(0) }) {
        None => Ok(weights),
        Some(category) => {
            let category = resolved.category_names()[category].to_owned();
            Err(FitError::TooFewForFolds { category, folds })
        }
    }
}

/// The fits without one fold, from large to small penalties.
struct Path<'p> {
    resolved: &'p Resolved,
    layout: &'p Layout,
    penalty: &'p Penalty,
    fold: usize,
    fold_of: &'p FoldOf<'p>,
}

impl Path<'_> {
    /// The loss on the fold for each penalty; each fit starts at the one before.
    fn losses(
        &self,
        table: &mut Table,
        grid: &[f64],
        weights: &[Vec<f64>],
        held_out: &[f64],
    ) -> Result<Vec<f64>, FitError> {
        let mut training = vec![0.0; held_out.len()];
        for (_, weights) in weights.iter().enumerate().filter(|(fold, _)| *fold != self.fold) {
            add_all(&mut training, weights);
        }
        let rows = |chunk: &Chunk, inside: bool| {
            let chosen = (0..chunk.rows()).filter(|&row| ((self.fold_of)(chunk, row) == self.fold) == inside);
            chunk.selected(&chosen.collect::<Vec<_>>())
        };
        let (others, own) = (|chunk: &Chunk| rows(chunk, false), |chunk: &Chunk| rows(chunk, true));
        let mut point = start_of(&training, self.layout.order());
        let mut losses = Vec::with_capacity(grid.len());
        for &rho in grid {
            let likelihood = Likelihood::of_view(table, self.layout, &training, &others);
            let mut objective = Penalised::new(likelihood, self.penalty, rho);
            let at = objective.evaluate(&point, Order::Information)?;
            point = approach(&mut objective, point, at, NEAR)
                .map_err(|stopped| explain(self.resolved, self.layout, stopped))?;
            let mut likelihood = Likelihood::of_view(table, self.layout, held_out, &own);
            let value = likelihood.evaluate(&point, Order::Value)?.value;
            losses.push(-value / held_out.iter().sum::<f64>());
        }
        Ok(losses)
    }
}

#[cfg(test)]
#[path = "cross_validation_tests.rs"]
mod tests;
