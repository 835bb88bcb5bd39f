//! Separation: when some direction of the coefficients makes every observed category at least as
//! likely, and some more so, the likelihood grows for ever and has no maximum (Albert and Anderson
//! 1984). This module recognises it and says in words where it lies.

use std::fmt;

use crate::chunk::Chunk;
use crate::layout::{BLOCK_ROWS, Layout};
use crate::likelihood::{Coefficients, Workspace};
use crate::reduce::Merge;
use crate::resolve::Resolved;

/// A margin below this share of the largest one counts as negative.
const NEGATIVE_MARGIN: f64 = -1e-6;
/// Coefficients of a direction below this share of the largest one are not named.
const NAMED_SHARE: f64 = 1e-3;

/// Smallest and largest margin of a direction: the change of the log-odds of the observed category
/// against another one, over all rows and all other categories.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Margins {
    pub(crate) least: f64,
    pub(crate) most: f64,
}

impl Merge for Margins {
    fn merge(&mut self, later: Self) {
        self.least = self.least.min(later.least);
        self.most = self.most.max(later.most);
    }
}

impl Margins {
    /// No margin is negative and some are positive: the direction separates.
    pub(crate) fn separate(self) -> bool {
        self.most > 0.0 && self.least >= NEGATIVE_MARGIN * self.most
    }

    /// Margins of a direction over the rows of a chunk.
    pub(crate) fn of(layout: &Layout, direction: &Coefficients, chunk: &Chunk) -> Self {
        let mut work = Workspace::default();
        let mut margins = Self { least: f64::INFINITY, most: f64::NEG_INFINITY };
        let compared = direction.compared;
        for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
            let end = (start + BLOCK_ROWS).min(chunk.rows());
            let odds = work.log_odds(layout, direction, chunk, start, end);
            let rows = end - start;
            for row in 0..rows {
                let observed = chunk.category[start + row] as usize;
                let of =
                    |category: usize| if category == 0 { 0.0 } else { odds[(category - 1) * rows + row] };
                for other in (0..=compared).filter(|&other| other != observed) {
                    let margin = of(observed) - of(other);
                    margins.least = margins.least.min(margin);
                    margins.most = margins.most.max(margin);
                }
            }
        }
        margins
    }
}

/// A coefficient that has no finite estimate.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Drift {
    /// The category whose log-odds against the reference it belongs to.
    pub category: String,
    /// The term.
    pub term: String,
    /// Whether it grows without end, or falls.
    pub upwards: bool,
}

/// Why there is no maximum likelihood estimate, in words.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SeparationReport {
    /// What in the data separates: empty cells of level by category, ranges that do not overlap.
    pub findings: Vec<String>,
    /// Coefficients that have no finite estimate. Those of a direction in which the likelihood
    /// grows; there can be more.
    pub drifts: Vec<Drift>,
}

impl fmt::Display for SeparationReport {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str("the data separate the categories, so there is no finite estimate: ")?;
        if self.findings.is_empty() {
            let drift = |drift: &Drift| {
                let end = if drift.upwards { "rises" } else { "falls" };
                format!("`{}` of category `{}` {end} without end", drift.term, drift.category)
            };
            let named: Vec<String> = self.drifts.iter().take(5).map(drift).collect();
            f.write_str(&named.join(", "))?;
        } else {
            let shown: Vec<&str> = self.findings.iter().take(5).map(String::as_str).collect();
            f.write_str(&shown.join("; "))?;
        }
        f.write_str("; merge levels or categories, leave the field out, or give `fit.ridge` a value")
    }
}

impl SeparationReport {
    /// The report on a direction (kept terms, category by category) that separates.
    ///
    /// `kept` are the indices of the terms in the design.
    pub(crate) fn new(resolved: &Resolved, kept: &[usize], direction: &[f64]) -> Self {
        let largest = direction.iter().fold(0.0f64, |largest, value| largest.max(value.abs()));
        let names = resolved.category_names();
        let terms = resolved.design.terms();
        let mut drifts = Vec::new();
        let mut fields = vec![false; resolved.fields.len()];
        for (index, &value) in
            direction.iter().enumerate().filter(|(_, value)| value.abs() > NAMED_SHARE * largest)
        {
            let term = &terms[kept[index % kept.len()]];
            for &field in &term.fields {
                fields[field] = true;
            }
            drifts.push(Drift {
                category: names[1 + index / kept.len()].to_owned(),
                term: term.name.clone(),
                upwards: value > 0.0,
            });
        }
        let involved = || (0..fields.len()).filter(|&field| fields[field]);
        let mut findings: Vec<String> = involved().flat_map(|field| empty_cells(resolved, field)).collect();
        findings.extend(involved().flat_map(|field| separate_ranges(resolved, field)));
        Self { findings, drifts }
    }
}

/// Levels that never occur with a category.
fn empty_cells(resolved: &Resolved, field: usize) -> Vec<String> {
    use kilter_model::Field;
    let level_name = |level: usize| match &resolved.fields[field] {
        Field::Levels(levels) => levels.levels[level].clone(),
        Field::Number(_) | Field::Flag(_) => ["false", "true"][level].to_owned(),
    };
    let name = resolved.fields[field].name();
    let categories = resolved.category_names();
    let mut found = Vec::new();
    for (level, cases) in resolved.level_cases[field].iter().enumerate() {
        let total: f64 = cases.iter().sum();
        for (category, _) in cases.iter().enumerate().filter(|&(_, &cases)| cases == 0.0 && total > 0.0) {
            let level = level_name(level);
            found.push(format!(
                "category `{}` never occurs with `{name}` = `{level}` ({total} cases)",
                categories[category]
            ));
        }
    }
    found
}

/// Pairs of categories whose numbers do not overlap.
fn separate_ranges(resolved: &Resolved, field: usize) -> Vec<String> {
    let name = resolved.fields[field].name();
    let categories = resolved.category_names();
    let ranges = &resolved.ranges[field];
    let mut found = Vec::new();
    for (lower, [_, highest]) in ranges.iter().enumerate() {
        for (upper, [lowest, _]) in ranges.iter().enumerate() {
            if lower != upper && highest <= lowest {
                found.push(format!(
                    "`{name}` is at most {highest} with category `{}` and at least {lowest} with `{}`",
                    categories[lower], categories[upper]
                ));
            }
        }
    }
    found
}
