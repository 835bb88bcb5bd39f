//! Grouped goodness of fit: records in groups by one minus the probability of the reference
//! category, with the decile edges of the fit.

use serde::Serialize;

use crate::error::DriftError;
use crate::frame::Frame;
use crate::quadratic::{grouped, quadratic};
use crate::score_sums::{FEWEST_EXPECTED, FEWEST_RECORDS, Pools};
use crate::statistic::Statistic;
use crate::summary::{FullPart, Summary, lower, lower_length};
use crate::training::TrainingUncertainty;

/// Grouped goodness of fit (Fagerland, Hosmer and Bofin 2008).
///
/// The exact covariance of the counts is used, not the customary Pearson form, which ignores how
/// the probabilities scatter within a group and so rejects too seldom.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct GroupedFit {
    /// The groups, ascending, as they entered the test.
    pub groups: Vec<FitGroup>,
    /// Whether the counts of the groups scatter more than chance allows. Conservative when there
    /// are many more records than training cases.
    pub test: Statistic,
}

/// One group: observed against promised.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct FitGroup {
    /// Upper end of one minus the reference probability in this group.
    pub to: f64,
    /// Records in it.
    pub n: f64,
    /// Outcomes of each category, model order.
    pub observed: Vec<f64>,
    /// Sums of the probabilities.
    pub expected: Vec<f64>,
}

/// Sums of one group.
#[derive(Debug, Clone)]
struct GroupSums {
    to: f64,
    observed: Vec<f64>,
    expected: Vec<f64>,
    /// J x J, row by row.
    variance: Vec<f64>,
}

/// The grouped goodness of fit of the records with an outcome.
///
/// Within a group the categories with few expected cases are pooled to at least five; a group in
/// which fewer than two pools are left is put together with its neighbour.
///
/// # Errors
/// [`DriftError::Missing`] for a light summary.
pub fn grouped_fit(frame: &Frame, summary: &Summary) -> Result<GroupedFit, DriftError> {
    let full =
        summary.full.as_ref().ok_or(DriftError::Missing { what: "grouped fit", needed: "a full summary" })?;
    let phi = TrainingUncertainty::new(frame, summary).phi;
    Ok(fit(frame, full, phi, FEWEST_EXPECTED))
}

pub(crate) fn fit(frame: &Frame, full: &FullPart, phi: Option<f64>, minimum: f64) -> GroupedFit {
    let groups = merged(group_sums(frame, full), minimum);
    let (mut value, mut df, mut n) = (0.0, 0, 0.0);
    for group in &groups {
        let pools = Pools::new(&group.expected, minimum);
        let score: Vec<f64> = group.observed.iter().zip(&group.expected).map(|(o, e)| o - e).collect();
        let (score, variance) =
            grouped(&score, &group.variance, &pools.free(), pools.count.saturating_sub(1));
        let form = quadratic(&score, &variance);
        value += form.value;
        df += form.rank;
        n += group.observed.iter().sum::<f64>();
    }
    let shown = |group: GroupSums| FitGroup {
        to: group.to,
        n: group.observed.iter().sum(),
        observed: group.observed,
        expected: group.expected,
    };
    GroupedFit {
        groups: groups.into_iter().map(shown).collect(),
        test: Statistic::chi_square(value, df, phi, n, n >= FEWEST_RECORDS),
    }
}

fn group_sums(frame: &Frame, full: &FullPart) -> Vec<GroupSums> {
    let categories = frame.categories.len();
    let triangle = lower_length(categories);
    let groups = frame.decile_edges.len() + 1;
    let sums = |group: usize| {
        let at = |entry: usize| group * triangle + lower(entry / categories, entry % categories);
        GroupSums {
            to: frame.decile_edges.get(group).copied().unwrap_or(1.0),
            observed: full.group_observed[group * categories..(group + 1) * categories].to_vec(),
            expected: (0..categories).map(|j| full.group_expected.value(group * categories + j)).collect(),
            variance: (0..categories * categories)
                .map(|entry| full.group_variance.value(at(entry)))
                .collect(),
        }
    };
    (0..groups).map(sums).collect()
}

/// Groups put together with their upper neighbour until each has two pools; what is left at the
/// end joins the last group.
fn merged(groups: Vec<GroupSums>, minimum: f64) -> Vec<GroupSums> {
    let mut merged: Vec<GroupSums> = Vec::new();
    let mut open: Option<GroupSums> = None;
    for group in groups {
        let joined = match open.take() {
            Some(open) => open.with(&group),
            None => group,
        };
        if Pools::new(&joined.expected, minimum).count >= 2 {
            merged.push(joined);
        } else {
            open = Some(joined);
        }
    }
    if let Some(rest) = open {
        let joined = match merged.pop() {
            Some(last) => last.with(&rest),
            None => rest,
        };
        merged.push(joined);
    }
    merged
}

impl GroupSums {
    fn with(mut self, upper: &Self) -> Self {
        let add = |sums: &mut Vec<f64>, more: &[f64]| {
            for (sum, more) in sums.iter_mut().zip(more) {
                *sum += more;
            }
        };
        add(&mut self.observed, &upper.observed);
        add(&mut self.expected, &upper.expected);
        add(&mut self.variance, &upper.variance);
        Self { to: upper.to, ..self }
    }
}
