//! Goodness of fit on the rows of the fit.

use std::collections::BTreeMap;

use serde::Serialize;

use crate::analysis::Analysis;
use crate::analysis::field_tests::{Distribution, TestResult};
use crate::chunk::{Chunk, ChunkColumn};
use crate::error::FitError;
use crate::likelihood::for_each_block;
use crate::reduce::{Merge, add_all};

/// Up to this many rows each score is a block of its own; beyond it scores are binned.
const EXACT_ROWS: u64 = 200_000;
/// Bins on the scale of the log-odds of the score, from minus to plus [`BIN_END`].
const BINS: f64 = 4096.0;
const BIN_END: f64 = 20.0;
/// Numbers of groups that are tried, one after the other.
const GROUPS: [usize; 3] = [10, 6, 5];
/// Most different rows for which the grouped tests are made.
const MOST_PATTERNS: usize = 100_000;

/// The test of goodness of fit of Hosmer and Lemeshow for several categories (Fagerland, Hosmer and
/// Bofin 2008): cases are grouped by the probability of not being in the reference category, and
/// observed and expected numbers of each category in each group are compared.
///
/// A large p-value does not say that the model fits: the test overlooks much. On many rows it
/// finds misfit too small to matter, so look at [`GoodnessOfFit::largest_gap`] as well.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct GoodnessOfFit {
    /// Groups from low to high; observed and expected weight of each category, the reference
    /// first.
    pub groups: Vec<ObservedExpected>,
    /// `sum (O - E)^2 / E`, chi-squared with (groups - 2)(J - 1) degrees of freedom.
    pub test: TestResult,
    /// Largest difference between an observed and an expected number, as a share of all cases.
    pub largest_gap: f64,
    /// Whether the expected numbers are large enough: none below 1, at most a fifth below 5.
    pub valid: bool,
}

/// Observed and expected numbers by category.
#[derive(Debug, Clone, PartialEq, Default, Serialize)]
pub struct ObservedExpected {
    /// Observed.
    pub observed: Vec<f64>,
    /// Expected.
    pub expected: Vec<f64>,
}

/// Tests of a model whose rows repeat: each distinct row of fields is a cell of a table.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct GroupedFit {
    /// Number of distinct rows.
    pub patterns: u64,
    /// `2 sum O ln(O / E)`, against the model that fits every distinct row.
    pub deviance: TestResult,
    /// `sum (O - E)^2 / E` (Pearson).
    pub pearson: TestResult,
    /// Whether the expected numbers are large enough: none below 1, at most a fifth below 5.
    pub valid: bool,
}

/// Sums by key.
struct Blocks<K>(BTreeMap<K, ObservedExpected>);

impl<K: Ord> Merge for Blocks<K> {
    fn merge(&mut self, later: Self) {
        for (key, sums) in later.0 {
            let own = self.0.entry(key).or_default();
            own.resize(sums.observed.len());
            add_all(&mut own.observed, &sums.observed);
            add_all(&mut own.expected, &sums.expected);
        }
    }
}

impl ObservedExpected {
    fn resize(&mut self, categories: usize) {
        self.observed.resize(categories, 0.0);
        self.expected.resize(categories, 0.0);
    }

    fn weight(&self) -> f64 {
        self.observed.iter().sum()
    }
}

impl Analysis<'_> {
    /// The test of Hosmer and Lemeshow with 10 groups, or with 6 or 5 where 10 leave too few cases
    /// in a cell; `None` where even 5 do, with sampling weights and for a penalised fit.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read.
    pub fn goodness_of_fit(&mut self) -> Result<Option<GoodnessOfFit>, FitError> {
        if !self.counts_cases() {
            return Ok(None);
        }
        let blocks = self.score_blocks()?;
        Ok(GROUPS.iter().filter_map(|&groups| hosmer_lemeshow(&blocks, groups)).find(|found| found.valid))
    }

    /// The same with a number of groups of one's own, however few cases there are; `None` for less
    /// than 3 groups, which leave no degree of freedom, with sampling weights and for a penalised fit.
    ///
    /// # Errors
    /// As [`Self::goodness_of_fit`].
    pub fn goodness_of_fit_in(&mut self, groups: usize) -> Result<Option<GoodnessOfFit>, FitError> {
        if !self.counts_cases() {
            return Ok(None);
        }
        Ok(hosmer_lemeshow(&self.score_blocks()?, groups))
    }

    /// Observed and expected numbers by score, ascending.
    fn score_blocks(&mut self) -> Result<Vec<ObservedExpected>, FitError> {
        let (layout, coefficients) = (&self.solution.layout, self.solution.coefficients());
        let rows = self.fitted.model.fit.as_ref().map_or(0, |fit| fit.rows);
        let key: fn(f64, f64) -> u64 = if rows <= EXACT_ROWS { exact_key } else { bin_key };
        let found = self.table.reduce(|chunk| {
            let mut blocks = Blocks(BTreeMap::new());
            for_each_block(layout, &coefficients, chunk, &mut |range, block, p| {
                for (i, row) in range.enumerate() {
                    let others: f64 = p[block.rows..].iter().skip(i).step_by(block.rows).sum();
                    let probabilities = p.iter().skip(i).step_by(block.rows);
                    add_row(blocks.0.entry(key(others, p[i])).or_default(), chunk, row, probabilities);
                }
            });
            blocks
        })?;
        Ok(found.map_or_else(Vec::new, |blocks| blocks.0.into_values().collect()))
    }

    /// Deviance and Pearson's statistic over the distinct rows of fields; `None` where there are
    /// too many of them, no degree of freedom is left, or the fit has sampling weights or a penalty.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read.
    pub fn grouped_fit(&mut self) -> Result<Option<GroupedFit>, FitError> {
        if !self.counts_cases() {
            return Ok(None);
        }
        let (layout, coefficients) = (&self.solution.layout, self.solution.coefficients());
        let found = self.table.reduce(|chunk| {
            let mut patterns = Patterns(Some(Blocks(BTreeMap::new())));
            for_each_block(layout, &coefficients, chunk, &mut |range, block, p| {
                for (i, row) in range.enumerate() {
                    if let Some(blocks) = &mut patterns.0 {
                        let probabilities = p.iter().skip(i).step_by(block.rows);
                        add_row(blocks.0.entry(pattern(chunk, row)).or_default(), chunk, row, probabilities);
                    }
                    patterns.give_up();
                }
            });
            patterns
        })?;
        let Some(Patterns(Some(Blocks(patterns)))) = found else { return Ok(None) };
        let cells: Vec<ObservedExpected> = patterns.into_values().collect();
        let Some(left) = cells.len().checked_sub(layout.terms()).filter(|left| *left > 0) else {
            return Ok(None);
        };
        let distribution = Distribution::ChiSquared { freedom: (left * self.compared()) as f64 };
        Ok(Some(GroupedFit {
            patterns: cells.len() as u64,
            deviance: TestResult::new(deviance(&cells), distribution),
            pearson: TestResult::new(pearson(&cells), distribution),
            valid: large_enough(&cells),
        }))
    }
}

