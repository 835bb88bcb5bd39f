//! Fits on a part of the categories: do the odds of two categories depend on which others there
//! are (independence of irrelevant alternatives), and do separate fits of two categories each
//! agree with the joint one?
//!
//! A fit on the cases of some categories estimates the same coefficients as the joint fit if the
//! model holds, less precisely. The difference `d` of the two is compared with its robust
//! covariance `Q = sum_i w_i q_i q_i'`, where `q_i` is what case i contributes to `d`: its score in
//! the smaller fit times that fit's covariance (0 for a case left out), less the same of the joint
//! fit.

use faer::{Mat, MatRef, Side};
use serde::Serialize;

use crate::analysis::Analysis;
use crate::analysis::field_tests::{Distribution, TestResult};
use crate::chunk::Chunk;
use crate::error::FitError;
use crate::estimate::{Solution, estimate_view};
use crate::layout::{BLOCK_ROWS, Layout};
use crate::likelihood::{Coefficients, Order, for_each_score};
use crate::linear::{Factor, dot};
use crate::newton::{Objective, Optimum, Stopped};
use crate::objective::{Likelihood, View};
use crate::raw::BackTransform;
use crate::reduce::{Merge, add_all};
use crate::split::draw;

/// How many random halves the test of Small and Hsiao is made with.
const HALVINGS: u64 = 11;

/// Tests of the independence of irrelevant alternatives with one category left out.
///
/// Tests of this kind often disagree, and a term that is missing from the model makes them reject
/// as well. They are evidence for or against, never a verdict.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct IndependenceTest {
    /// The category that was left out.
    pub left_out: String,
    /// `d' Q^-1 d`; can always be computed, and rejects rather too seldom.
    pub robust: TestResult,
    /// The test of Hausman and McFadden (1984).
    pub hausman: Option<Hausman>,
    /// The test of Small and Hsiao (1985).
    pub small_hsiao: Option<SmallHsiao>,
}

/// `d' (V_r - V_f)^-1 d` with the model covariances of the smaller and the joint fit.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Hausman {
    /// The statistic with its p-value.
    pub test: TestResult,
    /// Smallest eigenvalue of `V_r - V_f`. Where it is below 0, as happens more often than not,
    /// the statistic means nothing.
    pub smallest_eigenvalue: f64,
}

/// The median over random halves of the cases; the result of one of them depends much on the draw.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct SmallHsiao {
    /// Number of halvings for which both halves could be fitted.
    pub halvings: u64,
    /// Median of their p-values.
    pub median_p: f64,
}

/// A separate fit of two categories (Begg and Gray 1984) beside the joint one.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SeparateFit {
    /// The category, fitted against the reference on the cases of these two.
    pub category: String,
    /// One entry per term that was not left out.
    pub terms: Vec<SeparateTerm>,
}

/// One coefficient of a separate fit beside the joint one.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SeparateTerm {
    /// The term.
    pub term: String,
    /// Its coefficient in the separate fit.
    pub separate: f64,
    /// Its coefficient in the joint fit.
    pub joint: f64,
    /// Standard error of the joint one.
    pub joint_error: f64,
    /// Their difference in its own standard errors; beyond 4 the model does not hold.
    pub z: f64,
}

/// A part of the categories, the one to compare against first, and the coefficients that the joint
/// fit has for them.
struct Part {
    categories: Vec<usize>,
    layout: Layout,
    joint: Coefficients,
    /// From coefficients of the joint fit to those of the part: differences of categories.
    differences: Mat<f64>,
}

/// A fit of a part.
struct PartFit {
    part: Part,
    optimum: Optimum,
    difference: Vec<f64>,
    /// Covariance of the joint fit's coefficients for these categories.
    joint_covariance: Mat<f64>,
    /// Robust covariance of the difference.
    difference_covariance: Mat<f64>,
}

