//! Reliability: how often a category came where the model gave it a certain probability.

use serde::Serialize;

use crate::error::DriftError;
use crate::frame::{Frame, PROBABILITY_BINS, PROBABILITY_EDGES};
use crate::statistic::Statistic;
use crate::summary::{FullPart, Summary};
use crate::tails::{NORMAL_975, binomial_share_quantiles, wilson};
use crate::training::TrainingUncertainty;

/// Variance of a bin from which it enters the test.
const FEWEST_VARIANCE_TEST: f64 = 3.0;
/// Variance of a bin from which its band is normal; below, it is binomial.
const FEWEST_VARIANCE_BAND: f64 = 5.0;
/// Records in a bin below which it is shown in grey.
const FEWEST_RECORDS: f64 = 20.0;

/// Reliability of one category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Reliability {
    /// The category.
    pub category: String,
    /// The bins that hold records, ascending.
    pub bins: Vec<ReliabilityBin>,
    /// Whether the bins scatter about the diagonal more than chance allows.
    pub test: Statistic,
    /// The mean distance from the diagonal.
    pub error: CalibrationError,
}

/// One probability bin of a category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ReliabilityBin {
    /// Lower end of the bin.
    pub from: f64,
    /// Upper end of the bin.
    pub to: f64,
    /// Records in it.
    pub n: f64,
    /// Their mean probability: where to draw the point.
    pub mean_probability: f64,
    /// Share of them whose outcome was the category.
    pub observed_share: f64,
    /// Wilson 95 % interval of that share.
    pub interval: Option<[f64; 2]>,
    /// Where the share lies in 95 of 100 cases if the model is right; absent where the number of
    /// training cases is not known.
    pub band: Option<[f64; 2]>,
    /// Too few records to draw it in full.
    pub grey: bool,
}

/// Mean distance between probability and observed share over the bins of a category.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct CalibrationError {
    /// The mean absolute distance, never 0 even for a perfect model.
    pub mean: Option<f64>,
    /// What a calibrated model would show.
    pub expected: Option<f64>,
    /// Standard deviation of what it would show.
    pub expected_deviation: Option<f64>,
    /// Root of the mean squared distance, with the part that is mere chance taken off.
    pub debiased_root_mean_square: Option<f64>,
}

/// Sums of one bin.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct BinSums {
    pub(crate) n: f64,
    pub(crate) probability: f64,
    pub(crate) variance: f64,
    pub(crate) observed: f64,
}

/// Reliability of every category of the records with an outcome.
///
/// # Errors
/// [`DriftError::Missing`] for a light summary.
pub fn reliability(frame: &Frame, summary: &Summary) -> Result<Vec<Reliability>, DriftError> {
    let full =
        summary.full.as_ref().ok_or(DriftError::Missing { what: "reliability", needed: "a full summary" })?;
    let n = summary.outcomes();
    let phi = TrainingUncertainty::new(frame, summary).phi;
    let of_category = |(category, name): (usize, &String)| {
        let bins = bin_sums(full, category);
        Reliability {
            category: name.clone(),
            bins: bins
                .iter()
                .enumerate()
                .filter(|(_, bin)| bin.n > 0.0)
                .map(|(index, bin)| shown(index, *bin, phi))
                .collect(),
            test: bin_test(&bins, phi, FEWEST_VARIANCE_TEST, n),
            error: calibration_error(&bins, phi, n),
        }
    };
    Ok(frame.categories.iter().enumerate().map(of_category).collect())
}

pub(crate) fn bin_sums(full: &FullPart, category: usize) -> Vec<BinSums> {
    (category * PROBABILITY_BINS..(category + 1) * PROBABILITY_BINS)
        .map(|bin| BinSums {
            n: full.bin_records[bin],
            probability: full.bin_probability.value(bin),
            variance: full.bin_variance.value(bin),
            observed: full.bin_observed[bin],
        })
        .collect()
}

fn shown(index: usize, bin: BinSums, phi: Option<f64>) -> ReliabilityBin {
    let mean_probability = bin.probability / bin.n;
    let band = phi.and_then(|phi| {
        if bin.variance >= FEWEST_VARIANCE_BAND {
            let half = NORMAL_975 * (phi * bin.variance).sqrt() / bin.n;
            Some([(mean_probability - half).max(0.0), (mean_probability + half).min(1.0)])
        } else {
            binomial_share_quantiles(bin.n, mean_probability)
        }
    });
    ReliabilityBin {
        from: if index == 0 { 0.0 } else { PROBABILITY_EDGES[index - 1] },
        to: PROBABILITY_EDGES.get(index).copied().unwrap_or(1.0),
        n: bin.n,
        mean_probability,
        observed_share: bin.observed / bin.n,
        interval: wilson(bin.observed, bin.n, NORMAL_975),
        band,
        grey: bin.n < FEWEST_RECORDS,
    }
}

/// Sum of squared standardised residuals over the bins with enough variance.
pub(crate) fn bin_test(bins: &[BinSums], phi: Option<f64>, fewest_variance: f64, n: f64) -> Statistic {
    let used = bins.iter().filter(|bin| bin.variance > 0.0 && bin.variance >= fewest_variance);
    let value = used.clone().map(|bin| (bin.observed - bin.probability).powi(2) / bin.variance).sum();
    Statistic::chi_square(value, used.count(), phi, n, true)
}

/// Mean distance from the diagonal, what chance alone gives, and its debiased size (Broecker 2012;
/// Ferro and Fricker 2012; Kumar, Liang and Ma 2019).
pub(crate) fn calibration_error(bins: &[BinSums], phi: Option<f64>, n: f64) -> CalibrationError {
    if n == 0.0 {
        return CalibrationError {
            mean: None,
            expected: None,
            expected_deviation: None,
            debiased_root_mean_square: None,
        };
    }
    let (mut distance, mut expected, mut variance, mut squared) = (0.0, 0.0, 0.0, 0.0);
    for bin in bins.iter().filter(|bin| bin.n > 0.0) {
        let share = bin.observed / bin.n;
        let gap = share - bin.probability / bin.n;
        distance += bin.n * gap.abs();
        expected += (2.0 * bin.variance / std::f64::consts::PI).sqrt();
        variance += bin.variance * (1.0 - 2.0 / std::f64::consts::PI);
        let chance = if bin.n > 1.0 { share * (1.0 - share) / (bin.n - 1.0) } else { bin.variance };
        squared += bin.n * (gap * gap - chance);
    }
    CalibrationError {
        mean: Some(distance / n),
        expected: phi.map(|phi| phi.sqrt() * expected / n),
        expected_deviation: phi.map(|phi| (phi * variance).sqrt() / n),
        debiased_root_mean_square: Some((squared / n).max(0.0).sqrt()),
    }
}
