//! The linear programme that decides whether the data separate the categories.
//!
//! For a case with observed category y and any other category k let `a = (e_y - e_k) (x) x`; a
//! direction D of the coefficients is one in which the likelihood never falls if `a'D >= 0` for all
//! such pairs. The programme maximises `sum s` over D and `0 <= s <= 1` with `a'D >= s` for each
//! pair. Its optimum is 0 if and only if there is no such direction but those that change
//! nothing, that is, if the maximum likelihood estimate exists. Because directions add up, one
//! solution finds all pairs that any direction separates: theirs is `s = 1`.

use std::collections::HashSet;

use clarabel::algebra::CscMatrix;
use clarabel::solver::{DefaultSettings, DefaultSolver, IPSolver, NonnegativeConeT, SolverStatus};
use faer::{Mat, Side};

use crate::chunk::Chunk;
use crate::error::FitError;
use crate::layout::{BLOCK_ROWS, Layout};
use crate::likelihood::{Coefficients, Workspace};
use crate::linear::dot;
use crate::reduce::Merge;
use crate::separation::Margins;
use crate::split::draw;
use crate::table::Table;

/// Up to this many different pairs all of them are taken.
const ALL_PAIRS: usize = 6_000;
/// With more pairs, how many the programme starts with, and how many it takes in addition.
const FIRST_PAIRS: usize = 2_000;
const MORE_PAIRS: usize = 1_000;
const MOST_ROUNDS: usize = 20;
/// A pair whose `s` is above this is separated; at the optimum it is 0 or 1.
const SEPARATED: f64 = 0.5;
/// A margin below minus this share of the largest one is negative.
const NEGATIVE: f64 = 1e-7;
/// Eigenvalues below this share of the largest one count as 0.
const SINGULAR: f64 = 1e-10;

/// A case and a category that it could have had.
#[derive(Debug, Clone, PartialEq)]
struct Pair {
    x: Vec<f64>,
    observed: u32,
    other: u32,
}

impl Pair {
    /// A number for each different pair.
    fn key(&self) -> Vec<u64> {
        let categories = u64::from(self.observed) << 32 | u64::from(self.other);
        self.x.iter().map(|value| value.to_bits()).chain([categories]).collect()
    }

    /// The vector a, category by category.
    fn vector(&self, compared: usize) -> Vec<f64> {
        let terms = self.x.len();
        let mut vector = vec![0.0; terms * compared];
        for (category, sign) in [(self.observed, 1.0), (self.other, -1.0)] {
            if category > 0 {
                let block = &mut vector[(category as usize - 1) * terms..][..terms];
                for (slot, value) in block.iter_mut().zip(&self.x) {
                    *slot = sign * value;
                }
            }
        }
        vector
    }
}

/// What the programme found.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum Verdict {
    /// The estimate exists.
    Finite,
    /// It does not.
    Separated {
        /// A direction in which the likelihood never falls.
        direction: Vec<f64>,
        /// Whether all pairs are separated; `None` where that is not known.
        complete: Option<bool>,
        /// Directions that change no pair that is not separated, where that is known.
        free: Option<Vec<Vec<f64>>>,
    },
    /// The solver was not exact enough to say.
    Undecided,
}

/// Pairs with their order: the smallest are kept.
struct Smallest {
    count: usize,
    pairs: Vec<(f64, Pair)>,
    margins: Margins,
}

impl Smallest {
    fn trim(&mut self) {
        if self.pairs.len() > self.count {
            self.pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
            self.pairs.truncate(self.count);
        }
    }
}

impl Merge for Smallest {
    fn merge(&mut self, later: Self) {
        self.pairs.extend(later.pairs);
        self.margins.merge(later.margins);
        self.trim();
    }
}

/// Which pairs to collect.
#[derive(Debug, Clone, Copy)]
enum Choice {
    /// Those with the smallest margins.
    Margin,
    /// Those with margins below a bound, smallest first.
    Below(f64),
    /// Drawn at random.
    Draw,
}