impl Part {
    fn new(categories: Vec<usize>, solution: &Solution) -> Self {
        let terms = solution.layout.terms();
        let mut differences = Mat::zeros(terms * (categories.len() - 1), solution.optimum.point.len());
        for (block, &category) in categories[1..].iter().enumerate() {
            for term in 0..terms {
                let row = block * terms + term;
                if category > 0 {
                    differences[(row, (category - 1) * terms + term)] = 1.0;
                }
                if categories[0] > 0 {
                    differences[(row, (categories[0] - 1) * terms + term)] -= 1.0;
                }
            }
        }
        Self { categories, layout: solution.layout.clone(), joint: solution.coefficients(), differences }
    }

    fn of_joint(&self, point: &[f64]) -> Vec<f64> {
        let point = MatRef::from_column_major_slice(point, point.len(), 1);
        let part = &self.differences * point;
        (0..part.nrows()).map(|row| part[(row, 0)]).collect()
    }

    fn weights(&self, category_weights: &[f64]) -> Vec<f64> {
        self.categories.iter().map(|&category| category_weights[category]).collect()
    }
}

/// Sum of `q q'` over the cases of a chunk.
struct Contributions(Vec<f64>);

impl Merge for Contributions {
    fn merge(&mut self, later: Self) {
        add_all(&mut self.0, &later.0);
    }
}

