//! A drift report as text for a terminal.

use std::fmt::Write;

use kilter_drift::{Report, Severity, Statistic, Status};

use crate::monitor::DriftReport;
use crate::numbers::{dash, p_in_words, percent, rounded, whole};
use crate::text_table::{Align, Table};

/// The report in lines of text. Numbers are rounded for people; the JSON has them in full.
pub(crate) fn report(drift: &DriftReport) -> String {
    let report = &drift.report;
    let mut text = format!(
        "{} {}\n{} to {}: {} records scored; {} outcomes in {} matured days\n\n",
        drift.model,
        drift.version,
        drift.from,
        drift.to,
        whole(report.scored),
        whole(report.outcomes),
        drift.matured_days
    );
    for finding in &report.findings {
        // Writing to a string cannot fail, here and below.
        let _ = writeln!(text, "{:<7} {}", severity(finding.severity), finding.sentence);
    }
    text.push('\n');
    text.push_str(&mix(report));
    text.push_str(&quality(report));
    text.push_str(&calibration(report));
    text.push_str(&fields(report));
    text.push_str(&segments(report));
    text
}

/// A severity as a word at the head of a line.
pub(crate) fn severity(severity: Severity) -> &'static str {
    match severity {
        Severity::Severe => "severe",
        Severity::Clear => "clear",
        Severity::Slight => "slight",
        Severity::Note => "note",
    }
}

fn mix(report: &Report) -> String {
    let mut table = Table::new(&[
        ("category", Align::Left),
        ("predicted", Align::Right),
        ("observed", Align::Right),
        ("95 % interval", Align::Right),
        ("at the fit", Align::Right),
        ("z", Align::Right),
        ("p", Align::Right),
    ]);
    for category in &report.mix.categories {
        table.row(vec![
            category.category.clone(),
            percent(category.expected_share),
            percent(category.observed_share),
            category.observed_interval.map_or_else(dash, |[low, high]| {
                format!("{} to {}", percent(Some(low)), percent(Some(high)))
            }),
            percent(category.training_share),
            rounded(category.test.statistic, 1),
            p_value(&category.test),
        ]);
    }
    format!("Mix: predicted against observed (all together: {})\n{table}\n", test_in_words(&report.mix.joint))
}

fn quality(report: &Report) -> String {
    let (loss, brier) = (&report.log_loss, &report.brier);
    let mut table = Table::new(&[
        ("", Align::Left),
        ("observed", Align::Right),
        ("expected", Align::Right),
        ("at the fit", Align::Right),
        ("of the fitted mix", Align::Right),
        ("p", Align::Right),
    ]);
    table.row(vec![
        "log-loss".into(),
        rounded(loss.mean, 4),
        rounded(loss.expected, 4),
        rounded(loss.training, 4),
        rounded(loss.null, 4),
        p_value(&loss.excess),
    ]);
    table.row(vec![
        "Brier score".into(),
        rounded(brier.mean, 4),
        rounded(brier.expected, 4),
        dash(),
        dash(),
        p_value(&brier.excess),
    ]);
    format!("Log-loss in nats per record, and Brier score\n{table}\n")
}

fn calibration(report: &Report) -> String {
    let estimates = &report.calibration.estimates;
    let slope = &estimates.slope;
    let interval = slope.interval.map_or_else(String::new, |[low, high]| format!(" ({low:.2} to {high:.2})"));
    let mut text = format!(
        "Calibration: {}\nslope {:.2}{interval}, expected {:.2}; below that the probabilities are too extreme\n",
        test_in_words(&report.calibration.joint),
        slope.estimate,
        estimates.expected_slope
    );
    if report.reliability.is_empty() {
        text.push('\n');
        return text;
    }
    let mut table = Table::new(&[
        ("category", Align::Left),
        ("calibration error", Align::Right),
        ("if calibrated", Align::Right),
        ("p", Align::Right),
    ]);
    for category in &report.reliability {
        let error = &category.error;
        let expected = match (error.expected, error.expected_deviation) {
            (Some(expected), Some(deviation)) => format!("{expected:.4} ± {deviation:.4}"),
            _ => dash(),
        };
        table.row(vec![category.category.clone(), rounded(error.mean, 4), expected, p_value(&category.test)]);
    }
    let _ = writeln!(text, "{table}");
    text
}

fn fields(report: &Report) -> String {
    let mut table = Table::new(&[
        ("field", Align::Left),
        ("shift", Align::Right),
        ("by chance", Align::Right),
        ("missing", Align::Right),
        ("unseen", Align::Right),
        ("outside", Align::Right),
    ]);
    for field in &report.fields {
        let rate = |rate: Option<&kilter_drift::Rate>| rate.map_or_else(dash, |rate| percent(rate.share));
        table.row(vec![
            field.field.clone(),
            rounded(field.shift.index, 3),
            rounded(field.shift.expected, 3),
            rate(Some(&field.missing)),
            rate(field.unseen.as_ref()),
            rate(field.outside.as_ref()),
        ]);
    }
    format!("Fields: shift against the fit (from 0.1 above chance on it has moved)\n{table}\n")
}

fn segments(report: &Report) -> String {
    let mut text = String::new();
    for group in &report.segments {
        let mut table = Table::new(&[
            (group.label.as_str(), Align::Left),
            ("outcomes", Align::Right),
            ("largest gap", Align::Left),
            ("predicted", Align::Right),
            ("observed", Align::Right),
            ("p", Align::Right),
            ("", Align::Left),
        ]);
        for segment in &group.segments {
            let gap = segment.largest_gap.as_ref();
            let mark = match (segment.is_apart, segment.wrong) {
                (true, _) => "apart from the others",
                (false, true) => "off",
                (false, false) => "",
            };
            table.row(vec![
                segment.value.clone(),
                whole(segment.outcomes),
                gap.map_or_else(dash, |gap| gap.category.clone()),
                percent(gap.map(|gap| gap.expected_share)),
                percent(gap.map(|gap| gap.observed_share)),
                p_value(&segment.joint),
                mark.into(),
            ]);
        }
        let _ = writeln!(text, "Segments by {}, the largest misfit first\n{table}", group.label);
    }
    text
}

/// A test in words: its p-value, or why there is none.
pub(crate) fn test_in_words(test: &Statistic) -> String {
    match test.status {
        Status::Valid => format!("p {} for this period, if looked at once", p_value(test)),
        Status::TooFew => "too few outcomes to test".into(),
        Status::TrainingSizeUnknown => {
            "not tested: the model file does not say how many cases it was fitted on".into()
        }
        Status::NeedsRecords => "needs the single records".into(),
        Status::NotAvailable => "not available".into(),
    }
}

/// A p-value for people.
pub(crate) fn p_value(test: &Statistic) -> String {
    match test.valid_p() {
        None => dash(),
        Some(p) => p_in_words(p),
    }
}