/// Decides by the programme. `near` are coefficients towards the supremum of the likelihood: pairs
/// with small margins there are looked at first.
pub(crate) fn decide(
    table: &mut Table,
    layout: &Layout,
    compared: usize,
    near: &[f64],
) -> Result<Verdict, FitError> {
    let near = Coefficients::from_vector(near, layout.terms(), compared);
    let first = collect(table, layout, &near, ALL_PAIRS + 1, Choice::Margin)?;
    let all = distinct(first.pairs.iter().map(|(_, pair)| pair.clone()), &mut HashSet::new());
    if first.pairs.len() <= ALL_PAIRS {
        return Ok(decide_all(&all, compared));
    }
    let mut known = HashSet::new();
    let mut pairs = distinct(all.into_iter().take(FIRST_PAIRS), &mut known);
    for _ in 0..MOST_ROUNDS {
        let Some(solution) = solve(&pairs, compared) else { return Ok(Verdict::Undecided) };
        let found = solution.separated.iter().any(|separated| *separated);
        if !found && full_rank(&pairs, compared) {
            return Ok(Verdict::Finite);
        }
        let direction = Coefficients::from_vector(&solution.direction, layout.terms(), compared);
        let margins = collect(table, layout, &direction, 0, Choice::Margin)?.margins;
        let choice = if found { Choice::Below(-NEGATIVE * margins.most) } else { Choice::Draw };
        let more = collect(table, layout, &direction, MORE_PAIRS, choice)?;
        let more = distinct(more.pairs.into_iter().map(|(_, pair)| pair), &mut known);
        if found && margins.least >= -NEGATIVE * margins.most {
            let complete = (margins.least > NEGATIVE * margins.most).then_some(true);
            return Ok(Verdict::Separated { direction: solution.direction, complete, free: None });
        }
        if more.is_empty() {
            return Ok(Verdict::Undecided);
        }
        pairs.extend(more);
    }
    Ok(Verdict::Undecided)
}

fn decide_all(pairs: &[Pair], compared: usize) -> Verdict {
    let Some(solution) = solve(pairs, compared) else { return Verdict::Undecided };
    if solution.separated.iter().all(|separated| !separated) {
        return Verdict::Finite;
    }
    let margin = |pair: &Pair| dot(&pair.vector(compared), &solution.direction);
    let most = pairs.iter().map(margin).fold(0.0, f64::max);
    if pairs.iter().any(|pair| margin(pair) < -10.0 * NEGATIVE * most) {
        return Verdict::Undecided;
    }
    let rest: Vec<&Pair> = pairs
        .iter()
        .zip(&solution.separated)
        .filter(|(_, separated)| !**separated)
        .map(|(pair, _)| pair)
        .collect();
    Verdict::Separated {
        complete: Some(rest.is_empty()),
        free: Some(null_space(&rest, solution.direction.len(), compared)),
        direction: solution.direction,
    }
}

struct Solution {
    direction: Vec<f64>,
    separated: Vec<bool>,
}

/// Solves the programme for some pairs; `None` where the solver fails.
fn solve(pairs: &[Pair], compared: usize) -> Option<Solution> {
    let size = pairs.first()?.x.len() * compared;
    let count = pairs.len();
    // Rows: s - a'D <= 0, then s <= 1, then -s <= 0. Columns: D, then s.
    let (mut rows, mut columns, mut values) = (Vec::new(), Vec::new(), Vec::new());
    for (index, pair) in pairs.iter().enumerate() {
        for (column, value) in
            pair.vector(compared).into_iter().enumerate().filter(|(_, value)| *value != 0.0)
        {
            rows.push(index);
            columns.push(column);
            values.push(-value);
        }
        for (block, value) in [1.0, 1.0, -1.0].into_iter().enumerate() {
            rows.push(block * count + index);
            columns.push(size + index);
            values.push(value);
        }
    }
    let matrix = CscMatrix::new_from_triplets(3 * count, size + count, rows, columns, values);
    let mut bounds = vec![0.0; 3 * count];
    bounds[count..2 * count].fill(1.0);
    let mut cost = vec![0.0; size + count];
    cost[size..].fill(-1.0);
    let quadratic = CscMatrix::zeros((size + count, size + count));
    let settings = DefaultSettings { verbose: false, ..DefaultSettings::default() };
    let cones = [NonnegativeConeT(3 * count)];
    let mut solver = DefaultSolver::new(&quadratic, &cost, &matrix, &bounds, &cones, settings).ok()?;
    solver.solve();
    let solved = matches!(solver.solution.status, SolverStatus::Solved | SolverStatus::AlmostSolved);
    let (direction, shares) = solver.solution.x.split_at(size);
    solved.then(|| Solution {
        direction: direction.to_vec(),
        separated: shares.iter().map(|share| *share > SEPARATED).collect(),
    })
}