impl Analysis<'_> {
    /// Tests the independence of irrelevant alternatives, leaving out each category in turn. Takes
    /// a good many fits. Empty for two categories, with sampling weights and for a penalised fit.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read.
    pub fn independence(&mut self) -> Result<Vec<IndependenceTest>, FitError> {
        let categories = self.compared() + 1;
        let mut tests = Vec::new();
        if categories < 3 || !self.counts_cases() {
            return Ok(tests);
        }
        for left_out in 0..categories {
            let kept: Vec<usize> = (0..categories).filter(|&category| category != left_out).collect();
            if let Some(fit) = self.fit_part(Part::new(kept, &self.solution))? {
                let small_hsiao = self.small_hsiao(&fit.part)?;
                let left_out = self.resolved.category_names()[left_out].to_owned();
                tests.extend(fit.independence(left_out, small_hsiao));
            }
        }
        Ok(tests)
    }

    /// Fits each category separately against the reference; leaves out those for which that has no
    /// estimate. Empty with sampling weights and for a
    /// penalised fit.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read.
    pub fn separate_fits(&mut self) -> Result<Vec<SeparateFit>, FitError> {
        let mut found = Vec::new();
        if !self.counts_cases() {
            return Ok(found);
        }
        for category in 1..=self.compared() {
            if let Some(fit) = self.fit_part(Part::new(vec![0, category], &self.solution))? {
                found.push(self.separate_fit(category, &fit));
            }
        }
        Ok(found)
    }

    fn separate_fit(&self, category: usize, fit: &PartFit) -> SeparateFit {
        let resolved = &self.resolved;
        let (back, _) = BackTransform::new(
            &resolved.design,
            &resolved.scaling,
            fit.part.layout.order(),
            &self.solution.swept.aliased,
        );
        let plain = |point: &[f64]| back.coefficients(point).concat();
        let separate = plain(&fit.optimum.point);
        let joint = plain(&fit.part.of_joint(&self.solution.optimum.point));
        let joint_covariance = back.covariance(fit.joint_covariance.as_ref());
        let covariance = back.covariance(fit.difference_covariance.as_ref());
        let mut kept = fit.part.layout.order().to_vec();
        kept.sort_unstable();
        let term = |&term: &usize| SeparateTerm {
            term: resolved.design.terms()[term].name.clone(),
            separate: separate[term],
            joint: joint[term],
            joint_error: joint_covariance[(term, term)].sqrt(),
            z: (separate[term] - joint[term]) / covariance[(term, term)].sqrt(),
        };
        SeparateFit {
            category: resolved.category_names()[category].to_owned(),
            terms: kept.iter().map(term).collect(),
        }
    }

    /// The fit on the cases of some categories; `None` where it has no estimate.
    fn fit_part(&mut self, part: Part) -> Result<Option<PartFit>, FitError> {
        let weights = part.weights(&self.resolved.category_weights);
        let start = part.of_joint(&self.solution.optimum.point);
        let view = |chunk: &Chunk| chunk.of_categories(&part.categories);
        let fitted = estimate_view(&mut self.table, &part.layout, &weights, &view, start.clone());
        let Some(optimum) = estimated(fitted)? else { return Ok(None) };
        let difference = optimum.point.iter().zip(&start).map(|(part, joint)| part - joint).collect();
        let joint_covariance =
            &part.differences * &self.solution.optimum.covariance * part.differences.transpose();
        let difference_covariance = self.difference_covariance(&part, &optimum)?;
        Ok(Some(PartFit { part, optimum, difference, joint_covariance, difference_covariance }))
    }

    /// The covariance Q of the difference.
    fn difference_covariance(&mut self, part: &Part, optimum: &Optimum) -> Result<Mat<f64>, FitError> {
        let size = optimum.point.len();
        let terms = part.layout.terms();
        let own = Coefficients::from_vector(&optimum.point, terms, size / terms);
        let from_joint = &part.differences * &self.solution.optimum.covariance;
        let sums = self.table.reduce(|chunk| {
            let mut sums = Mat::<f64>::zeros(size, size);
            for start in (0..chunk.rows()).step_by(BLOCK_ROWS) {
                let rows: Vec<usize> = (start..(start + BLOCK_ROWS).min(chunk.rows())).collect();
                let block = chunk.selected(&rows);
                let q = contributions(part, &own, optimum.covariance.as_ref(), from_joint.as_ref(), &block);
                sums += q.transpose() * &q;
            }
            Contributions((0..size * size).map(|index| sums[(index / size, index % size)]).collect())
        })?;
        let sums = sums.map_or_else(|| vec![0.0; size * size], |sums| sums.0);
        Ok(Mat::from_fn(size, size, |row, column| sums[row * size + column]))
    }

    /// Small and Hsiao's test on random halves.
    fn small_hsiao(&mut self, part: &Part) -> Result<Option<SmallHsiao>, FitError> {
        let mut found = Vec::new();
        for seed in 0..HALVINGS {
            let first_half = move |key: u64| draw(key, seed) >> 63 == 0;
            found.extend(self.small_hsiao_of(part, &first_half)?.map(|test| test.p));
        }
        found.sort_by(f64::total_cmp);
        let median_p = found.get(found.len() / 2).copied();
        Ok(median_p.map(|median_p| SmallHsiao { halvings: found.len() as u64, median_p }))
    }

    /// Both halves are fitted with all categories; their coefficients `b_A / sqrt 2 + (1 - 1 / sqrt
    /// 2) b_B` are compared with those of a fit of the part on the second half, by the likelihood
    /// of the part on the second half.
    fn small_hsiao_of(
        &mut self,
        part: &Part,
        first_half: &(dyn Fn(u64) -> bool + Sync),
    ) -> Result<Option<TestResult>, FitError> {
        let half = |chunk: &Chunk, first: bool| {
            let rows: Vec<usize> =
                (0..chunk.rows()).filter(|&row| first_half(chunk.key[row]) == first).collect();
            chunk.selected(&rows)
        };
        let weights = self.resolved.category_weights.clone();
        let start = self.solution.optimum.point.clone();
        let mut halves = Vec::new();
        for first in [true, false] {
            let view = |chunk: &Chunk| half(chunk, first);
            let fitted = estimate_view(&mut self.table, &part.layout, &weights, &view, start.clone());
            match estimated(fitted)? {
                Some(optimum) => halves.push(part.of_joint(&optimum.point)),
                None => return Ok(None),
            }
        }
        let share = std::f64::consts::FRAC_1_SQRT_2;
        let mixed: Vec<f64> =
            halves[0].iter().zip(&halves[1]).map(|(a, b)| share * a + (1.0 - share) * b).collect();
        let view = |chunk: &Chunk| half(chunk, false).of_categories(&part.categories);
        let weights = part.weights(&self.resolved.category_weights);
        let at_mixed = self.value_of_view(&part.layout, &weights, &view, &mixed)?;
        let fitted = estimate_view(&mut self.table, &part.layout, &weights, &view, mixed.clone());
        Ok(estimated(fitted)?.map(|optimum| {
            let statistic = (2.0 * (optimum.at.value - at_mixed)).max(0.0);
            TestResult::new(statistic, Distribution::ChiSquared { freedom: mixed.len() as f64 })
        }))
    }

    fn value_of_view(
        &mut self,
        layout: &Layout,
        weights: &[f64],
        view: &View,
        point: &[f64],
    ) -> Result<f64, FitError> {
        let mut likelihood = Likelihood::of_view(&mut self.table, layout, weights, view);
        Ok(likelihood.evaluate(point, Order::Value)?.value)
    }
}

