//! The sections of the report.

use kilter_fit::inference::{Estimate, coefficients as estimates_of, normal_quantile};
use kilter_model::{DenseColumn, Design, INTERCEPT, ModelFile};
use maud::{Markup, PreEscaped, html};

use super::Judged;
use super::typical::{Axis, EffectCurve, effect_curves as curves_of, typical_values};
use crate::analysis::{FitAnalysis, effect_in_words, remark, test_in_words, tested_in_words};
use crate::numbers::{p_in_words, percent, significant, whole};
use crate::pages::plots::{OddsRatio, along_levels, along_number, odds_ratios};
use crate::pages::{calibration_curves, mix_bars, with_code};

/// Level of the intervals.
const LEVEL: f64 = 0.95;

/// What the fit is worth, in two sentences.
pub(super) fn summary(judged: &Judged) -> Markup {
    let loss = &judged.report.log_loss;
    let worth = loss.mean.zip(loss.null).map(|(mean, null)| (mean, null, 1.0 - mean / null));
    let rows = if judged.held_out { "rows that were kept out of the fit" } else { "rows of the fit itself" };
    html! {
        h2 id="worth" { "What it is worth" }
        @if let Some((mean, null, share)) = worth {
            p {
                "On the " (whole(judged.report.outcomes)) " " (rows) " its log-loss is "
                strong { (format!("{mean:.4}")) } " nats per case, against " (format!("{null:.4}"))
                " for always giving the fitted mix: " strong { (format!("{:.1} %", 100.0 * share)) } " less."
                @if let Some(expected) = loss.expected {
                    " The model itself expects " (format!("{expected:.4}")) "."
                }
            }
        }
        @if !judged.held_out {
            p class="caution" { "No rows were kept out of the fit, so these figures flatter it. " code { "holdout" } " in the plan keeps some out." }
        }
    }
}

/// What the owner should know.
pub(super) fn warnings(model: &ModelFile) -> Markup {
    let Some(fit) = &model.fit else { return html! {} };
    html! {
        @if !fit.warnings.is_empty() || !fit.aliased.is_empty() || fit.refused > 0 {
            h2 id="warnings" { "What to know about this fit" }
            ul class="findings" {
                @if fit.refused > 0 { li class="slight" { (whole(fit.refused as f64)) " rows were refused and are not in the fit." } }
                @for warning in &fit.warnings { li class="slight" { (with_code(warning)) } }
                @for alias in &fit.aliased { li class="slight" { "Left out, because other terms determine it: " (with_code(alias)) } }
            }
        }
    }
}

/// Probabilities along each field.
pub(super) fn effect_curves(model: &ModelFile) -> Markup {
    let curves = match curves_of(model) {
        Ok(curves) => curves,
        Err(reason) => return html! { h2 id="curves" { "Effect of each field" } p { (reason) } },
    };
    let typical = typical_values(model);
    html! {
        h2 id="curves" { "Effect of each field" }
        p {
            "The probability of each category along one field, with 95 % bands, while the others stay at typical values: "
            @for (place, typical) in typical.iter().enumerate() {
                @if place > 0 { ", " } code { (typical.field) } " " (typical.words)
            }
            ". Small marks on an axis are the deciles of the fitted rows."
        }
        div class="pictures wide" {
            @for curve in &curves {
                figure {
                    @match &curve.axis {
                        Axis::Number { deciles } => (PreEscaped(along_number(&curve.title, &curve.curves, deciles))),
                        Axis::Levels(levels) => {
                            (PreEscaped(along_levels(&curve.title, levels, &curve.curves)))
                            (key(curve))
                        }
                    }
                    (curve_table(curve))
                }
            }
        }
    }
}

/// Which colour is which category.
fn key(curve: &EffectCurve) -> Markup {
    html! {
        figcaption {
            @for (number, own) in curve.curves.iter().enumerate() {
                span class="key" style={ "--swatch: var(--series-" (number % crate::pages::plots::SERIES) ")" } { (own.category) " " }
                " "
            }
        }
    }
}

fn curve_table(curve: &EffectCurve) -> Markup {
    let points = curve.curves.first().map_or(0, |own| own.points.len());
    // A curve is smooth: every tenth point tells it.
    let step = if matches!(curve.axis, Axis::Number { .. }) { 10 } else { 1 };
    let name = |point: usize| match &curve.axis {
        Axis::Number { .. } => significant(curve.curves[0].points[point].at),
        Axis::Levels(levels) => levels[point].clone(),
    };
    html! {
        details {
            summary { "Table: " (curve.title) }
            div class="scroll" { table {
                thead { tr { th scope="col" { (curve.title) } @for own in &curve.curves { th scope="col" { (own.category) } } } }
                tbody { @for point in (0..points).step_by(step) { tr {
                    td { (name(point)) }
                    @for own in &curve.curves {
                        @let estimated = &own.points[point];
                        td { (percent(Some(estimated.probability))) " " span class="quiet" { (range_in_percent(estimated.interval)) } }
                    }
                } } }
            } }
        }
    }
}

