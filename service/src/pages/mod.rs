//! The pages: an overview of all models, and one page per model.

mod model;
mod parts;
pub(crate) mod plots;

use maud::{DOCTYPE, Markup, PreEscaped, html};

pub(crate) use model::model_page;
pub(crate) use parts::{calibration_curves, mix_bars, with_code};

const STYLE: &str = include_str!("style.css");

/// A model on the overview.
#[derive(Debug, Clone)]
pub(crate) struct OverviewRow {
    /// Name of the model.
    pub(crate) name: String,
    /// What it is for.
    pub(crate) purpose: String,
    /// Fingerprint of the live version.
    pub(crate) version: String,
    /// The worst finding of the current report, in a sentence.
    pub(crate) worst: Option<String>,
}

/// The frame of a page of the service.
fn page(title: &str, body: &Markup) -> Markup {
    document(title, &html! { nav aria-label="Pages" { a href="/" { "all models" } } main { (body) } })
}

/// A document that stands alone: nothing is loaded from outside.
pub(crate) fn document(title: &str, body: &Markup) -> Markup {
    html! {
        (DOCTYPE)
        html lang="en" {
            head {
                meta charset="utf-8";
                meta name="viewport" content="width=device-width, initial-scale=1";
                title { (title) " – kilter" }
                style { (PreEscaped(STYLE)) }
            }
            body { (body) }
        }
    }
}

/// The overview.
pub(crate) fn overview(rows: &[OverviewRow]) -> Markup {
    let body = html! {
        h1 { "Models" }
        @if rows.is_empty() {
            p { "No model is published yet. " code { "kilter publish MODEL" } " makes a model file the live version of its name." }
        } @else {
            div class="scroll" {
                table {
                    thead { tr { th scope="col" { "model" } th scope="col" { "live version" } th scope="col" { "worst finding" } } }
                    tbody {
                        @for row in rows {
                            tr {
                                td { a href={ "/view/" (row.name) } { (row.name) } br; span class="quiet" { (row.purpose) } }
                                td class="version" { (short_version(&row.version)) }
                                td style="white-space: normal; text-align: left" { (row.worst.as_deref().unwrap_or("no records yet")) }
                            }
                        }
                    }
                }
            }
        }
    };
    page("models", &body)
}

/// The beginning of a fingerprint, enough to tell versions apart.
pub(crate) fn short_version(version: &str) -> String {
    version.trim_start_matches("sha256:").chars().take(12).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn markup_in_a_text_stays_text() {
        let row = OverviewRow {
            name: "a".into(),
            purpose: "<script>alert(1)</script>".into(),
            version: "sha256:0123456789abcdef".into(),
            worst: None,
        };
        let page = overview(&[row]).into_string();
        assert!(!page.contains("<script>") && page.contains("&lt;script&gt;"));
        assert!(page.contains("0123456789ab") && !page.contains("http://") && !page.contains("https://"));
    }
}
