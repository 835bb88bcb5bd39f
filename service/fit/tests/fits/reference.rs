//! Fits of open data sets against values that several independent programs agree on. Each data set
//! has its source, licence and the origin of the values beside it.

use crate::support::{Table, analysed, assert_close, fitted, json, plan};
use kilter_fit::Fitted;
use kilter_fit::analysis::{Change, Effect, FieldTest, TestResult, Tested, fit_statistics};
use kilter_fit::inference::{Estimate, ProbabilityIntervals, coefficients, contrast};
use kilter_model::{INTERCEPT, Scorer, check};
use serde_json::Value;

// Tolerances as the reference files state them.
const LOG_LIKELIHOOD: f64 = 1e-7;
const COEFFICIENT: f64 = 1e-7;
const STANDARD_ERROR: f64 = 1e-6;
const PROBABILITY: f64 = 1e-8;
const STATISTIC: f64 = 1e-6;
const P_VALUE: f64 = 1e-5;

const FITS: [(&str, &str, &str); 12] = [
    ("gator59", "gator59.csv", "gator59_length"),
    ("gator219", "gator219.csv", "gator219_lake_size"),
    ("gator219", "gator219.csv", "gator219_lake_size_sex"),
    ("hsb2", "hsb2.csv", "hsb2_ses_write"),
    ("hsb2", "hsb2.csv", "hsb2_binary"),
    ("womenlf", "womenlf.csv", "womenlf_main"),
    ("womenlf", "womenlf.csv", "womenlf_full"),
    ("housing", "housing_sat.csv", "housing_main"),
    ("housing", "housing_sat.csv", "housing_inter"),
    ("homeless", "homeless.csv", "homeless_time"),
    ("fishing", "fishing.csv", "fishing_income"),
    ("fishing", "fishing.csv", "fishing_income_raw"),
];

/// The plan that an expected file describes.
fn toml_of(expected: &Value) -> String {
    use std::fmt::Write;
    let model = &expected["model"];
    let mut toml = "name = \"reference\"\n[data]\nfiles = [\"data.csv\"]\n".to_owned();
    if let Some(count) = model["weights"].as_str() {
        let kind = if model["weight_type"] == "frequency" { "count" } else { "weight" };
        writeln!(toml, "{kind} = \"{count}\"").unwrap();
    }
    let outcome = &model["outcome"];
    writeln!(toml, "[outcome]\nfield = {outcome}\ncategories = {}", model["categories"]).unwrap();
    for term in model["terms"].as_array().unwrap() {
        match term["type"].as_str().unwrap() {
            "numeric" => writeln!(toml, "[[field]]\nname = {}\nkind = \"number\"", term["name"]),
            "factor" => {
                writeln!(
                    toml,
                    "[[field]]\nname = {}\nkind = \"levels\"\nlevels = {}",
                    term["name"], term["levels"]
                )
            }
            _ => writeln!(toml, "[[interaction]]\nfields = {}", term["parts"]),
        }
        .unwrap();
    }
    toml
}

fn number(value: &Value) -> f64 {
    value.as_f64().unwrap_or_else(|| panic!("no number: {value}"))
}

fn check_estimates(fit: &str, found: &[Estimate], expected: &Value) {
    for (name, expected) in expected.as_object().unwrap() {
        let term = if name == "(Intercept)" { INTERCEPT } else { name };
        let what = format!("{fit} {name}");
        let found = found.iter().find(|estimate| estimate.term == term).unwrap_or_else(|| panic!("{what}"));
        let uncertainty = found.uncertainty.unwrap();
        assert_close(&what, found.estimate, number(&expected["estimate"]), COEFFICIENT, COEFFICIENT);
        let close = |part: &str, found: f64, wanted: f64, tolerance: f64| {
            assert_close(&format!("{what} {part}"), found, wanted, 0.0, tolerance);
        };
        close("standard error", uncertainty.standard_error, number(&expected["std_error"]), STANDARD_ERROR);
        close("z", uncertainty.significance.unwrap().z, number(&expected["z"]), STATISTIC);
        close("p", uncertainty.significance.unwrap().p, number(&expected["p"]), P_VALUE);
        for end in 0..2 {
            close("interval", uncertainty.interval[end], number(&expected["ci95"][end]), STATISTIC);
            if let Some(ratios) = found.ratio_interval() {
                close("ratio interval", ratios[end], number(&expected["rrr_ci95"][end]), P_VALUE);
            }
        }
        if let Some(ratio) = found.ratio() {
            close("ratio", ratio, number(&expected["rrr"]), STATISTIC);
        }
    }
}

