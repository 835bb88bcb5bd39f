//! The report: everything that is shown of a period, in one value.

use serde::Serialize;

use crate::arrival::{CategoryDelays, delays};
use crate::calibration::{Calibration, calibration};
use crate::coverage::{Coverage, coverage};
use crate::error::DriftError;
use crate::field_shift::{FieldShift, PredictionShift, field_shifts, prediction_shifts};
use crate::findings::{Finding, findings};
use crate::frame::Frame;
use crate::grouped_fit::{GroupedFit, grouped_fit};
use crate::losses::{Brier, LogLoss, brier, log_loss};
use crate::mix::{ClassMix, class_mix};
use crate::predicted_mix::{PredictedMix, predicted_mix};
use crate::reliability::{Reliability, reliability};
use crate::segments::{Segment, SegmentGroup, segment_groups};
use crate::summary::{Detail, Summary};
use crate::training::TrainingUncertainty;

/// Settings of a report.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ReportSettings {
    /// P-value below which a finding speaks of more than chance.
    pub level: f64,
}

impl Default for ReportSettings {
    fn default() -> Self {
        Self { level: 0.01 }
    }
}

/// Everything that is shown of a period. Its keys are stable: pages and other programs read them.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Report {
    /// What the statistics say, in sentences, the worst first.
    pub findings: Vec<Finding>,
    /// The categories, in the order of every list over categories.
    pub categories: Vec<String>,
    /// Records scored in the period.
    pub scored: f64,
    /// Records of closed windows with an outcome: what mix, log-loss and calibration are about.
    pub outcomes: f64,
    /// Training cases and how much their number inflates the statistics.
    pub training: TrainingUncertainty,
    /// Outcomes observed against promised.
    pub mix: ClassMix,
    /// Log-loss.
    pub log_loss: LogLoss,
    /// Brier score.
    pub brier: Brier,
    /// Score tests and one-step estimates.
    pub calibration: Calibration,
    /// Reliability of each category; empty for a light summary.
    pub reliability: Vec<Reliability>,
    /// Grouped goodness of fit; absent for a light summary.
    pub grouped_fit: Option<GroupedFit>,
    /// Fields of the records scored in the period.
    pub fields: Vec<FieldShift>,
    /// Distributions of the probabilities of the records scored in the period.
    pub predictions: Vec<PredictionShift>,
    /// Mean prediction of the records scored in the period.
    pub predicted_mix: PredictedMix,
    /// Outcomes of closed windows that came.
    pub coverage: Coverage,
    /// How long the outcomes of closed windows took.
    pub delays: Vec<CategoryDelays>,
    /// Segments over the closed windows.
    pub segments: Vec<SegmentGroup>,
}

/// The report of a period.
///
/// `scored` is the summary of all records scored in the period; `matured` that of the windows of the
/// period that are closed, whose outcomes can be expected to be known; `segments` are over the same
/// closed windows.
///
/// # Errors
/// A summary that does not belong to the frame.
pub fn report(
    frame: &Frame,
    scored: &Summary,
    matured: &Summary,
    segments: &[Segment],
    settings: &ReportSettings,
) -> Result<Report, DriftError> {
    for summary in [scored, matured].into_iter().chain(segments.iter().map(|segment| segment.summary)) {
        summary.check(frame)?;
    }
    let mut report = Report {
        findings: Vec::new(),
        categories: frame.categories.clone(),
        scored: scored.scored(),
        outcomes: matured.outcomes(),
        training: TrainingUncertainty::new(frame, matured),
        mix: class_mix(frame, matured),
        log_loss: log_loss(frame, matured),
        brier: brier(frame, matured),
        calibration: calibration(frame, matured),
        reliability: match matured.detail() {
            Detail::Full => reliability(frame, matured)?,
            Detail::Light => Vec::new(),
        },
        grouped_fit: match matured.detail() {
            Detail::Full => Some(grouped_fit(frame, matured)?),
            Detail::Light => None,
        },
        fields: field_shifts(frame, scored),
        predictions: prediction_shifts(frame, scored),
        predicted_mix: predicted_mix(frame, scored),
        coverage: coverage(frame, matured),
        delays: delays(frame, matured),
        segments: segment_groups(frame, matured, segments),
    };
    report.findings = findings(&report, settings.level);
    Ok(report)
}
