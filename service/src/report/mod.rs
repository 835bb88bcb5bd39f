//! The report of a fit: one self-contained page.

mod sections;
mod typical;

use kilter_drift::{Frame, Report, ReportSettings, report as drift_report};
use kilter_model::ModelFile;
use maud::{Markup, html};

use crate::analysis::FitAnalysis;
use crate::numbers::whole;
use crate::pages::{document, short_version, with_code};
use crate::training::Evaluated;

/// What a report shows.
#[derive(Debug)]
pub(crate) struct FitReport<'a> {
    /// The fitted model, sealed.
    pub(crate) model: &'a ModelFile,
    /// What the fit tells beside its coefficients.
    pub(crate) analysis: &'a FitAnalysis,
    /// Sums over the fitted and the held-out rows.
    pub(crate) evaluated: &'a Evaluated,
}

/// The rows that calibration and mix are shown for.
struct Judged {
    report: Report,
    held_out: bool,
}

/// The page.
///
/// # Errors
/// Where the sums do not fit the model.
pub(crate) fn fit_report(fit: &FitReport) -> anyhow::Result<String> {
    let model = fit.model;
    let judged = judge(fit)?;
    let body = html! {
        main class="report" {
            (head(model))
            (sections::summary(&judged))
            (sections::warnings(model))
            (sections::effect_curves(model))
            (sections::coefficients(model)?)
            (sections::field_tests(fit.analysis))
            (sections::effects(fit.analysis))
            (sections::mix(&judged))
            (sections::calibration(&judged))
            (sections::checks(fit.analysis))
            (sections::origin(model))
        }
    };
    Ok(document(&format!("{}, the fit", model.name), &body).into_string())
}

/// Calibration and mix of the held-out rows, or, where none were held out, of the fitted ones.
fn judge(fit: &FitReport) -> anyhow::Result<Judged> {
    let frame = Frame::new(fit.model)?;
    let held_out = fit.evaluated.held_out_rows > 0;
    let summary = if held_out { &fit.evaluated.held_out } else { &fit.evaluated.fitted };
    let report = drift_report(&frame, summary, summary, &[], &ReportSettings::default())?;
    Ok(Judged { report, held_out })
}

fn head(model: &ModelFile) -> Markup {
    let fitted = model.fit.as_ref();
    html! {
        h1 { (model.name) }
        p { (model.purpose) }
        @for caution in &model.cautions { p class="caution" { "Caution: " (with_code(caution)) } }
        p class="quiet" {
            "Version " span class="version" { (short_version(&model.fingerprint)) }
            @if let Some(fit) = fitted {
                ", fitted on " (whole(fit.rows as f64)) " rows"
                @if fit.weight != fit.rows as f64 { " (" (whole(fit.weight)) " cases)" }
                @if let Some([from, to]) = &fit.period { " from " (day(from)) " to " (day(to)) }
            }
            ". Outcome " code { (model.outcome.field) } ": "
            (model.outcome.categories.join(", ")) ", compared against " strong { (model.outcome.reference) } "."
        }
    }
}

/// The date of a time.
fn day(time: &str) -> &str {
    time.get(..10).unwrap_or(time)
}