fn check_figures(fit: &str, fitted: &Fitted, expected: &Value) {
    let figures = fitted.model.fit.as_ref().unwrap();
    let weight = if expected.get("bic_n_is_sum_of_weights").is_some() {
        "bic_n_is_sum_of_weights"
    } else {
        "bic_n_is_rows"
    };
    assert_eq!(figures.rows, expected["n_rows_used"].as_u64().unwrap(), "{fit}");
    assert_eq!(figures.parameters, expected["n_params"].as_u64().unwrap(), "{fit}");
    for (what, found, key) in [
        ("weight", figures.weight, "sum_of_weights"),
        ("log-likelihood", figures.log_likelihood, "loglik"),
        ("null log-likelihood", figures.log_likelihood_null, "loglik_null"),
        ("AIC", figures.aic, "aic"),
        ("BIC", figures.bic, weight),
        ("McFadden", figures.mcfadden_r2, "mcfadden_r2"),
    ] {
        assert_close(&format!("{fit} {what}"), found, number(&expected[key]), LOG_LIKELIHOOD, 0.0);
    }
    for (category, weight) in fitted.model.outcome.categories.iter().zip(&figures.category_weights) {
        assert_eq!(*weight, number(&expected["category_totals"][category]), "{fit} {category}");
    }
    assert!(figures.certificate < 1e-3, "{fit}: {}", figures.certificate);
    assert!(figures.gradient_norm <= 1e-8 * figures.weight, "{fit}: {}", figures.gradient_norm);
}

fn check_covariance(fit: &str, fitted: &Fitted, expected: &Value) {
    let model = &fitted.model;
    let compared: Vec<&str> = model.compared_categories().collect();
    let place = |name: &Value| {
        let (category, term) = name.as_str().unwrap().split_once('|').unwrap();
        let term = if term == "(Intercept)" { INTERCEPT } else { term };
        let position = |names: &[&str], name: &str| names.iter().position(|known| *known == name).unwrap();
        let terms: Vec<&str> = model.terms.iter().map(String::as_str).collect();
        position(&compared, category) * terms.len() + position(&terms, term)
    };
    let places: Vec<usize> = expected["order"].as_array().unwrap().iter().map(place).collect();
    let covariance = model.covariance.as_ref().unwrap();
    for (row, &at) in places.iter().enumerate() {
        for (column, &also) in places.iter().enumerate() {
            let scale = (covariance.at(at, at) * covariance.at(also, also)).sqrt();
            let wanted = number(&expected["matrix"][row][column]);
            // Relative to the standard errors: entries near 0 have no relative precision.
            assert_close(
                &format!("{fit} covariance {row} {column}"),
                covariance.at(at, also),
                wanted,
                scale * 2e-6,
                0.0,
            );
        }
    }
}

