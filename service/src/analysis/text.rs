//! The analysis of a fit as text for a terminal.

use std::fmt::Write;

use kilter_fit::analysis::{
    Change, Distribution, Effect, FieldTest, FitStatistics, IndependenceTest, SeparateFit, TestResult, Tested,
};
use kilter_fit::inference::normal_quantile;

use super::{Diagnosis, FitAnalysis, Ridge};
use crate::numbers::{p_in_words, whole};
use crate::text_table::{Align, Table};

/// The analysis in lines of text. Numbers are rounded for people; the JSON has them in full.
pub(crate) fn as_text(analysis: &FitAnalysis) -> String {
    let mut text = String::new();
    if let Some(statistics) = &analysis.statistics {
        text.push_str(&statistics_in_words(statistics));
    }
    if !analysis.field_tests.is_empty() {
        // Writing to a string cannot fail, here and below.
        let _ = write!(text, "\nTests of whole fields\n{}", tests_as_table(&analysis.field_tests));
    }
    if !analysis.effects.is_empty() {
        let _ = write!(
            text,
            "\nAverage marginal effects on the probabilities, in percentage points\n{}",
            effects_as_table(&analysis.effects)
        );
    }
    text.push_str(&goodness_in_words(analysis));
    if let Some(ridge) = &analysis.ridge {
        text.push_str(&ridge_in_words(ridge));
    }
    if let Some(diagnosis) = &analysis.diagnosis {
        text.push_str(&diagnosis_in_words(diagnosis));
    }
    text
}

/// Measures of fit in two lines.
pub(crate) fn statistics_in_words(statistics: &FitStatistics) -> String {
    format!(
        "AIC {:.2}, BIC {:.2}\nR²: McFadden {:.4} (adjusted {:.4}), Cox and Snell {:.4}, Nagelkerke {:.4}\n",
        statistics.aic,
        statistics.bic,
        statistics.mcfadden,
        statistics.mcfadden_adjusted,
        statistics.cox_snell,
        statistics.nagelkerke
    )
}

/// Tests of whole fields as a table.
pub(crate) fn tests_as_table(tests: &[FieldTest]) -> Table {
    let with_ratio = tests.iter().any(|test| test.likelihood_ratio.is_some());
    let mut head = vec![("", Align::Left), ("coefficients", Align::Right)];
    if with_ratio {
        head.extend([("likelihood ratio", Align::Right), ("p", Align::Right)]);
    }
    head.extend([("Wald", Align::Right), ("p", Align::Right), ("", Align::Left)]);
    let mut table = Table::new(&head);
    for test in tests {
        let mut cells = vec![tested_in_words(&test.tested), test.degrees_of_freedom.to_string()];
        if with_ratio {
            cells.extend(test_cells(test.likelihood_ratio.as_ref()));
        }
        cells.extend(test_cells(test.wald.as_ref()));
        cells.push(remark(test).to_owned());
        table.row(cells);
    }
    table
}

/// What a test is about.
pub(crate) fn tested_in_words(tested: &Tested) -> String {
    match tested {
        Tested::Field(field) => field.clone(),
        Tested::Curvature(field) => format!("{field}, its curvature"),
        Tested::Interaction([first, second]) => format!("{first} × {second}"),
        Tested::Everything => "everything".into(),
    }
}

/// What to know about a test before it is read.
pub(crate) fn remark(test: &FieldTest) -> &'static str {
    // Where both are as good as certain the difference is of no use to anyone.
    if test.wald_collapses() && test.wald.is_some_and(|wald| wald.p >= 1e-4) {
        "Wald has no power here: trust the likelihood ratio"
    } else if test.approximate {
        "few clusters: a rough guide"
    } else {
        ""
    }
}

fn test_cells(test: Option<&TestResult>) -> [String; 2] {
    let dash = || "–".to_owned();
    let Some(test) = test else { return [dash(), dash()] };
    let statistic = match test.distribution {
        Distribution::ChiSquared { .. } => format!("{:.2}", test.statistic),
        Distribution::F { numerator, denominator } => {
            format!("F({numerator}, {denominator}) {:.2}", test.statistic)
        }
    };
    [statistic, p_in_words(test.p)]
}

/// What changes, for one effect.
pub(crate) fn effect_in_words(effect: &Effect) -> String {
    match &effect.change {
        Change::PerUnit => format!("{}, per unit", effect.field),
        Change::Switch { to, from } => format!("{}: {from} → {to}", effect.field),
    }
}

fn effects_as_table(effects: &[Effect]) -> Table {
    let mut table = Table::new(&[
        ("change", Align::Left),
        ("category", Align::Left),
        ("effect", Align::Right),
        ("std. error", Align::Right),
        ("95 % interval", Align::Right),
    ]);
    let quantile = normal_quantile(0.975);
    for effect in effects {
        let points = |share: f64| format!("{:+.3}", 100.0 * share);
        let half = quantile * effect.standard_error;
        table.row(vec![
            effect_in_words(effect),
            effect.category.clone(),
            points(effect.effect),
            format!("{:.3}", 100.0 * effect.standard_error),
            format!("{} to {}", points(effect.effect - half), points(effect.effect + half)),
        ]);
    }
    table
}

