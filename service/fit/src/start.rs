//! A start near the optimum for tables so large that each pass over them counts.
//!
//! A part of the rows is drawn, so that every category and level has enough of them, and fitted in
//! memory. From its optimum gradients of all rows lead on, with the information of the part as
//! the metric and its errors learnt on the way (the limited-memory form of Broyden, Fletcher,
//! Goldfarb and Shanno; Nocedal 1980). The exact information is needed at the end only.

use std::collections::VecDeque;

use faer::{Mat, MatRef};

use crate::chunk::{CHUNK_ROWS, Chunk, ChunkColumn};
use crate::error::FitError;
use crate::estimate::start_of;
use crate::layout::Layout;
use crate::likelihood::Order;
use crate::linear::{Factor, dot};
use crate::newton::{EXACT, Evaluation, Iterate, Objective, largest_spread, moved};
use crate::objective::Likelihood;
use crate::reduce::Merge;
use crate::resolve::Resolved;
use crate::ridge::{Penalised, Penalty};
use crate::split::draw;
use crate::table::Table;

/// Rows drawn at least, rows per coefficient, share of all rows, and at most.
const LEAST_ROWS: usize = 20_000;
const ROWS_PER_COEFFICIENT: usize = 50;
const ONE_ROW_IN: usize = 10;
const MOST_ROWS: usize = 2_000_000;
/// Bytes that the drawn rows may take.
const MOST_BYTES: usize = 1 << 28;
/// The part must be this much smaller than the whole to pay.
const PAYS: u64 = 4;
/// Rows of each category and level that are expected to be drawn at least.
const ROWS_PER_LEVEL: f64 = 200.0;
/// Half the strength of the penalty that makes the optimum of the part exist, in cases.
const PENALTY: f64 = 0.005;
/// How near its optimum the fit of the part is left, in standard errors of all rows.
const NEAR_OF_PART: f64 = 0.3;
/// Gradients are followed until the optimum is so near, in standard errors, that the information
/// there is exact enough; between these bounds.
const NEAREST: f64 = 1e-7;
const FARTHEST: f64 = 1e-4;
const MOST_GRADIENTS: usize = 20;
const MOST_GRADIENTS_OF_PART: usize = 60;
const HALVINGS: i32 = 4;
/// Share of the gain expected from a step that it must reach.
const LEAST_GAIN: f64 = 1e-4;
/// Below this share of the log-likelihood its differences drown in rounding.
const ROUNDING: f64 = 1e-9;
/// Steps remembered.
const MEMORY: usize = 10;

/// The rows of a part.
struct Drawn(Vec<Chunk>);

impl Merge for Drawn {
    fn merge(&mut self, later: Self) {
        self.0.extend(later.0);
    }
}

/// Coefficients near the optimum; `None` where the table is too small for a part of it to pay, or
/// the part leads nowhere.
pub(crate) fn near_optimum(
    table: &mut Table,
    resolved: &Resolved,
    layout: &Layout,
    products: MatRef<'_, f64>,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Option<Vec<f64>>, FitError> {
    let compared = resolved.category_weights.len() - 1;
    let least = LEAST_ROWS.max(ROWS_PER_COEFFICIENT * layout.terms() * compared);
    let most = MOST_ROWS.min(MOST_BYTES / (8 * (resolved.fields.len() + 4)));
    let wanted = (table.rows() as usize / ONE_ROW_IN).max(least).min(most);
    if table.rows() < PAYS * wanted as u64 {
        return Ok(None);
    }
    let chances = Chances::new(resolved, table.rows() as f64, wanted as f64);
    let drawn = table.reduce(|chunk| Drawn(vec![chances.draw_from(chunk)]))?;
    let mut part = Table::in_memory(gathered(drawn.map_or_else(Vec::new, |drawn| drawn.0)), table.threads());
    let Some(found) = optimum_of_part(&mut part, resolved, layout, products)? else { return Ok(None) };
    let mut likelihood = Likelihood::new(table, layout, resolved);
    let goal = Goal { near: found.near(), gradients: MOST_GRADIENTS };
    follow(&mut likelihood, found.point, &found.metric, goal, watch)
}