fn check_predictions(fit: &str, fitted: &Fitted, expected: &Value) {
    let scorer = Scorer::new(&fitted.model).unwrap();
    let intervals = ProbabilityIntervals::new(&fitted.model, 0.95).unwrap();
    for prediction in expected.as_array().unwrap() {
        let inputs = prediction.get("inputs").unwrap_or(&prediction["profile"]).as_object().unwrap();
        let cell = |value: &Value| value.as_str().map_or_else(|| value.to_string(), String::from);
        let record = Table {
            header: inputs.keys().cloned().collect(),
            rows: vec![inputs.values().map(cell).collect()],
        };
        let scored = scorer.score(&record.batch(&scorer.column_specs()));
        let values: Vec<f64> = scored.coded.values.iter().map(|column| column[0]).collect();
        let found = intervals.of_record(&values);
        for (index, category) in fitted.model.outcome.categories.iter().enumerate() {
            let wanted = &prediction["probabilities"][category];
            let what = format!("{fit} {inputs:?} {category}");
            let probability = number(&wanted["probability"]);
            assert_close(&what, scored.probabilities_of(0)[index], probability, PROBABILITY, 0.0);
            assert_close(&what, found[index].probability, probability, PROBABILITY, 0.0);
            assert_close(
                &what,
                found[index].log_odds_error,
                number(&wanted["std_error_logit"]),
                0.0,
                STANDARD_ERROR,
            );
            for end in 0..2 {
                let wanted = number(&wanted["ci95_logit_scale"][end]);
                assert_close(&what, found[index].interval[end], wanted, 0.0, STANDARD_ERROR);
            }
        }
    }
}

/// Standard errors of plain coefficients by category and term.
fn check_errors(fit: &str, fitted: &Fitted, expected: &Value, factor: f64) {
    for estimate in coefficients(&fitted.model, 0.95).unwrap() {
        let term = if estimate.term == INTERCEPT { "(Intercept)" } else { &estimate.term };
        let name = format!("{}|{term}", estimate.category);
        let found = estimate.uncertainty.unwrap().standard_error;
        assert_close(
            &format!("{fit} {name}"),
            found,
            number(&expected[&name]) * factor.sqrt(),
            0.0,
            STANDARD_ERROR,
        );
    }
}

fn check_robust(fit: &str, toml: &str, table: &Table, expected: &Value) {
    let fitted = fitted(&plan(&format!("{toml}[fit]\nstandard_errors = \"robust\"")), table);
    let cases = fitted.model.fit.as_ref().unwrap().weight;
    check_errors(fit, &fitted, &expected["std_error"], cases / (cases - 1.0));
}

fn check_test(what: &str, test: Option<TestResult>, expected: &Value, kind: &str) {
    if let Some(statistic) = expected[format!("{kind}_chi2")].as_f64() {
        let test = test.unwrap();
        assert_close(what, test.statistic, statistic, 0.0, STATISTIC);
        assert_close(what, test.p, number(&expected[format!("{kind}_p")]), 1e-300, P_VALUE);
    }
}

/// Tests of fields without interactions, and of interactions; elsewhere the reference tests the
/// main effect alone.
fn check_field_tests(fit: &str, tests: &[FieldTest], expected: &Value) {
    let expected = expected.as_object().unwrap();
    let mut checked = 0;
    for test in tests {
        let name = match &test.tested {
            Tested::Field(name)
                if !expected.keys().any(|key| key.contains(':') && key.contains(name.as_str())) =>
            {
                name.clone()
            }
            Tested::Interaction(pair) => pair.join(":"),
            _ => continue,
        };
        let what = format!("{fit} {name}");
        let expected = &expected[&name];
        assert_eq!(test.degrees_of_freedom, expected["df"].as_u64().unwrap(), "{what}");
        check_test(&what, test.wald, expected, "wald");
        check_test(&what, test.likelihood_ratio, expected, "lr");
        checked += 1;
    }
    assert!(checked > 0, "{fit}: {tests:?}");
}

fn check_effects(fit: &str, effects: &[Effect], expected: &Value) {
    for (name, expected) in expected.as_object().unwrap() {
        for (category, expected) in expected.as_object().unwrap() {
            let of_name = |effect: &&Effect| match &effect.change {
                Change::PerUnit => effect.field == *name,
                Change::Switch { to, .. } => format!("{}={to}", effect.field) == *name,
            };
            let found =
                effects.iter().find(|effect| of_name(effect) && effect.category == *category).unwrap();
            let what = format!("{fit} effect of {name} on {category}");
            assert_close(&what, found.effect, number(&expected["effect"]), PROBABILITY, 0.0);
            assert_close(&what, found.standard_error, number(&expected["std_error"]), 0.0, STANDARD_ERROR);
        }
    }
}