fn goodness_in_words(analysis: &FitAnalysis) -> String {
    let mut text = String::new();
    if let Some(found) = &analysis.goodness_of_fit {
        let _ = write!(
            text,
            "\nGoodness of fit (Hosmer and Lemeshow, {} groups): {}; largest gap {:.2} % of the cases\n\
             a large p-value does not say that the model fits: the test overlooks much\n",
            found.groups.len(),
            test_in_words(&found.test),
            100.0 * found.largest_gap
        );
    }
    if let Some(grouped) = analysis.grouped_fit.as_ref().filter(|grouped| grouped.valid) {
        let _ = write!(
            text,
            "\nOver {} distinct rows: deviance {}; Pearson {}\n",
            whole(grouped.patterns as f64),
            test_in_words(&grouped.deviance),
            test_in_words(&grouped.pearson)
        );
    }
    text
}

/// A test in one phrase.
pub(crate) fn test_in_words(test: &TestResult) -> String {
    match test.distribution {
        Distribution::ChiSquared { freedom } => {
            format!("χ²({freedom}) = {:.2}, p {}", test.statistic, p_in_words(test.p))
        }
        Distribution::F { numerator, denominator } => {
            format!("F({numerator}, {denominator}) = {:.2}, p {}", test.statistic, p_in_words(test.p))
        }
    }
}

fn ridge_in_words(ridge: &Ridge) -> String {
    let mut text = format!("\nRidge penalty {}; effective number of coefficients: ", ridge.penalty);
    let parts: Vec<String> =
        ridge.effective_parameters.iter().map(|(name, number)| format!("{name} {number:.2}")).collect();
    let _ = writeln!(text, "{}", parts.join(", "));
    if let Some(validation) = &ridge.cross_validation {
        let mut table = Table::new(&[
            ("penalty", Align::Right),
            ("log-loss", Align::Right),
            ("std. error", Align::Right),
            ("", Align::Left),
        ]);
        for candidate in &validation.candidates {
            let mark = match candidate.ridge {
                ridge if ridge == validation.chosen => "taken",
                ridge if ridge == validation.smallest_loss => "smallest loss",
                _ => "",
            };
            table.row(vec![
                format!("{:.2e}", candidate.ridge),
                format!("{:.5}", candidate.loss),
                format!("{:.5}", candidate.error),
                mark.into(),
            ]);
        }
        let _ = write!(text, "\nCross-validation in {} folds\n{table}", validation.folds);
    }
    text
}

fn diagnosis_in_words(diagnosis: &Diagnosis) -> String {
    let mut text = String::new();
    if !diagnosis.independence.is_empty() {
        let _ = write!(
            text,
            "\nIndependence of irrelevant alternatives: do the others' coefficients stay when a category is left out?\n{}\
             such tests often disagree, and a missing term makes them reject as well: evidence, never a verdict\n",
            independence_as_table(&diagnosis.independence)
        );
    }
    if !diagnosis.separate_fits.is_empty() {
        let _ = write!(
            text,
            "\nEach category fitted separately against the reference; differences beyond 4 mean that the model does not hold\n{}",
            separate_as_table(&diagnosis.separate_fits)
        );
    }
    text
}

fn independence_as_table(tests: &[IndependenceTest]) -> Table {
    let mut table = Table::new(&[
        ("left out", Align::Left),
        ("robust", Align::Right),
        ("p", Align::Right),
        ("Hausman and McFadden", Align::Right),
        ("p", Align::Right),
        ("Small and Hsiao p", Align::Right),
    ]);
    for test in tests {
        let usable = test.hausman.filter(|hausman| hausman.smallest_eigenvalue > 0.0);
        let [robust, robust_p] = test_cells(Some(&test.robust));
        let [hausman, hausman_p] = test_cells(usable.as_ref().map(|hausman| &hausman.test));
        let halves = test.small_hsiao.map_or_else(|| "–".into(), |halves| p_in_words(halves.median_p));
        table.row(vec![test.left_out.clone(), robust, robust_p, hausman, hausman_p, halves]);
    }
    table
}

fn separate_as_table(fits: &[SeparateFit]) -> Table {
    let mut table = Table::new(&[
        ("category", Align::Left),
        ("term", Align::Left),
        ("joint", Align::Right),
        ("std. error", Align::Right),
        ("separate", Align::Right),
        ("difference in std. errors", Align::Right),
    ]);
    for fit in fits {
        for term in &fit.terms {
            table.row(vec![
                fit.category.clone(),
                term.term.clone(),
                format!("{:.4}", term.joint),
                format!("{:.4}", term.joint_error),
                format!("{:.4}", term.separate),
                format!("{:.2}", term.z),
            ]);
        }
    }
    table
}
