//! The page of one model: what the monitor found, the mix and the calibration as pictures, each
//! with its table.

use kilter_drift::{Report, SegmentGroup};
use kilter_model::ModelFile;
use maud::{Markup, html};

use super::parts::{calibration_curves, mix_bars, with_code};
use super::{page, short_version};
use crate::drift_text::{p_value, severity, test_in_words};
use crate::monitor::DriftReport;
use crate::numbers::{percent, rounded, whole};

/// The page of a model for one span of days.
pub(crate) fn model_page(model: &ModelFile, drift: &DriftReport) -> Markup {
    let report = &drift.report;
    let body = html! {
        h1 { (model.name) }
        p class="quiet" {
            (model.purpose) br;
            "Version " span class="version" { (short_version(&drift.version)) } ", "
            (drift.from) " to " (drift.to) ": " (whole(report.scored)) " records scored, "
            (whole(report.outcomes)) " outcomes in " (drift.matured_days) " matured days."
        }
        @for caution in &model.cautions { p class="quiet" { "Caution: " (caution) } }
        h2 id="findings" { "What the figures say" }
        ul class="findings" {
            @for finding in &report.findings {
                li class=(severity(finding.severity)) { strong { (severity(finding.severity)) } " " (with_code(&finding.sentence)) }
            }
        }
        (mix(report))
        (calibration(report))
        (quality(report))
        (fields(report))
        @for group in &report.segments { (segments(group)) }
        p class="quiet" {
            "The same as JSON: " a href={ "/models/" (model.name) "/drift?from=" (drift.from) "&to=" (drift.to) } { "drift report" } "."
        }
    };
    page(&model.name, &body)
}

fn mix(report: &Report) -> Markup {
    html! {
        h2 id="mix" { "Mix" }
        (mix_bars(report))
        p { "All categories together: " (test_in_words(&report.mix.joint)) "." }
        div class="scroll" { table {
            thead { tr { @for title in ["category", "predicted", "observed", "at the fit", "z", "p"] { th scope="col" { (title) } } } }
            tbody { @for category in &report.mix.categories { tr {
                td { (category.category) }
                td { (percent(category.expected_share)) }
                td { (percent(category.observed_share)) }
                td { (percent(category.training_share)) }
                td { (rounded(category.test.statistic, 1)) }
                td { (p_value(&category.test)) }
            } } }
        } }
    }
}

fn calibration(report: &Report) -> Markup {
    html! {
        h2 id="calibration" { "Calibration" }
        p { "Intercepts and slope together: " (test_in_words(&report.calibration.joint)) ". On the line, records given a probability come true as often as it says; bars are 95 % intervals." }
        (calibration_curves(report))
    }
}

fn quality(report: &Report) -> Markup {
    let (loss, brier) = (&report.log_loss, &report.brier);
    html! {
        h2 id="log-loss" { "Log-loss and Brier score" }
        div class="scroll" { table {
            thead { tr { @for title in ["", "observed", "expected by the model", "at the fit", "of the fitted mix", "p"] { th scope="col" { (title) } } } }
            tbody {
                tr {
                    td { "log-loss (nats)" } td { (rounded(loss.mean, 4)) } td { (rounded(loss.expected, 4)) }
                    td { (rounded(loss.training, 4)) } td { (rounded(loss.null, 4)) } td { (p_value(&loss.excess)) }
                }
                tr {
                    td { "Brier score" } td { (rounded(brier.mean, 4)) } td { (rounded(brier.expected, 4)) }
                    td { "–" } td { "–" } td { (p_value(&brier.excess)) }
                }
            }
        } }
    }
}

fn fields(report: &Report) -> Markup {
    html! {
        h2 id="fields" { "Fields" }
        p { "Shift against the fit; from 0.1 above what chance gives, a field has moved." }
        div class="scroll" { table {
            thead { tr { @for title in ["field", "shift", "by chance", "missing", "unseen", "outside"] { th scope="col" { (title) } } } }
            tbody { @for field in &report.fields { tr {
                td { (field.field) }
                td { (rounded(field.shift.index, 3)) }
                td { (rounded(field.shift.expected, 3)) }
                td { (percent(field.missing.share)) }
                td { (percent(field.unseen.as_ref().and_then(|rate| rate.share))) }
                td { (percent(field.outside.as_ref().and_then(|rate| rate.share))) }
            } } }
        } }
    }
}

fn segments(group: &SegmentGroup) -> Markup {
    html! {
        h2 { "Segments by " (group.label) }
        div class="scroll" { table {
            thead { tr { @for title in [group.label.as_str(), "outcomes", "largest gap", "predicted", "observed", "p"] { th scope="col" { (title) } } } }
            tbody { @for segment in &group.segments {
                @let gap = segment.largest_gap.as_ref();
                tr {
                    td { (segment.value) @if segment.is_apart { " – apart from the others" } }
                    td { (whole(segment.outcomes)) }
                    td { (gap.map_or("–", |gap| gap.category.as_str())) }
                    td { (percent(gap.map(|gap| gap.expected_share))) }
                    td { (percent(gap.map(|gap| gap.observed_share))) }
                    td { (p_value(&segment.joint)) }
                }
            } }
        } }
    }
}
