//! Mergeable summaries of scored records and outcomes, and their statistics.
//!
//! A [`Frame`] says what the summaries of a model version are measured in. A [`Summary`] takes in
//! scored records and, later, their outcomes; summaries add and subtract. The statistics are
//! computed from summaries, so their cost does not depend on the number of records. [`report()`]
//! puts all of them together, with findings in plain sentences.
//!
//! This crate is pure computation: it knows no storage, no clock and no network.
//!
//! # Symbols
//!
//! J categories, reference category r. Record i has probabilities `p_i`, their logarithms from
//! the log-odds by log-sum-exp, and, once it is known, its outcome `y_i`; `e(y)` is the indicator
//! vector. Sums over the n records with an outcome: observed counts `O = sum e(y)`, expected
//! counts `E = sum p`, `V = sum (diag(p) - p p')`, log-loss `L = -sum log p_y`, entropy
//! `H = -sum p log p`. N is the number of cases that the model was fitted to.
//!
//! # What is tested
//!
//! That the model is calibrated: given all that was known when a record was scored, its outcome
//! comes with the probabilities p. Then `O - E` and `H - L` are sums of martingale differences,
//! whatever records come, so a shift of the fields alone rejects nothing. Because p is itself
//! estimated, every chi-square statistic is divided by `phi = 1 + (n/N)(1 + M2)`
//! ([`TrainingUncertainty`]); without N there are statistics but no p-values.
//!
//! P-values are for one look at one period. Whoever looks daily at a chart of them sees false
//! alarms nearly every year.

mod arrival;
mod baseline;
mod calibration;
mod coverage;
mod error;
mod field_shift;
mod findings;
mod frame;
mod grouped_fit;
mod label_shift;
mod losses;
mod mix;
mod predicted_mix;
mod quadratic;
mod quantiles;
mod recalibration;
mod record;
mod reliability;
mod report;
mod score_sums;
mod segments;
mod statistic;
mod summary;
mod sums;
mod tails;
#[cfg(test)]
mod test_data;
#[cfg(test)]
mod tests;
mod training;

pub use arrival::{
    AgedWindow, ArrivalCurve, CategoryDelays, correct_for_arrival, corrected_mix, delays, maturity_days,
};
pub use baseline::{FitFacts, baseline, expected_slope, holdout};
pub use calibration::{Calibration, Estimate, Estimates, Intercept, calibration};
pub use coverage::{CategoryCoverage, Coverage, coverage};
pub use error::DriftError;
pub use field_shift::{
    FieldShift, Movement, PredictionShift, Rate, Shift, ShiftBin, field_shifts, prediction_shifts, shift,
};
pub use findings::{Finding, FindingKind, Severity};
pub use frame::{FieldBins, FieldLayout, Frame, PROBABILITY_BINS, PROBABILITY_EDGES};
pub use grouped_fit::{FitGroup, GroupedFit, grouped_fit};
pub use label_shift::{SharesByLikelihood, StoppingRule, shares_by_likelihood};
pub use losses::{AgainstHoldout, Brier, LogLoss, Surprises, brier, log_loss};
pub use mix::{CategoryMix, ClassMix, class_mix};
pub use predicted_mix::{
    PredictedMix, PredictedShare, ShareEstimate, predicted_mix, shares_from_predictions,
};
pub use quadratic::{Quadratic, quadratic};
pub use quantiles::{deciles, quantile};
pub use recalibration::{
    ClosedTest, Need, Observations, Recalibration, RecalibrationFit, closed_test, recalibrate,
};
pub use record::{ScoredRecord, log_odds_of_rounded};
pub use reliability::{CalibrationError, Reliability, ReliabilityBin, reliability};
pub use report::{Report, ReportSettings, report};
pub use segments::{
    Segment, SegmentField, SegmentGap, SegmentGroup, SegmentRow, Shrinkage, ShrunkIntercept, discoveries,
    segment_groups, shrink,
};
pub use statistic::{Statistic, Status};
pub use summary::{DELAY_EDGES_HOURS, Detail, LARGEST_MATRIX, Remainder, SUMMARY_VERSION, Summary};
pub use tails::{chi_square_upper, normal_two_sided, normal_upper, wilson};
pub use training::TrainingUncertainty;