fn range_in_percent([low, high]: [f64; 2]) -> String {
    format!("{:.1} to {:.1}", 100.0 * low, 100.0 * high)
}

/// Coefficients of each category, as a picture of odds ratios and as a table.
pub(super) fn coefficients(model: &ModelFile) -> anyhow::Result<Markup> {
    let estimates = estimates_of(model, LEVEL)?;
    let units = units_of(model)?;
    let of = |category: &str| estimates.iter().filter(|own| own.category == category).cloned().collect();
    let blocks: Vec<(String, Vec<Estimate>)> =
        model.compared_categories().map(|category| (category.to_owned(), of(category))).collect();
    let reference = &model.outcome.reference;
    Ok(html! {
        h2 id="coefficients" { "Coefficients" }
        p {
            "Odds ratios against " strong { (reference) } " with 95 % intervals: the factor by which the odds change, for a number (·sd) per standard deviation, for a level against the reference level of its field. At the line a term changes nothing. "
            "Any two categories are compared by " code { "kilter contrast" } "."
        }
        @for (category, own) in &blocks {
            figure class="scroll" {
                (PreEscaped(odds_ratios(&format!("{category} against {reference}"), &ratios(own, &units))))
                (coefficient_table(category, reference, own))
            }
        }
    })
}

/// For each term the change that its odds ratio is drawn for, where it is not one unit.
fn units_of(model: &ModelFile) -> anyhow::Result<Vec<Option<f64>>> {
    let design = Design::of_model(model)?;
    let deviation = |term: usize| {
        let covariance = &model.baseline.as_ref()?.term_covariance;
        let place = term.checked_sub(1)?;
        Some(covariance.get(place * (place + 1) / 2 + place)?.sqrt()).filter(|sd| *sd > 0.0)
    };
    let is_number = |&column: &usize| matches!(design.dense()[column], DenseColumn::Basis { .. });
    let units = design.terms().iter().enumerate();
    Ok(units.map(|(place, term)| deviation(place).filter(|_| term.dense.iter().any(is_number))).collect())
}

fn ratios(estimates: &[Estimate], units: &[Option<f64>]) -> Vec<OddsRatio> {
    let of = |(estimate, unit): (&Estimate, &Option<f64>)| {
        let interval = estimate.uncertainty.filter(|_| estimate.term != INTERCEPT)?.interval;
        let (unit, mark) = unit.map_or((1.0, ""), |unit| (unit, " ·sd"));
        Some(OddsRatio {
            term: format!("{}{mark}", estimate.term),
            ratio: (unit * estimate.estimate).exp(),
            interval: interval.map(|end| (unit * end).exp()),
        })
    };
    estimates.iter().zip(units).filter_map(of).collect()
}

fn coefficient_table(category: &str, reference: &str, estimates: &[Estimate]) -> Markup {
    html! {
        details {
            summary { "Table: " (category) " against " (reference) }
            div class="scroll" { table {
                thead { tr { @for title in ["term", "log-odds", "std. error", "z", "p", "odds ratio", "95 % interval"] { th scope="col" { (title) } } } }
                tbody { @for estimate in estimates {
                    @let uncertainty = estimate.uncertainty.as_ref();
                    @let significance = uncertainty.and_then(|own| own.significance.as_ref());
                    tr {
                        td { (estimate.term) }
                        td { (format!("{:.4}", estimate.estimate)) }
                        td { @if let Some(own) = uncertainty { (format!("{:.4}", own.standard_error)) } @else { "–" } }
                        td { @if let Some(own) = significance { (format!("{:.2}", own.z)) } @else { "–" } }
                        td { @if let Some(own) = significance { (p_in_words(own.p)) } @else { "–" } }
                        td { @if let Some(ratio) = estimate.ratio() { (significant(ratio)) } @else { "–" } }
                        td { @if let Some([low, high]) = estimate.ratio_interval() { (significant(low)) " to " (significant(high)) } @else { "–" } }
                    }
                } }
            } }
        }
    }
}

