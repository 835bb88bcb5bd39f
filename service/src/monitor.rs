//! Joins ledger and statistics to drift reports.

use anyhow::Context;
use kilter_drift::{Detail, Frame, Report, ReportSettings, Segment, Summary, report};
use kilter_ledger::{Ledger, Stream, WindowSummary, day_of};
use kilter_model::ModelFile;
use kilter_model::cells::{format_time, parse_time};
use serde::Serialize;

use crate::metrics::Metrics;

pub(crate) const MICROS_PER_DAY: i64 = 86_400_000_000;
/// Days of outcomes that a report covers where no span is asked for.
const USUAL_DAYS: i64 = 28;
/// Age at which outcomes are taken to be known where the model file says nothing.
const USUAL_MATURITY_DAYS: f64 = 30.0;

/// The days that a report is asked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub(crate) struct Span {
    /// First day, counted from 1970-01-01.
    pub(crate) from: Option<i64>,
    /// Last day.
    pub(crate) to: Option<i64>,
}

impl Span {
    /// A span from texts such as `2026-03-01`.
    ///
    /// # Errors
    /// The name of the wrong end and what is wrong with it.
    pub(crate) fn parse(from: Option<&str>, to: Option<&str>) -> Result<Self, (&'static str, String)> {
        let day = |name: &'static str, text: Option<&str>| match text.map(parse_time) {
            None | Some(Ok(None)) => Ok(None),
            Some(Ok(Some(time))) => Ok(Some(day_of(time))),
            Some(Err(reason)) => Err((name, reason)),
        };
        let span = Self { from: day("from", from)?, to: day("to", to)? };
        match (span.from, span.to) {
            (Some(from), Some(to)) if from > to => Err(("from", "is later than `to`".into())),
            _ => Ok(span),
        }
    }
}

/// A drift report of a version over a span of days.
#[derive(Debug, Clone, Serialize)]
pub(crate) struct DriftReport {
    /// Name of the model.
    pub(crate) model: String,
    /// Fingerprint of the version.
    pub(crate) version: String,
    /// First day.
    pub(crate) from: String,
    /// Last day.
    pub(crate) to: String,
    /// Days of the span whose outcomes can be expected to be known.
    pub(crate) matured_days: usize,
    /// The statistics.
    #[serde(flatten)]
    pub(crate) report: Report,
}

/// What a report is about.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Question<'a> {
    /// The version.
    pub(crate) model: &'a ModelFile,
    /// The days.
    pub(crate) span: Span,
    /// Only this segment field; all without one.
    pub(crate) by: Option<&'a str>,
    /// The present, microseconds since 1970: outcomes mature up to it.
    pub(crate) now: i64,
}

/// The drift report of a version.
///
/// # Errors
/// Where the ledger cannot be read or its summaries do not fit the model.
pub(crate) fn drift(ledger: &Ledger, question: &Question) -> anyhow::Result<DriftReport> {
    let model = question.model;
    let frame = Frame::new(model).context("the model file's baseline cannot be used")?;
    let [from, to] = days_of(ledger, question)?;
    let windows = ledger.summaries(&model.name, &model.fingerprint, [from, to])?;
    let maturity = model.monitor.maturity_days.unwrap_or(USUAL_MATURITY_DAYS);
    let matured_up_to = last_matured_day(question.now, maturity);
    let matured: Vec<&WindowSummary> = windows.iter().filter(|window| window.day <= matured_up_to).collect();
    let everything = |window: &&WindowSummary| window.stream == Stream::All;
    let scored = merged(&frame, Detail::Full, windows.iter().filter(everything))?;
    let known = merged(&frame, Detail::Full, matured.iter().copied().filter(everything))?;
    let matured_days = matured.iter().filter(|window| window.stream == Stream::All).count();
    let summaries = segments(&frame, &matured, question.by)?;
    let segments: Vec<Segment> =
        summaries.iter().map(|(field, value, summary)| Segment { label: field, value, summary }).collect();
    Ok(DriftReport {
        model: model.name.clone(),
        version: model.fingerprint.clone(),
        from: date(from),
        to: date(to),
        matured_days,
        report: report(&frame, &scored, &known, &segments, &ReportSettings::default())?,
    })
}

/// The last day all of whose records are old enough.
fn last_matured_day(now: i64, maturity_days: f64) -> i64 {
    let age = (maturity_days * MICROS_PER_DAY as f64) as i64;
    day_of(now.saturating_sub(age)) - 1
}

