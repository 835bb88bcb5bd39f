//! `kilter show`: what is in a model file.

use std::fmt::Write;

use kilter_fit::analysis::{FieldTest, fit_statistics, wald_tests};
use kilter_fit::inference::{Estimate, coefficients};
use kilter_model::{FitFigures, Holdout, ModelFile};
use serde_json::{Value, json};

use crate::analysis::{statistics_in_words, tests_as_table};
use crate::cli::ShowArgs;
use crate::commands::read_model;
use crate::exit::Done;
use crate::numbers::{percent, whole};
use crate::terminal::say;
use crate::text_table::{Align, Table};

/// Level of the intervals that are shown.
pub(super) const LEVEL: f64 = 0.95;

pub(crate) fn run(arguments: &ShowArgs) -> anyhow::Result<Done> {
    let model = read_model(&arguments.model)?;
    let estimates = coefficients(&model, LEVEL)?;
    let tests = wald_tests(&model)?;
    if arguments.json {
        say(serde_json::to_string_pretty(&as_json(&model, &estimates, &tests))?)?;
    } else {
        say(as_text(&model, &estimates, &tests))?;
    }
    Ok(Done::Well)
}

fn as_json(model: &ModelFile, estimates: &[Estimate], tests: &[FieldTest]) -> Value {
    let mut categories = serde_json::Map::new();
    for category in model.compared_categories() {
        let own = estimates.iter().filter(|estimate| estimate.category == category);
        categories.insert(category.to_owned(), own.map(estimate_as_json).collect());
    }
    json!({
        "name": model.name,
        "version": model.fingerprint,
        "outcome": model.outcome,
        "categories": categories,
        "field_tests": tests,
        "statistics": model.fit.as_ref().map(fit_statistics),
        "fit": model.fit,
        "holdout": model.holdout,
    })
}

/// One coefficient with everything that is known of it.
pub(super) fn estimate_as_json(estimate: &Estimate) -> Value {
    let uncertainty = estimate.uncertainty.as_ref();
    let significance = uncertainty.and_then(|u| u.significance.as_ref());
    json!({
        "term": estimate.term,
        "estimate": estimate.estimate,
        "standard_error": uncertainty.map(|u| u.standard_error),
        "z": significance.map(|s| s.z),
        "p": significance.map(|s| s.p),
        "log10_p": significance.map(|s| s.log10_p),
        "interval": uncertainty.map(|u| u.interval),
        "odds_ratio": estimate.ratio(),
        "odds_ratio_interval": estimate.ratio_interval(),
    })
}

fn as_text(model: &ModelFile, estimates: &[Estimate], tests: &[FieldTest]) -> String {
    let mut text = format!("{} {}\n", model.name, model.fingerprint);
    // Writing to a string cannot fail, here and below.
    let _ = writeln!(text, "{}", model.purpose);
    for caution in &model.cautions {
        let _ = writeln!(text, "caution: {caution}");
    }
    let _ = writeln!(
        text,
        "\n{}: one of {}; log-odds against {}",
        model.outcome.field,
        model.outcome.categories.join(", "),
        model.outcome.reference
    );
    for category in model.compared_categories() {
        let own: Vec<&Estimate> = estimates.iter().filter(|estimate| estimate.category == category).collect();
        let _ =
            writeln!(text, "\n{category} against {}\n{}", model.outcome.reference, estimates_as_table(&own));
    }
    if !tests.is_empty() {
        let _ = write!(text, "\nTests of whole fields\n{}\n", tests_as_table(tests));
    }
    if let Some(fit) = &model.fit {
        text.push_str(&fit_in_words(fit));
    }
    if let Some(holdout) = &model.holdout {
        text.push_str(&holdout_in_words(holdout));
    }
    text
}

/// Coefficients as a table.
pub(super) fn estimates_as_table(estimates: &[&Estimate]) -> Table {
    let mut table = Table::new(&[
        ("term", Align::Left),
        ("log-odds", Align::Right),
        ("std. error", Align::Right),
        ("z", Align::Right),
        ("p", Align::Right),
        ("odds ratio", Align::Right),
        ("95 % interval", Align::Right),
    ]);
    for estimate in estimates {
        let dash = || "–".to_owned();
        let uncertainty = estimate.uncertainty.as_ref();
        let significance = uncertainty.and_then(|u| u.significance.as_ref());
        table.row(vec![
            estimate.term.clone(),
            format!("{:.4}", estimate.estimate),
            uncertainty.map_or_else(dash, |u| format!("{:.4}", u.standard_error)),
            significance.map_or_else(dash, |s| format!("{:.2}", s.z)),
            significance
                .map_or_else(dash, |s| if s.p < 1e-4 { "< 0.0001".into() } else { format!("{:.4}", s.p) }),
            estimate.ratio().map_or_else(dash, |ratio| format!("{ratio:.3}")),
            estimate.ratio_interval().map_or_else(dash, |[low, high]| format!("{low:.3} to {high:.3}")),
        ]);
    }
    table
}

fn fit_in_words(fit: &FitFigures) -> String {
    let mut text = format!(
        "Fit: {} rows, {} cases, {} parameters, {} steps\n\
         log-likelihood {:.4}, with intercepts only {:.4}\n{}\
         gradient {:.1e}; finite and unique optimum certified ({:.2e} < 1)\n",
        whole(fit.rows as f64),
        whole(fit.weight),
        fit.parameters,
        fit.iterations,
        fit.log_likelihood,
        fit.log_likelihood_null,
        statistics_in_words(&fit_statistics(fit)),
        fit.gradient_norm,
        fit.certificate
    );
    for line in fit
        .aliased
        .iter()
        .map(|alias| format!("left out: {alias}"))
        .chain(fit.warnings.iter().map(|warning| format!("warning: {warning}")))
    {
        let _ = writeln!(text, "{line}");
    }
    text
}

fn holdout_in_words(holdout: &Holdout) -> String {
    let shares = |mix: &[f64]| mix.iter().map(|share| percent(Some(*share))).collect::<Vec<_>>().join(", ");
    format!(
        "Holdout: {} rows; log-loss {:.4} (the model expects {:.4}, the fitted mix has {:.4}); Brier {:.4} (expects {:.4})\n\
         observed mix {}; predicted {}\n",
        whole(holdout.rows as f64),
        holdout.log_loss,
        holdout.log_loss_expected,
        holdout.log_loss_null,
        holdout.brier,
        holdout.brier_expected,
        shares(&holdout.observed_mix),
        shares(&holdout.predicted_mix)
    )
}