/// Whether each field matters at all.
pub(super) fn field_tests(analysis: &FitAnalysis) -> Markup {
    html! {
        @if !analysis.field_tests.is_empty() {
            h2 id="fields" { "Does each field matter?" }
            p { "All coefficients of a field over all categories at once. A small p-value says that leaving the field out costs more than chance explains." }
            div class="scroll" { table {
                thead { tr { @for title in ["field", "coefficients", "likelihood ratio", "p", "Wald", "p", ""] { th scope="col" { (title) } } } }
                tbody { @for test in &analysis.field_tests { tr {
                    td { (tested_in_words(&test.tested)) }
                    td { (test.degrees_of_freedom) }
                    @for result in [&test.likelihood_ratio, &test.wald] {
                        td { @if let Some(result) = result { (format!("{:.2}", result.statistic)) } @else { "–" } }
                        td { @if let Some(result) = result { (p_in_words(result.p)) } @else { "–" } }
                    }
                    td { (remark(test)) }
                } } }
            } }
        }
    }
}

/// Average marginal effects, categories side by side.
pub(super) fn effects(analysis: &FitAnalysis) -> Markup {
    let mut categories: Vec<&str> = Vec::new();
    for effect in &analysis.effects {
        if !categories.contains(&effect.category.as_str()) {
            categories.push(&effect.category);
        }
    }
    let half = normal_quantile(f64::midpoint(1.0, LEVEL));
    html! {
        @if !categories.is_empty() {
            h2 id="effects" { "Average effect on the probabilities" }
            p { "In percentage points, averaged over the fitted rows with all other fields as they are; in brackets half the width of the 95 % interval." }
            div class="scroll" { table {
                thead { tr { th scope="col" { "change" } @for category in &categories { th scope="col" { (category) } } } }
                tbody { @for changes in analysis.effects.chunks(categories.len()) { tr {
                    td { (effect_in_words(&changes[0])) }
                    @for effect in changes {
                        td { (format!("{:+.2}", 100.0 * effect.effect)) " " span class="quiet" { "(" (format!("{:.2}", 100.0 * half * effect.standard_error)) ")" } }
                    }
                } } }
            } }
        }
    }
}

/// Predicted and observed mix.
pub(super) fn mix(judged: &Judged) -> Markup {
    html! {
        h2 id="mix" { "Mix" }
        p { "On the " (rows_in_words(judged)) "." }
        (mix_bars(&judged.report))
        details {
            summary { "Table: mix" }
            div class="scroll" { table {
                thead { tr { @for title in ["category", "predicted", "observed", "at the fit"] { th scope="col" { (title) } } } }
                tbody { @for category in &judged.report.mix.categories { tr {
                    td { (category.category) }
                    td { (percent(category.expected_share)) }
                    td { (percent(category.observed_share)) }
                    td { (percent(category.training_share)) }
                } } }
            } }
        }
    }
}

/// Calibration of each category.
pub(super) fn calibration(judged: &Judged) -> Markup {
    let slope = &judged.report.calibration.estimates.slope;
    html! {
        h2 id="calibration" { "Calibration" }
        p {
            "On the " (rows_in_words(judged)) ". On the line, records given a probability come true as often as it says; bars are 95 % intervals."
            @if judged.held_out {
                " Slope " (format!("{:.2}", slope.estimate))
                @if let Some([low, high]) = slope.interval { " (" (format!("{low:.2} to {high:.2}")) ")" }
                "; well below 1 the probabilities are too extreme."
            }
        }
        (calibration_curves(&judged.report))
    }
}

fn rows_in_words(judged: &Judged) -> &'static str {
    if judged.held_out { "rows kept out of the fit" } else { "rows of the fit itself, which flatter it" }
}