/// How likely a row is to be drawn.
struct Chances {
    base: f64,
    /// By category, the reference first.
    categories: Vec<f64>,
    /// By field and level; empty for numbers and flags.
    levels: Vec<Vec<f64>>,
}

impl Chances {
    fn new(resolved: &Resolved, rows: f64, wanted: f64) -> Self {
        let cases_per_row = resolved.category_cases.iter().sum::<f64>() / rows;
        let chance = |cases: f64| ROWS_PER_LEVEL * cases_per_row / cases;
        let levels = |cases: &Vec<Vec<f64>>| cases.iter().map(|cases| chance(cases.iter().sum())).collect();
        Self {
            base: wanted / rows,
            categories: resolved.category_cases.iter().map(|&cases| chance(cases)).collect(),
            levels: resolved.level_cases.iter().map(levels).collect(),
        }
    }

    fn of(&self, chunk: &Chunk, row: usize) -> f64 {
        let mut chance = self.base.max(self.categories[chunk.category[row] as usize]);
        for (column, levels) in chunk.fields.iter().zip(&self.levels) {
            if let ChunkColumn::Levels(of_row) = column {
                chance = chance.max(levels[of_row[row] as usize]);
            }
        }
        chance.min(1.0)
    }

    /// The drawn rows of a chunk, each with its weight by its chance.
    fn draw_from(&self, chunk: &Chunk) -> Chunk {
        let fraction = |row: usize| (draw(chunk.key[row], 0) >> 11) as f64 * 0.5f64.powi(53);
        let rows: Vec<usize> = (0..chunk.rows()).filter(|&row| fraction(row) < self.of(chunk, row)).collect();
        let mut drawn = chunk.selected(&rows);
        for (weight, &row) in drawn.weight.iter_mut().zip(&rows) {
            *weight /= self.of(chunk, row);
        }
        drawn
    }
}

/// Small chunks put together.
fn gathered(chunks: Vec<Chunk>) -> Vec<Chunk> {
    let mut gathered: Vec<Chunk> = Vec::new();
    for chunk in chunks {
        match gathered.last_mut() {
            Some(last) if last.rows() < CHUNK_ROWS => last.append(chunk),
            _ => gathered.push(chunk),
        }
    }
    gathered
}

/// A point near the optimum of the part with a small penalty, and the information there, which
/// stands for that of all rows.
///
/// Gradients lead there from the intercepts-only model. The information of that model is the
/// metric: with the shares q of the categories but the reference and the cross-products of the terms
/// it is `(diag(q) - q q') (x) Z'WZ`.
fn optimum_of_part(
    part: &mut Table,
    resolved: &Resolved,
    layout: &Layout,
    products: MatRef<'_, f64>,
) -> Result<Option<OptimumOfPart>, FitError> {
    let (terms, compared) = (layout.terms(), resolved.category_weights.len() - 1);
    let total: f64 = resolved.category_weights.iter().sum();
    let share = |category: usize| resolved.category_weights[1 + category] / total;
    let order = layout.order();
    let information = Mat::from_fn(terms * compared, terms * compared, |row, column| {
        let (j, k) = (row / terms, column / terms);
        let curvature = share(j) * (f64::from(u8::from(j == k)) - share(k));
        curvature * products[(order[row % terms], order[column % terms])]
    });
    let Ok(metric) = Factor::new(information.as_ref()) else { return Ok(None) };
    let penalty = Penalty::on_slopes(layout, compared);
    let likelihood = Likelihood::new(part, layout, resolved);
    let mut objective = Penalised { likelihood, penalty: &penalty, strength: 2.0 * PENALTY };
    let start = start_of(&resolved.category_weights, layout.order());
    let goal = Goal { near: NEAR_OF_PART, gradients: MOST_GRADIENTS_OF_PART };
    let Some(point) = follow(&mut objective, start, &metric, goal, &mut |_, _| {})? else { return Ok(None) };
    let there = objective.evaluate(&point, Order::Information)?;
    let metric = Factor::new(there.information.as_ref()).ok();
    Ok(metric.map(|metric| OptimumOfPart { point, metric, longest_row: there.longest_row }))
}