/// Sums by distinct row, or nothing once there are too many.
struct Patterns(Option<Blocks<Vec<u64>>>);

impl Patterns {
    fn give_up(&mut self) {
        if self.0.as_ref().is_some_and(|blocks| blocks.0.len() > MOST_PATTERNS) {
            self.0 = None;
        }
    }
}

impl Merge for Patterns {
    fn merge(&mut self, later: Self) {
        match (&mut self.0, later.0) {
            (Some(own), Some(later)) => own.merge(later),
            (own, _) => *own = None,
        }
        self.give_up();
    }
}

/// The fields of a row, bit by bit.
fn pattern(chunk: &Chunk, row: usize) -> Vec<u64> {
    let bits = |column: &ChunkColumn| match column {
        ChunkColumn::Numbers(numbers) => numbers[row].to_bits(),
        ChunkColumn::Levels(levels) => u64::from(levels[row]),
    };
    chunk.fields.iter().map(bits).collect()
}

fn add_row<'p>(
    sums: &mut ObservedExpected,
    chunk: &Chunk,
    row: usize,
    probabilities: impl Iterator<Item = &'p f64> + Clone,
) {
    sums.resize(probabilities.clone().count());
    let weight = chunk.weight[row];
    sums.observed[chunk.category[row] as usize] += weight;
    for (slot, probability) in sums.expected.iter_mut().zip(probabilities) {
        *slot += weight * probability;
    }
}

/// Scores that agree to 12 significant digits share a key; keys ascend with the score.
fn exact_key(others: f64, _: f64) -> u64 {
    let rounded: f64 = format!("{others:.11e}").parse().unwrap_or(others);
    rounded.to_bits()
}

fn bin_key(others: f64, reference: f64) -> u64 {
    let log_odds = (others.ln() - reference.ln()).clamp(-BIN_END, BIN_END);
    ((log_odds + BIN_END) / (2.0 * BIN_END) * BINS) as u64
}

/// Groups blocks of equal score: a block belongs to the group in which the middle of its cases
/// lies when all cases are laid in order and cut into equal parts.
fn hosmer_lemeshow(blocks: &[ObservedExpected], groups: usize) -> Option<GoodnessOfFit> {
    let categories = blocks.first()?.observed.len();
    let total: f64 = blocks.iter().map(ObservedExpected::weight).sum();
    if groups < 3 {
        return None;
    }
    let mut sums = vec![ObservedExpected::default(); groups];
    let mut before = 0.0;
    for block in blocks {
        let weight = block.weight();
        let middle = (before + 0.5 * weight) / total;
        let group = &mut sums[((groups as f64 * middle) as usize).min(groups - 1)];
        group.resize(categories);
        add_all(&mut group.observed, &block.observed);
        add_all(&mut group.expected, &block.expected);
        before += weight;
    }
    sums.retain(|group| !group.observed.is_empty());
    let freedom = sums.len().checked_sub(2).filter(|freedom| *freedom > 0)? * (categories - 1);
    let gap = |group: &ObservedExpected| {
        let pairs = group.observed.iter().zip(&group.expected);
        pairs.map(|(observed, expected)| (observed - expected).abs()).fold(0.0, f64::max)
    };
    Some(GoodnessOfFit {
        test: TestResult::new(pearson(&sums), Distribution::ChiSquared { freedom: freedom as f64 }),
        largest_gap: sums.iter().map(gap).fold(0.0, f64::max) / total,
        valid: large_enough(&sums),
        groups: sums,
    })
}

fn cells(groups: &[ObservedExpected]) -> impl Iterator<Item = (f64, f64)> {
    groups.iter().flat_map(|group| group.observed.iter().copied().zip(group.expected.iter().copied()))
}

fn pearson(groups: &[ObservedExpected]) -> f64 {
    cells(groups).map(|(observed, expected)| (observed - expected).powi(2) / expected).sum()
}

fn deviance(groups: &[ObservedExpected]) -> f64 {
    let of = |(observed, expected): (f64, f64)| {
        if observed > 0.0 { 2.0 * observed * (observed / expected).ln() } else { 0.0 }
    };
    cells(groups).map(of).sum()
}

fn large_enough(groups: &[ObservedExpected]) -> bool {
    let all = cells(groups).count() as f64;
    let small = cells(groups).filter(|(_, expected)| *expected < 5.0).count() as f64;
    cells(groups).all(|(_, expected)| expected >= 1.0) && small <= 0.2 * all
}