/// Sum of `a a'` over pairs.
fn products(pairs: &[&Pair], size: usize, compared: usize) -> Mat<f64> {
    let rows: Vec<Vec<f64>> = pairs.iter().map(|pair| pair.vector(compared)).collect();
    let matrix = Mat::from_fn(rows.len(), size, |row, column| rows[row][column]);
    matrix.transpose() * &matrix
}

fn full_rank(pairs: &[Pair], compared: usize) -> bool {
    let size = pairs.first().map_or(0, |pair| pair.x.len() * compared);
    null_space(&pairs.iter().collect::<Vec<_>>(), size, compared).is_empty()
}

/// Directions orthogonal to all pairs: an orthonormal basis.
fn null_space(pairs: &[&Pair], size: usize, compared: usize) -> Vec<Vec<f64>> {
    let Ok(eigen) = products(pairs, size, compared).self_adjoint_eigen(Side::Lower) else {
        return Vec::new();
    };
    let largest = (0..size).map(|index| eigen.S()[index]).fold(0.0, f64::max);
    (0..size)
        .filter(|&index| eigen.S()[index] <= SINGULAR * largest)
        .map(|index| (0..size).map(|row| eigen.U()[(row, index)]).collect())
        .collect()
}

/// Those of the pairs that are not known yet, each once.
fn distinct(pairs: impl IntoIterator<Item = Pair>, known: &mut HashSet<Vec<u64>>) -> Vec<Pair> {
    pairs.into_iter().filter(|pair| known.insert(pair.key())).collect()
}

/// The first `count` different pairs in the order of a choice, and the range of all margins.
fn collect(
    table: &mut Table,
    layout: &Layout,
    direction: &Coefficients,
    count: usize,
    choice: Choice,
) -> Result<Smallest, FitError> {
    let found = table.reduce(|chunk| {
        let mut smallest = Smallest { count, pairs: Vec::new(), margins: Margins::none() };
        let mut known = HashSet::new();
        for_each_pair(layout, direction, chunk, &mut |margin, key, pair| {
            smallest.margins.extend(margin);
            let order = match choice {
                Choice::Margin => Some(margin),
                Choice::Below(bound) => (margin < bound).then_some(margin),
                Choice::Draw => Some(draw(key, u64::from(direction.compared as u32)) as f64),
            };
            if let (Some(order), true) = (order, count > 0) {
                let pair = pair();
                if known.insert(pair.key()) {
                    smallest.pairs.push((order, pair));
                    if smallest.pairs.len() > 2 * count {
                        smallest.trim();
                    }
                }
            }
        });
        smallest.trim();
        smallest
    })?;
    let mut found = found.unwrap_or(Smallest { count, pairs: Vec::new(), margins: Margins::none() });
    found.pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
    Ok(found)
}

/// Takes the margin of a pair, the key of its row, and what makes the pair if it is wanted.
type VisitPair<'v> = dyn FnMut(f64, u64, &dyn Fn() -> Pair) + 'v;

/// Hands on each pair of a chunk: its margin, the key of its row, and the pair itself if it is
/// wanted.
fn for_each_pair(layout: &Layout, direction: &Coefficients, chunk: &Chunk, visit: &mut VisitPair) {
    let mut work = Workspace::default();
    let compared = direction.compared;
    for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
        let end = (start + BLOCK_ROWS).min(chunk.rows());
        let odds = work.log_odds(layout, direction, chunk, start, end).to_vec();
        let block = work.block();
        for row in 0..end - start {
            let observed = chunk.category[start + row];
            let of = |category: u32| match category {
                0 => 0.0,
                category => odds[(category as usize - 1) * block.rows + row],
            };
            for other in (0..=compared as u32).filter(|&other| other != observed) {
                let pair = || {
                    let mut x = vec![0.0; layout.terms()];
                    block.fill_row(row, layout.dense_terms(), &mut x);
                    Pair { x, observed, other }
                };
                visit(of(observed) - of(other), chunk.key[start + row], &pair);
            }
        }
    }
}
