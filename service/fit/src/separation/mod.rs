//! Separation: when some direction of the coefficients makes every observed category at least as
//! likely, and some more so, the likelihood grows for ever and has no maximum (Albert and Anderson
//! 1984). This module recognises it and says in words where it lies.

mod programme;

use std::fmt;

use crate::chunk::Chunk;
use crate::layout::{BLOCK_ROWS, Layout};
use crate::likelihood::{Coefficients, Workspace};
use crate::raw::BackTransform;
use crate::reduce::Merge;

use crate::resolve::Resolved;

pub(crate) use programme::{Verdict, decide};

/// A margin below this share of the largest one counts as negative.
const NEGATIVE_MARGIN: f64 = -1e-6;
/// Coefficients of a direction below this share of the largest one are not named.
const NAMED_SHARE: f64 = 1e-3;
/// The same for directions known exactly.
const MOVED_SHARE: f64 = 1e-7;

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
    /// Those of no pair.
    fn none() -> Self {
        Self { least: f64::INFINITY, most: f64::NEG_INFINITY }
    }

    fn extend(&mut self, margin: f64) {
        self.least = self.least.min(margin);
        self.most = self.most.max(margin);
    }

    /// All margins are positive: the direction separates completely.
    pub(crate) fn separate_completely(self) -> bool {
        self.least > -NEGATIVE_MARGIN * self.most
    }

    /// No margin is negative and some are positive: the direction separates.
    pub(crate) fn separate(self) -> bool {
        self.most > 0.0 && self.least >= NEGATIVE_MARGIN * self.most
    }

    /// Margins of a direction over the rows of a chunk.
    pub(crate) fn of(layout: &Layout, direction: &Coefficients, chunk: &Chunk) -> Self {
        let mut work = Workspace::default();
        let mut margins = Self::none();
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
                    margins.extend(of(observed) - of(other));
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
    /// Whether it grows without end, or falls, in the direction that was found; `None` where that
    /// direction leaves it alone and others do not.
    pub upwards: Option<bool>,
}

/// Why there is no maximum likelihood estimate, in words.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SeparationReport {
    /// What in the data separates: empty cells of level by category, ranges that do not overlap.
    pub findings: Vec<String>,
    /// Coefficients that have no finite estimate: those of one direction in which the likelihood
    /// grows, or all of them (see [`Self::exhaustive`]).
    pub drifts: Vec<Drift>,
    /// Whether the categories are separated completely, so that the likelihood reaches 1; `None`
    /// where that is not known.
    pub complete: Option<bool>,
    /// Whether `drifts` holds all coefficients without a finite estimate.
    pub exhaustive: bool,
}

impl fmt::Display for SeparationReport {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        let how = if self.complete == Some(true) { " completely" } else { "" };
        write!(f, "the data separate the categories{how}, so there is no finite estimate: ")?;
        if self.findings.is_empty() {
            let drift = |drift: &Drift| {
                let end = match drift.upwards {
                    Some(true) => "rises without end",
                    Some(false) => "falls without end",
                    None => "is not determined",
                };
                format!("`{}` of category `{}` {end}", drift.term, drift.category)
            };
            f.write_str(&shown(&self.drifts.iter().map(drift).collect::<Vec<_>>(), ", "))?;
        } else {
            f.write_str(&shown(&self.findings, "; "))?;
        }
        f.write_str(
            "; merge levels or categories, leave the field out, set `fit.bias_reduction`, or give `fit.ridge` a value",
        )
    }
}

/// The first few of some texts.
fn shown(texts: &[String], separator: &str) -> String {
    const SHOWN: usize = 5;
    let mut text = texts[..texts.len().min(SHOWN)].join(separator);
    if texts.len() > SHOWN {
        text.extend([format!("{separator}and {} more", texts.len() - SHOWN)]);
    }
    text
}

/// A separating direction to report on.
pub(crate) struct Separating<'s> {
    pub(crate) resolved: &'s Resolved,
    /// From the kept standardised terms to plain terms.
    pub(crate) back: &'s BackTransform,
    /// The direction, in kept standardised terms, category by category.
    pub(crate) direction: &'s [f64],
    pub(crate) complete: Option<bool>,
    /// All directions that change only what is separated, where they are known.
    pub(crate) free: Option<&'s [Vec<f64>]>,
}

impl Separating<'_> {
    pub(crate) fn report(&self) -> SeparationReport {
        let resolved = self.resolved;
        let (names, terms) = (resolved.category_names(), resolved.design.terms());
        let along = self.plain(self.direction);
        let moving = match self.free {
            Some(free) => self.moved_by(free),
            None => along.iter().map(|value| value.abs() > NAMED_SHARE).collect(),
        };
        let mut fields = vec![false; resolved.fields.len()];
        let mut drifts = Vec::new();
        for (index, _) in moving.iter().enumerate().filter(|(_, moves)| **moves) {
            let term = &terms[index % terms.len()];
            for &field in &term.fields {
                fields[field] = true;
            }
            drifts.push(Drift {
                category: names[1 + index / terms.len()].to_owned(),
                term: term.name.clone(),
                upwards: (along[index].abs() > NAMED_SHARE).then_some(along[index] > 0.0),
            });
        }
        let involved = || (0..fields.len()).filter(|&field| fields[field]);
        let mut findings: Vec<String> = involved().flat_map(|field| empty_cells(resolved, field)).collect();
        findings.extend(involved().flat_map(|field| separate_ranges(resolved, field)));
        SeparationReport { findings, drifts, complete: self.complete, exhaustive: self.free.is_some() }
    }

    /// A direction in plain terms, each in units of what a step of length 1 can move it at most.
    fn plain(&self, direction: &[f64]) -> Vec<f64> {
        let longest = direction.iter().fold(0.0f64, |longest, value| longest.max(value.abs()));
        let reach = self.back.reach();
        let block = |block: Vec<f64>| {
            let share =
                |(value, reach): (f64, &f64)| if *reach > 0.0 { value / (reach * longest) } else { 0.0 };
            block.into_iter().zip(&reach).map(share).collect::<Vec<_>>()
        };
        self.back.coefficients(direction).into_iter().flat_map(block).collect()
    }

    /// Which plain coefficients some direction moves.
    fn moved_by(&self, directions: &[Vec<f64>]) -> Vec<bool> {
        let size = self.resolved.design.terms().len() * (self.resolved.category_weights.len() - 1);
        let mut moved = vec![false; size];
        for direction in directions {
            for (moved, value) in moved.iter_mut().zip(self.plain(direction)) {
                *moved |= value.abs() > MOVED_SHARE;
            }
        }
        moved
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