/// The optimum, or `None` where there is none; only a failure to read is an error here.
fn estimated(fitted: Result<Optimum, Stopped>) -> Result<Option<Optimum>, FitError> {
    match fitted {
        Ok(optimum) => Ok(Some(optimum)),
        Err(Stopped::Failed(error)) => Err(error),
        Err(_) => Ok(None),
    }
}

/// What each case of a block contributes to the difference: rows x coefficients of the part. A row
/// of c cases with weight w counts as c cases, each with the root of its share.
fn contributions(
    part: &Part,
    own: &Coefficients,
    covariance: MatRef<'_, f64>,
    from_joint: MatRef<'_, f64>,
    block: &Chunk,
) -> Mat<f64> {
    let mut joint_scores = Mat::<f64>::zeros(block.rows(), from_joint.ncols());
    for_each_score(&part.layout, &part.joint, block, &mut |row, score| {
        for (column, value) in score.iter().enumerate() {
            joint_scores[(row, column)] = value / block.count[row].sqrt();
        }
    });
    let kept: Vec<usize> =
        (0..block.rows()).filter(|&row| part.categories.contains(&(block.category[row] as usize))).collect();
    let mut own_scores = Mat::<f64>::zeros(block.rows(), covariance.nrows());
    let rows = block.of_categories(&part.categories);
    for_each_score(&part.layout, own, &rows, &mut |index, score| {
        for (column, value) in score.iter().enumerate() {
            own_scores[(kept[index], column)] = value / block.count[kept[index]].sqrt();
        }
    });
    own_scores * covariance - joint_scores * from_joint.transpose()
}

impl PartFit {
    fn independence(&self, left_out: String, small_hsiao: Option<SmallHsiao>) -> Option<IndependenceTest> {
        let distribution = Distribution::ChiSquared { freedom: self.difference.len() as f64 };
        let factor = Factor::new(self.difference_covariance.as_ref()).ok()?;
        let robust = TestResult::new(dot(&self.difference, &factor.solve(&self.difference)), distribution);
        Some(IndependenceTest { left_out, robust, hausman: self.hausman(distribution), small_hsiao })
    }

    fn hausman(&self, distribution: Distribution) -> Option<Hausman> {
        let gain = &self.optimum.covariance - &self.joint_covariance;
        let eigen = gain.self_adjoint_eigen(Side::Lower).ok()?;
        let size = self.difference.len();
        let mut statistic = 0.0;
        for index in 0..size {
            let projection: f64 = (0..size).map(|row| eigen.U()[(row, index)] * self.difference[row]).sum();
            statistic += projection * projection / eigen.S()[index];
        }
        let smallest = (0..size).map(|index| eigen.S()[index]).fold(f64::INFINITY, f64::min);
        Some(Hausman { test: TestResult::new(statistic, distribution), smallest_eigenvalue: smallest })
    }
}

#[cfg(test)]
#[path = "alternatives_tests.rs"]
mod tests;