/// The days asked for. Where the ends are open: the last days with records, as many as hold the
/// usual number of matured ones.
fn days_of(ledger: &Ledger, question: &Question) -> anyhow::Result<[i64; 2]> {
    let model = question.model;
    let today = day_of(question.now);
    let known = ledger.days(&model.name, &model.fingerprint)?;
    let to = question.span.to.unwrap_or_else(|| known.map_or(today, |[_, last]| last.min(today)));
    let maturity = model.monitor.maturity_days.unwrap_or(USUAL_MATURITY_DAYS).ceil() as i64;
    let from = question.span.from.unwrap_or(to - USUAL_DAYS - maturity + 1);
    Ok([from.min(to), to])
}

/// A day as a date.
pub(crate) fn date(day: i64) -> String {
    format_time(day.saturating_mul(MICROS_PER_DAY)).chars().take(10).collect()
}

fn merged<'a>(
    frame: &Frame,
    detail: Detail,
    windows: impl Iterator<Item = &'a WindowSummary>,
) -> anyhow::Result<Summary> {
    let mut sum = Summary::new(frame, detail);
    for window in windows {
        sum.merge(&window.summary).context("a stored summary does not fit the model")?;
    }
    Ok(sum)
}

/// Summaries of the segments over the matured windows: field, value, summary.
fn segments(
    frame: &Frame,
    matured: &[&WindowSummary],
    by: Option<&str>,
) -> anyhow::Result<Vec<(String, String, Summary)>> {
    let mut segments = std::collections::BTreeMap::new();
    for window in matured {
        let Stream::Segment { field, value } = &window.stream else { continue };
        if by.is_none_or(|wanted| wanted == field) {
            let sum = segments
                .entry((field.clone(), value.clone()))
                .or_insert_with(|| Summary::new(frame, Detail::Light));
            sum.merge(&window.summary).context("a stored summary does not fit the model")?;
        }
    }
    Ok(segments.into_iter().map(|((field, value), summary)| (field, value, summary)).collect())
}

/// Sets the metrics of a version to what a report says.
pub(crate) fn set_metrics(metrics: &Metrics, drift: &DriftReport) {
    let (model, version, report) = (drift.model.as_str(), drift.version.as_str(), &drift.report);
    let labels = [model, version];
    for category in &report.mix.categories {
        let labels = [model, version, category.category.as_str()];
        set(&metrics.predicted_share, &labels, category.expected_share);
        set(&metrics.observed_share, &labels, category.observed_share);
        set(&metrics.mix_gap_z, &labels, category.test.statistic);
    }
    set(&metrics.log_loss, &labels, report.log_loss.mean);
    set(&metrics.log_loss_expected, &labels, report.log_loss.expected);
    set(&metrics.log_loss_fitted, &labels, report.log_loss.training);
    set(&metrics.outcome_coverage, &labels, report.coverage.share);
    if report.outcomes > 0.0 {
        set(&metrics.calibration_slope, &labels, Some(report.calibration.estimates.slope.estimate));
    }
    for field in &report.fields {
        set(&metrics.field_shift, &[model, version, field.field.as_str()], field.shift.excess);
    }
}

fn set(gauge: &prometheus::GaugeVec, labels: &[&str], value: Option<f64>) {
    if let Some(value) = value {
        gauge.with_label_values(labels).set(value);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_day_matures_when_its_last_record_is_old_enough() {
        let noon_of_day_ten = 10 * MICROS_PER_DAY + MICROS_PER_DAY / 2;
        // At noon of day 10, five days ago was noon of day 5: day 4 is past that, day 5 is not.
        assert_eq!(last_matured_day(noon_of_day_ten, 5.0), 4);
        assert_eq!(last_matured_day(noon_of_day_ten, 0.5), 9);
    }

    #[test]
    fn spans_are_dates() {
        let span = Span::parse(Some("1970-01-02"), Some("1970-01-05")).unwrap();
        assert_eq!((span.from, span.to), (Some(1), Some(4)));
        assert_eq!(Span::parse(Some("1970-01-05"), Some("1970-01-02")).unwrap_err().0, "from");
        assert_eq!(Span::parse(None, Some("soon")).unwrap_err().0, "to");
        assert_eq!(date(4), "1970-01-05");
    }
}
