//! The score and the Fisher information of the recalibration with intercepts and a common slope,
//! taken from a summary.

use crate::quadratic::{Quadratic, Spectrum, grouped, quadratic};
use crate::summary::{Summary, lower};

/// Records with an outcome below which no joint statement is made.
pub(crate) const FEWEST_RECORDS: f64 = 50.0;
/// Expected count that every cell of a joint test must reach, else categories are pooled.
pub(crate) const FEWEST_EXPECTED: f64 = 5.0;
/// Variance that a count must reach to be judged by the normal distribution.
pub(crate) const FEWEST_VARIANCE: f64 = 3.0;

/// Sums over records with an outcome, laid out for score tests.
///
/// The recalibration is `log(q_j / q_r) = a_j + s log(p_j / p_r)`; at a = 0, s = 1 its score is
/// `(O - E, H - L)` and its information `[V, C; C', VL]` (Cox 1958; Van Hoorde et al. 2014).
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct ScoreSums {
    pub(crate) n: f64,
    pub(crate) observed: Vec<f64>,
    pub(crate) expected: Vec<f64>,
    /// Score of all J categories, then of the slope.
    pub(crate) score: Vec<f64>,
    /// Its information, (J+1) x (J+1), row by row.
    pub(crate) information: Vec<f64>,
}

impl ScoreSums {
    pub(crate) fn new(summary: &Summary) -> Self {
        let part = &summary.outcomes;
        let categories = part.observed.len();
        let expected = part.expected.values();
        let loss: f64 = part.loss.values().iter().sum();
        let mut score: Vec<f64> = part.observed.iter().zip(&expected).map(|(o, e)| o - e).collect();
        score.push(part.entropy.value() - loss);
        let size = categories + 1;
        let mut information = vec![0.0; size * size];
        for row in 0..categories {
            for column in 0..categories {
                information[row * size + column] = part.variance.value(lower(row, column));
            }
            information[row * size + categories] = part.loss_covariance.value(row);
            information[categories * size + row] = part.loss_covariance.value(row);
        }
        information[size * size - 1] = part.loss_variance.value();
        Self { n: part.total(), observed: part.observed.clone(), expected, score, information }
    }

    /// The sums without those of a part of the records.
    pub(crate) fn without(&self, part: &Self) -> Self {
        let less = |all: &[f64], some: &[f64]| all.iter().zip(some).map(|(all, some)| all - some).collect();
        Self {
            n: self.n - part.n,
            observed: less(&self.observed, &part.observed),
            expected: less(&self.expected, &part.expected),
            score: less(&self.score, &part.score),
            information: less(&self.information, &part.information),
        }
    }

    /// Score and information over the categories but the reference, then the slope.
    pub(crate) fn free(&self, reference: usize) -> (Vec<f64>, Vec<f64>) {
        let categories = self.categories();
        let rows: Vec<Option<usize>> = (0..=categories)
            .map(|row| (row != reference).then(|| if row > reference { row - 1 } else { row }))
            .collect();
        grouped(&self.score, &self.information, &rows, categories)
    }

    pub(crate) fn categories(&self) -> usize {
        self.observed.len()
    }

    /// The variance of an entry of the score.
    pub(crate) fn variance(&self, entry: usize) -> f64 {
        self.information[entry * (self.score.len() + 1)]
    }

    /// The score as it is expected to be zero when the slope is `slope` instead of 1.
    pub(crate) fn centred(&self, slope: f64) -> Self {
        let size = self.score.len();
        let mut centred = self.clone();
        for (row, score) in centred.score.iter_mut().enumerate() {
            *score -= self.information[row * size + size - 1] * (slope - 1.0);
        }
        centred
    }

    /// Whether the counts of all pools can come out otherwise often enough for chi-square: a confident
    /// model expects many cases and yet leaves little to chance.
    pub(crate) fn is_enough(&self, pools: &Pools) -> bool {
        let all: Vec<Option<usize>> = pools.pool.iter().map(|pool| Some(*pool)).chain([None]).collect();
        let (_, variance) = grouped(&self.score, &self.information, &all, pools.count);
        let smallest =
            (0..pools.count).map(|pool| variance[pool * (pools.count + 1)]).fold(f64::INFINITY, f64::min);
        self.n >= FEWEST_RECORDS && pools.count >= 2 && smallest >= FEWEST_VARIANCE
    }

