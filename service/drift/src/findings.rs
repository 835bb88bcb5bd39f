//! Findings: what the statistics of a report say, in sentences for a reader who knows none of them.

mod about_fields;
mod about_outcomes;
mod words;

use serde::Serialize;

use crate::report::Report;

/// How much a finding matters.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Severity {
    /// The probabilities or the records are badly off.
    Severe,
    /// Clearly off.
    Clear,
    /// Off by little.
    Slight,
    /// Nothing is wrong, or nothing can be said.
    Note,
}

/// What a finding is about.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum FindingKind {
    /// The model file says nothing about its fit.
    NoBaseline,
    /// Too few outcomes to judge.
    TooFewOutcomes,
    /// Outcomes are missing.
    Coverage,
    /// A category came more or less often than promised.
    Mix,
    /// Probabilities too extreme or too timid.
    Slope,
    /// Calibration as a whole.
    Calibration,
    /// Log-loss.
    LogLoss,
    /// Outcomes that the model all but ruled out.
    Surprises,
    /// A field whose values moved.
    FieldMoved,
    /// A field that is missing more often.
    FieldMissing,
    /// A field with levels that the fit did not know.
    FieldUnseen,
    /// A field with numbers outside the range of the fit.
    FieldOutside,
    /// The mean prediction moved.
    PredictedMix,
    /// A segment.
    Segment,
}

/// One finding.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Finding {
    /// What it is about.
    pub kind: FindingKind,
    /// How much it matters.
    pub severity: Severity,
    /// The category, field or segment concerned; empty where it is all of them.
    pub subject: String,
    /// The finding as a sentence or two.
    pub sentence: String,
}

impl Finding {
    fn new(kind: FindingKind, severity: Severity, subject: &str, sentence: String) -> Self {
        Self { kind, severity, subject: subject.to_owned(), sentence }
    }
}

/// All findings of a report at a level of significance, the worst first; among equals in the order of the report.
pub(crate) fn findings(report: &Report, level: f64) -> Vec<Finding> {
    let mut findings = about_outcomes::findings(report, level);
    findings.extend(about_fields::findings(report));
    findings.sort_by_key(|finding| finding.severity);
    findings
}
