//! Covariance of the coefficients: from the model, robust, robust to clusters.
//!
//! With V the inverse of the information I and `s_i = (y_i - p_i) (x) x_i` the score of a case
//! ((x) is the Kronecker product), the robust covariance is `V (sum_i w_i^2 s_i s_i') V` over
//! cases (White 1980). With clusters `u_c = sum of w_i s_i over the cases of c` takes the place of
//! `w_i s_i` (Liang and Zeger 1986).

use std::collections::HashMap;

use faer::{Mat, MatRef};

use crate::chunk::Chunk;
use crate::cross::CrossProducts;
use crate::error::FitError;
use crate::estimate::Solution;
use crate::layout::Layout;
use crate::likelihood::{
    Coefficients, Order, Sums, Workspace, add_chunk, add_score_products, for_each_score,
};
use crate::linear::Factor;
use crate::reduce::{Merge, add_all};
use crate::table::Table;

/// Below this number of clusters the covariance is corrected for their small number.
pub(crate) const FEW_CLUSTERS: u64 = 50;
/// Fewer clusters say nothing about the differences between clusters.
pub(crate) const LEAST_CLUSTERS: u64 = 5;
/// Bytes that the information of several clusters may take at a time.
const CLUSTER_BYTES: usize = 1 << 28;

/// Sums of score products over cases.
#[derive(Debug)]
struct Scores {
    products: CrossProducts,
    cases: f64,
}

impl Merge for Scores {
    fn merge(&mut self, later: Self) {
        self.products.merge(later.products);
        self.cases += later.cases;
    }
}

/// The robust covariance, with the factor `n / (n - 1)` for n cases.
pub(crate) fn robust(table: &mut Table, solution: &Solution) -> Result<Mat<f64>, FitError> {
    let (layout, coefficients) = (&solution.layout, solution.coefficients());
    let compared = coefficients.compared;
    let count = compared * (compared + 1) / 2;
    let scores = table.reduce(|chunk| {
        let mut products = CrossProducts::new(layout, count);
        add_score_products(&mut products, &mut Workspace::default(), layout, &coefficients, chunk);
        Scores { products, cases: chunk.count.iter().sum() }
    })?;
    let Some(Scores { products, cases }) = scores else { return Ok(solution.optimum.covariance.clone()) };
    let terms = layout.terms();
    let pair = |j: usize, k: usize| {
        let (j, k) = (j.min(k), j.max(k));
        j * (2 * compared - j + 1) / 2 + (k - j)
    };
    let meat = Mat::from_fn(terms * compared, terms * compared, |row, column| {
        products.at(pair(row / terms, column / terms), row % terms, column % terms)
    });
    Ok(sandwich(solution.optimum.covariance.as_ref(), meat.as_ref(), cases / (cases - 1.0)))
}

fn sandwich(bread: MatRef<'_, f64>, meat: MatRef<'_, f64>, factor: f64) -> Mat<f64> {
    bread * meat * bread * faer::Scale(factor)
}

/// Score of each cluster, in the order of their first rows.
#[derive(Debug, Default)]
pub(crate) struct ClusterScores {
    index: HashMap<u64, usize>,
    keys: Vec<u64>,
    /// Clusters x coefficients.
    scores: Vec<f64>,
}

impl ClusterScores {
    fn of(layout: &Layout, coefficients: &Coefficients, chunk: &Chunk) -> Self {
        let size = layout.terms() * coefficients.compared;
        let mut found = Self::default();
        for_each_score(layout, coefficients, chunk, &mut |row, score| {
            add_all(found.slot(chunk.cluster[row], size), score);
        });
        found
    }

    fn slot(&mut self, key: u64, size: usize) -> &mut [f64] {
        let next = self.keys.len();
        let position = *self.index.entry(key).or_insert(next);
        if position == next {
            self.keys.push(key);
            self.scores.resize(self.scores.len() + size, 0.0);
        }
        &mut self.scores[position * size..][..size]
    }
}

