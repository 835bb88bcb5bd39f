//! Parts that several pages show.

use kilter_drift::Report;
use maud::{Markup, PreEscaped, html};

use super::plots::{self, CurvePoint, ShareBar};
use crate::numbers::{percent, whole};

/// A sentence whose names in backticks are set apart.
pub(crate) fn with_code(sentence: &str) -> Markup {
    html! {
        @for (place, part) in sentence.split('`').enumerate() {
            @if place % 2 == 1 { code { (part) } } @else { (part) }
        }
    }
}

/// Predicted and observed mix as a picture with its key.
pub(crate) fn mix_bars(report: &Report) -> Markup {
    let bars: Vec<ShareBar> = report
        .mix
        .categories
        .iter()
        .filter_map(|category| {
            Some(ShareBar {
                category: category.category.clone(),
                predicted: category.expected_share?,
                observed: category.observed_share?,
                interval: category.observed_interval?,
            })
        })
        .collect();
    html! {
        @if !bars.is_empty() {
            (PreEscaped(plots::mix(&bars)))
            p { span class="key" style="--swatch: var(--predicted)" { "predicted " } " "
                span class="key" style="--swatch: var(--observed)" { "observed, with its 95 % interval" } }
        }
    }
}

/// A calibration curve for each category, each with its table.
pub(crate) fn calibration_curves(report: &Report) -> Markup {
    html! {
        div class="pictures" {
            @for category in &report.reliability {
                @let points = category.bins.iter().filter(|bin| !bin.grey).filter_map(|bin| Some(CurvePoint {
                    predicted: bin.mean_probability,
                    observed: bin.observed_share,
                    interval: bin.interval?,
                })).collect::<Vec<_>>();
                div { (PreEscaped(plots::calibration(&category.category, &points))) }
            }
        }
        @for category in &report.reliability {
            details {
                summary { "Table: " (category.category) }
                div class="scroll" { table {
                    thead { tr { @for title in ["bin", "records", "mean probability", "observed share"] { th scope="col" { (title) } } } }
                    tbody { @for bin in &category.bins { tr {
                        td { (format!("{} to {}", bin.from, bin.to)) }
                        td { (whole(bin.n)) }
                        td { (percent(Some(bin.mean_probability))) }
                        td { (percent(Some(bin.observed_share))) }
                    } } }
                } }
            }
        }
    }
}