fn check_statistics(fit: &str, fitted: &Fitted, expected: &Value) {
    let found = fit_statistics(fitted.model.fit.as_ref().unwrap());
    for (found, key) in [
        (found.mcfadden_adjusted, "mcfadden_adj_r2"),
        (found.cox_snell, "cox_snell_r2"),
        (found.nagelkerke, "nagelkerke_r2"),
    ] {
        assert_close(&format!("{fit} {key}"), found, number(&expected[key]), 1e-9, 0.0);
    }
}

fn check_fit(folder: &str, data: &str, name: &str) {
    let expected = json(&format!("{folder}/{name}.json"));
    let table = Table::read(&format!("{folder}/{data}"));
    let toml = toml_of(&expected);
    let plan = plan(&toml);
    let (fitted, tests, effects, grouped) = analysed(&plan, &table, |mut analysis| {
        let tests = analysis.field_tests().unwrap();
        let effects = analysis.effects().unwrap();
        let grouped = analysis.grouped_fit().unwrap();
        (analysis.fitted, tests, effects, grouped)
    });
    let model = &fitted.model;
    let expected = &expected["expected"];
    assert_eq!(check(model), [], "{name}");
    check_figures(name, &fitted, expected);
    let all = coefficients(model, 0.95).unwrap();
    for category in model.compared_categories() {
        let of_category: Vec<Estimate> = all.iter().filter(|e| e.category == category).cloned().collect();
        let key = format!("{category} vs {}", model.outcome.reference);
        check_estimates(name, &of_category, &expected["coefficients"][&key]);
    }
    for (pair, expected) in expected["pairwise"].as_object().unwrap() {
        let (category, against) = pair.split_once(" vs ").unwrap();
        check_estimates(name, &contrast(model, category, against, 0.95).unwrap(), &expected["coefficients"]);
    }
    check_covariance(name, &fitted, &expected["covariance"]);
    check_predictions(name, &fitted, &expected["predictions_first_rows"]);
    check_robust(name, &toml, &table, &expected["robust_HC0"]);
    check_field_tests(name, &tests, &expected["terms"]);
    check_statistics(name, &fitted, expected);
    if let (Some(found), Some(expected)) = (grouped, expected.get("grouped_fit")) {
        assert_eq!(found.patterns, expected["patterns"].as_u64().unwrap(), "{name}");
        let figures = [(found.deviance, "G2", "deviance_G2"), (found.pearson, "X2", "pearson_X2")];
        for (test, kind, key) in figures {
            assert_close(name, test.statistic, number(&expected[key]), 0.0, STATISTIC);
            assert_close(name, test.p, number(&expected[format!("p_{kind}")]), 0.0, P_VALUE);
        }
    }
    if let Some(expected) = expected.get("average_marginal_effects") {
        check_effects(name, &effects, expected);
    }
}

/// 361 people seen up to four times.
#[test]
fn errors_robust_to_many_clusters() {
    let expected = json("homeless/homeless_time.json");
    let toml = toml_of(&expected).replace("[outcome]", "cluster = \"id\"\n[outcome]");
    let plan = plan(&format!("{toml}[fit]\nstandard_errors = \"cluster\""));
    let fitted = fitted(&plan, &Table::read("homeless/homeless.csv"));
    let expected = &expected["expected"]["cluster_robust"];
    assert_eq!(fitted.model.fit.as_ref().unwrap().clusters, expected["clusters"].as_u64());
    check_errors("homeless", &fitted, &expected["std_error_no_factor"], number(&expected["factor_G"]));
}