/// Measures of fit and checks of the model.
pub(super) fn checks(analysis: &FitAnalysis) -> Markup {
    html! {
        h2 id="checks" { "Checks" }
        @if let Some(own) = &analysis.statistics {
            p {
                "AIC " (format!("{:.2}", own.aic)) ", BIC " (format!("{:.2}", own.bic))
                "; R² by McFadden " (format!("{:.4}", own.mcfadden)) " (adjusted " (format!("{:.4}", own.mcfadden_adjusted))
                "), Cox and Snell " (format!("{:.4}", own.cox_snell)) ", Nagelkerke " (format!("{:.4}", own.nagelkerke)) "."
            }
        }
        @if let Some(found) = &analysis.goodness_of_fit {
            p {
                "Goodness of fit (Hosmer and Lemeshow, " (found.groups.len()) " groups): " (test_in_words(&found.test))
                "; the largest gap is " (format!("{:.2} %", 100.0 * found.largest_gap)) " of the cases. A large p-value does not say that the model fits: the test overlooks much."
            }
        }
        @if let Some(found) = analysis.grouped_fit.as_ref().filter(|found| found.valid) {
            p {
                "Over " (whole(found.patterns as f64)) " distinct rows: deviance " (test_in_words(&found.deviance)) "; Pearson " (test_in_words(&found.pearson)) "."
            }
        }
        @if let Some(ridge) = &analysis.ridge {
            p {
                "Ridge penalty " (ridge.penalty)
                @if let Some(validation) = &ridge.cross_validation { ", chosen by cross-validation in " (validation.folds) " folds" }
                ". Effective number of coefficients: "
                @for (place, (name, number)) in ridge.effective_parameters.iter().enumerate() {
                    @if place > 0 { ", " } (name) " " (format!("{number:.2}"))
                }
                "."
            }
        }
        @if let Some(diagnosis) = &analysis.diagnosis { (diagnosis_tables(diagnosis)) }
    }
}

fn diagnosis_tables(diagnosis: &crate::analysis::Diagnosis) -> Markup {
    html! {
        @if !diagnosis.independence.is_empty() {
            h3 { "Independence of irrelevant alternatives" }
            p { "Do the coefficients of the others stay when a category is left out? Such tests often disagree, and a missing term makes them reject as well: evidence, never a verdict." }
            div class="scroll" { table {
                thead { tr { @for title in ["left out", "robust p", "Hausman and McFadden p", "Small and Hsiao p"] { th scope="col" { (title) } } } }
                tbody { @for test in &diagnosis.independence {
                    @let hausman = test.hausman.filter(|own| own.smallest_eigenvalue > 0.0);
                    tr {
                        td { (test.left_out) }
                        td { (p_in_words(test.robust.p)) }
                        td { @if let Some(own) = hausman { (p_in_words(own.test.p)) } @else { "–" } }
                        td { @if let Some(own) = test.small_hsiao { (p_in_words(own.median_p)) } @else { "–" } }
                    }
                } }
            } }
        }
        @if !diagnosis.separate_fits.is_empty() {
            h3 { "Separate fits" }
            p { "Each category fitted separately against the reference. Differences from the joint fit beyond 4 of their standard errors mean that the model does not hold." }
            div class="scroll" { table {
                thead { tr { @for title in ["category", "term with the largest difference", "joint", "separate", "difference in std. errors"] { th scope="col" { (title) } } } }
                tbody { @for fit in &diagnosis.separate_fits {
                    @if let Some(term) = fit.terms.iter().max_by(|a, b| a.z.abs().total_cmp(&b.z.abs())) { tr {
                        td { (fit.category) }
                        td { (term.term) }
                        td { (format!("{:.4}", term.joint)) }
                        td { (format!("{:.4}", term.separate)) }
                        td { (format!("{:.2}", term.z)) }
                    } }
                } }
            } }
        }
    }
}

/// How the fit was made.
pub(super) fn origin(model: &ModelFile) -> Markup {
    let Some(fit) = &model.fit else { return html! {} };
    html! {
        h2 id="origin" { "How it was made" }
        dl {
            dt { "log-likelihood" } dd { (format!("{:.6}", fit.log_likelihood)) " (intercepts only " (format!("{:.6}", fit.log_likelihood_null)) ")" }
            dt { "coefficients" } dd { (fit.parameters) }
            dt { "standard errors" } dd { (standard_errors(model)) }
            dt { "steps" } dd { (fit.iterations) ", gradient at the end " (format!("{:.1e}", fit.gradient_norm)) }
            dt { "optimum" } dd { "finite and unique, certified: " (format!("{:.1e}", fit.certificate)) " < 1" }
            @if let Some(data) = &fit.data_fingerprint { dt { "data" } dd class="version" { (data) } }
            dt { "model file" } dd class="version" { (model.fingerprint) }
            dt { "program" } dd { (fit.program) }
        }
    }
}

fn standard_errors(model: &ModelFile) -> String {
    use kilter_model::StandardErrors;
    let Some(fit) = &model.fit else { return String::new() };
    match (fit.standard_errors, fit.clusters) {
        (StandardErrors::Model, _) => "from the information (model-based)".into(),
        (StandardErrors::Robust, _) => "robust (sandwich)".into(),
        (StandardErrors::Cluster, clusters) => {
            format!("robust to clusters ({} of them)", clusters.map_or_else(String::new, |c| whole(c as f64)))
        }
    }
}