    /// T1: intercepts, given the slope; categories pooled.
    pub(crate) fn intercepts(&self, pools: &Pools) -> Quadratic {
        let (score, information) =
            grouped(&self.score, &self.information, &pools.rows(None), pools.count.saturating_sub(1));
        quadratic(&score, &information)
    }

    /// T2: intercepts and slope; categories pooled.
    pub(crate) fn joint(&self, pools: &Pools) -> Quadratic {
        let slope = pools.count.saturating_sub(1);
        let (score, information) =
            grouped(&self.score, &self.information, &pools.rows(Some(slope)), slope + 1);
        quadratic(&score, &information)
    }

    /// One-step estimates of intercepts and slope, and the inverse of their information.
    ///
    /// Both are over the categories but the reference, then the slope; the slope is `1 + ` the last.
    pub(crate) fn one_step(&self, reference: usize) -> (Vec<f64>, Vec<f64>) {
        let (score, information) = self.free(reference);
        let spectrum = Spectrum::new(&information, score.len());
        (spectrum.solve(&score), spectrum.inverse())
    }
}

/// Categories put together so that every cell of a table has enough expected cases.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Pools {
    /// For each category its pool.
    pub(crate) pool: Vec<usize>,
    /// Number of pools.
    pub(crate) count: usize,
}

impl Pools {
    /// Puts the categories with the smallest expected counts together until this pool and every
    /// other category expect at least `minimum` (ties in model order). Where not even all of them
    /// together do, one pool is left.
    pub(crate) fn new(expected: &[f64], minimum: f64) -> Self {
        let mut order: Vec<usize> = (0..expected.len()).collect();
        order.sort_by(|a, b| expected[*a].total_cmp(&expected[*b]));
        let mut pooled = 0;
        let mut sum = 0.0;
        while pooled < order.len() && (expected[order[pooled]] < minimum || (pooled > 0 && sum < minimum)) {
            sum += expected[order[pooled]];
            pooled += 1;
        }
        let in_pool = &order[..pooled];
        let mut pool = vec![0; expected.len()];
        let mut count = usize::from(pooled > 0);
        for category in 0..expected.len() {
            if !in_pool.contains(&category) {
                pool[category] = count;
                count += 1;
            }
        }
        Self { pool, count }
    }

    /// Rows over the categories but the reference, then the slope, which is left out. The pool of
    /// the reference category is the one left out.
    pub(crate) fn without_reference(&self, reference: usize) -> Vec<Option<usize>> {
        let dropped = self.pool[reference];
        let row = |pool: usize| match pool.cmp(&dropped) {
            std::cmp::Ordering::Less => Some(pool),
            std::cmp::Ordering::Equal => None,
            std::cmp::Ordering::Greater => Some(pool - 1),
        };
        let others = self.pool.iter().enumerate().filter(|(category, _)| *category != reference);
        others.map(|(_, pool)| row(*pool)).chain([None]).collect()
    }

    /// For each category its pool; the last pool, which the others determine, is left out.
    pub(crate) fn free(&self) -> Vec<Option<usize>> {
        let last = self.count.saturating_sub(1);
        self.pool.iter().map(|pool| (*pool < last).then_some(*pool)).collect()
    }

    /// Rows of the score: [`Pools::free`], then the slope, or nothing of it.
    fn rows(&self, slope: Option<usize>) -> Vec<Option<usize>> {
        self.free().into_iter().chain([slope]).collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn pooling_takes_the_smallest_until_all_are_large_enough() {
        for (expected, minimum, pool, count) in [
            (&[10.0, 20.0, 30.0][..], 5.0, &[0, 1, 2][..], 3),
            (&[10.0, 2.0, 30.0], 5.0, &[0, 0, 1], 2),
            (&[10.0, 2.0, 4.0, 30.0], 5.0, &[1, 0, 0, 2], 3),
            (&[1.0, 1.0, 1.0], 5.0, &[0, 0, 0], 1),
            (&[1.0, 1.0, 1.0], 0.0, &[0, 1, 2], 3),
        ] {
            assert_eq!(Pools::new(expected, minimum), Pools { pool: pool.to_vec(), count }, "{expected:?}");
        }
    }
}