/// A survey with weights in the thousands: coefficients and robust errors do not depend on their
/// size, the log-likelihood is that of the reference per mean weight.
#[test]
fn sampling_weights_of_a_survey() {
    let expected = json("ces11/ces11_weighted.json");
    let plan = plan(&toml_of(&expected));
    let fitted = fitted(&plan, &Table::read("ces11/ces11.csv"));
    let expected = &expected["expected"];
    let figures = fitted.model.fit.as_ref().unwrap();
    let scale = number(&expected["sum_of_weights"]) / figures.weight;
    assert_close("log-likelihood", figures.log_likelihood * scale, number(&expected["loglik"]), 0.0, 1e-11);
    for estimate in coefficients(&fitted.model, 0.95).unwrap() {
        let key = format!("{} vs {}", estimate.category, estimate.against);
        let term = if estimate.term == INTERCEPT { "(Intercept)" } else { &estimate.term };
        let wanted = number(&expected["coefficients"][&key][term]["estimate"]);
        assert_close(&format!("{key} {term}"), estimate.estimate, wanted, COEFFICIENT, COEFFICIENT);
    }
    check_errors(
        "ces11",
        &fitted,
        &expected["robust_HC0"]["std_error"],
        figures.weight / (figures.weight - 1.0),
    );
}

#[test]
fn fits_agree_with_the_reference() {
    for (folder, data, name) in FITS {
        check_fit(folder, data, name);
    }
}

/// Intervals on grids that go beyond the rows of the fit.
#[test]
fn prediction_intervals_on_a_grid() {
    for (folder, fit, grid) in
        [("hsb2", "hsb2_ses_write", "predict_hsb2"), ("womenlf", "womenlf_main", "predict_womenlf")]
    {
        let plan = plan(&toml_of(&json(&format!("{folder}/{fit}.json"))));
        let fitted = fitted(&plan, &Table::read(&format!("{folder}/{folder}.csv")));
        let expected = &json(&format!("{folder}/{grid}.json"))["expected"];
        assert!(expected.as_array().unwrap().len() > 3);
        check_predictions(grid, &fitted, expected);
    }
}

/// Categories whose numbers overlap by one animal only: the estimate exists, far out.
#[test]
fn almost_separated_categories_have_the_reference_estimate() {
    check_fit("penguins", "penguins.csv", "penguins_overlap");
}

/// Maximum likelihood to 40 digits, computed from the decimal text of the tables.
#[test]
fn digits_certified_in_long_arithmetic() {
    let certified = json("gator59/certified_digits.json");
    let digits = |value: &Value| value.as_str().unwrap().parse::<f64>().unwrap();
    for (folder, data, name, key) in [
        ("gator59", "gator59.csv", "gator59_length", "gator59"),
        ("womenlf", "womenlf.csv", "womenlf_main", "womenlf"),
    ] {
        let plan = plan(&toml_of(&json(&format!("{folder}/{name}.json"))));
        let model = fitted(&plan, &Table::read(&format!("{folder}/{data}"))).model;
        let certified = &certified["fits"][key];
        let log_likelihood = model.fit.as_ref().unwrap().log_likelihood;
        assert_close(key, log_likelihood, digits(&certified["log_likelihood"]), 0.0, 1e-14);
        let all = coefficients(&model, 0.95).unwrap();
        for wanted in certified["parameters"].as_array().unwrap() {
            let category = wanted["category"].as_str().unwrap().trim_end_matches('s');
            let term = wanted["column"].as_str().unwrap().replace("(Intercept)", INTERCEPT);
            let found =
                all.iter().find(|e| e.category.trim_end_matches('s') == category && e.term == term).unwrap();
            let what = format!("{key} {category} {term}");
            // Rounding errors of the sums times the condition of the information.
            assert_close(&what, found.estimate, digits(&wanted["estimate"]), 0.0, 1e-12);
            assert_close(&what, found.uncertainty.unwrap().standard_error, digits(&wanted["se"]), 0.0, 1e-12);
        }
    }
}