/// Where the part has its optimum.
struct OptimumOfPart {
    point: Vec<f64>,
    /// The information there.
    metric: Factor,
    longest_row: f64,
}

impl OptimumOfPart {
    /// How near the optimum of all rows the information is as exact as it needs to be, with a
    /// factor to spare.
    fn near(&self) -> f64 {
        let spread = largest_spread(self.metric.inverse().as_ref(), self.longest_row);
        (0.5 * EXACT / spread).clamp(NEAREST, FARTHEST)
    }
}

/// When to stop following gradients.
#[derive(Debug, Clone, Copy)]
struct Goal {
    /// Distance to the optimum in standard errors.
    near: f64,
    /// Number of gradients.
    gradients: usize,
}

/// Follows gradients until the optimum is near, or they lead no further.
fn follow(
    objective: &mut dyn Objective,
    mut point: Vec<f64>,
    metric: &Factor,
    goal: Goal,
    watch: &mut dyn FnMut(u64, Iterate),
) -> Result<Option<Vec<f64>>, FitError> {
    let mut at = objective.evaluate(&point, Order::Gradient)?;
    if at.not_finite > 0 {
        return Ok(None);
    }
    let mut memory = VecDeque::new();
    for number in 0..goal.gradients {
        let direction = uphill(&at.gradient, metric, &memory);
        let expected = dot(&at.gradient, &direction);
        watch(number as u64, Iterate { value: at.value, decrement: expected.max(0.0).sqrt() });
        if expected <= goal.near * goal.near {
            break;
        }
        let Some((next, there)) = step(objective, &point, &at, &direction, expected)? else { break };
        let moved: Vec<f64> = next.iter().zip(&point).map(|(next, point)| next - point).collect();
        let fallen: Vec<f64> =
            at.gradient.iter().zip(&there.gradient).map(|(here, there)| here - there).collect();
        let curvature = dot(&moved, &fallen);
        if curvature > 0.0 {
            memory.push_back(Remembered { moved, fallen, curvature });
            if memory.len() > MEMORY {
                memory.pop_front();
            }
        }
        (point, at) = (next, there);
    }
    Ok(Some(point))
}

/// A step and by how much the gradient fell along it.
struct Remembered {
    moved: Vec<f64>,
    fallen: Vec<f64>,
    curvature: f64,
}

/// The inverse of the information, as far as it is known, times the gradient.
fn uphill(gradient: &[f64], metric: &Factor, memory: &VecDeque<Remembered>) -> Vec<f64> {
    let mut rest = gradient.to_vec();
    let mut shares = Vec::with_capacity(memory.len());
    for step in memory.iter().rev() {
        let share = dot(&step.moved, &rest) / step.curvature;
        for (rest, fallen) in rest.iter_mut().zip(&step.fallen) {
            *rest -= share * fallen;
        }
        shares.push(share);
    }
    let mut direction = metric.solve(&rest);
    for (step, share) in memory.iter().zip(shares.into_iter().rev()) {
        let back = dot(&step.fallen, &direction) / step.curvature;
        for (slot, moved) in direction.iter_mut().zip(&step.moved) {
            *slot += (share - back) * moved;
        }
    }
    direction
}

/// The first of the step, half of it and so on that gains; `None` where none does.
fn step(
    objective: &mut dyn Objective,
    point: &[f64],
    at: &Evaluation,
    direction: &[f64],
    expected: f64,
) -> Result<Option<(Vec<f64>, Evaluation)>, FitError> {
    let unseen = expected < ROUNDING * at.value.abs().max(1.0);
    for halving in 0..=HALVINGS {
        let length = 0.5f64.powi(halving);
        let candidate = moved(point, direction, length);
        let there = objective.evaluate(&candidate, Order::Gradient)?;
        let gained = there.value >= at.value + LEAST_GAIN * length * expected;
        if there.value.is_finite() && (unseen || gained) {
            return Ok(Some((candidate, there)));
        }
    }
    Ok(None)
}

#[cfg(test)]
#[path = "start_tests.rs"]
mod tests;