impl Merge for ClusterScores {
    fn merge(&mut self, later: Self) {
        if later.keys.is_empty() {
            return;
        }
        let size = later.scores.len() / later.keys.len();
        for (key, score) in later.keys.iter().zip(later.scores.chunks_exact(size)) {
            add_all(self.slot(*key, size), score);
        }
    }
}

/// The covariance that is robust to clusters.
///
/// From [`FEW_CLUSTERS`] clusters on with the factor `G / (G - 1)`. Below that each cluster's score
/// is taken at the coefficients that one Newton step without the cluster gives, so that its pull
/// on the estimate does not hide how far it is from the others: `(G - 1) / G sum_c r_c r_c'` with
/// `r_c = (I - I_c)^-1 u_c`, the one-step jackknife (Bell and McCaffrey 2002, CR3). `None` where
/// the estimate hangs on a single cluster, so that there is no step without it.
pub(crate) fn clustered(table: &mut Table, solution: &Solution) -> Result<Option<Mat<f64>>, FitError> {
    let (layout, coefficients) = (&solution.layout, solution.coefficients());
    let found = table.reduce(|chunk| ClusterScores::of(layout, &coefficients, chunk))?.unwrap_or_default();
    let clusters = found.keys.len();
    let groups = clusters as f64;
    if clusters as u64 >= FEW_CLUSTERS {
        let size = found.scores.len() / clusters;
        let scores = MatRef::from_row_major_slice(&found.scores, clusters, size);
        let meat = scores.transpose() * scores;
        return Ok(Some(sandwich(
            solution.optimum.covariance.as_ref(),
            meat.as_ref(),
            groups / (groups - 1.0),
        )));
    }
    jackknife(table, solution, &found)
}

fn jackknife(
    table: &mut Table,
    solution: &Solution,
    found: &ClusterScores,
) -> Result<Option<Mat<f64>>, FitError> {
    let (layout, coefficients) = (&solution.layout, solution.coefficients());
    let size = layout.terms() * coefficients.compared;
    let groups = found.keys.len() as f64;
    let mut sum = Mat::<f64>::zeros(size, size);
    let at_a_time = (CLUSTER_BYTES / (size * size * 8)).max(1);
    for (keys, scores) in found.keys.chunks(at_a_time).zip(found.scores.chunks(at_a_time * size)) {
        let informations =
            table.reduce(|chunk| ClusterInformation::of(layout, &coefficients, keys, chunk))?;
        let Some(ClusterInformation(informations)) = informations else { return Ok(None) };
        for (information, score) in informations.iter().zip(scores.chunks_exact(size)) {
            let without = &solution.optimum.at.information - information.information();
            let Ok(factor) = Factor::new(without.as_ref()) else { return Ok(None) };
            let step = factor.solve(score);
            let step = MatRef::from_column_major_slice(&step, size, 1);
            sum += step * step.transpose();
        }
    }
    Ok(Some(sum * faer::Scale((groups - 1.0) / groups)))
}

/// The information of some clusters.
struct ClusterInformation(Vec<Sums>);

impl Merge for ClusterInformation {
    fn merge(&mut self, later: Self) {
        for (sums, later) in self.0.iter_mut().zip(later.0) {
            sums.merge(later);
        }
    }
}

impl ClusterInformation {
    fn of(layout: &Layout, coefficients: &Coefficients, keys: &[u64], chunk: &Chunk) -> Self {
        let mut rows: HashMap<u64, Vec<usize>> = HashMap::new();
        for (row, key) in chunk.cluster.iter().enumerate() {
            rows.entry(*key).or_default().push(row);
        }
        let of_cluster = |key: &u64| {
            let mut sums = Sums::new(layout, coefficients.compared, Order::Information);
            if let Some(rows) = rows.get(key) {
                let part = chunk.selected(rows);
                let work = &mut Workspace::default();
                add_chunk(&mut sums, work, layout, coefficients, &part, Order::Information);
            }
            sums
        };
        Self(keys.iter().map(of_cluster).collect())
    }
}
