//! Bias-reduced fits.

use kilter_fit::analysis::Tested;
use serde_json::Value;

use crate::support::{
    G, Table, X1, X2, analysed, assert_all_close, assert_close, coefficients, fitted, json, numbers, plan,
    standard_errors, try_fit, worked_plan,
};

const ALWAYS: &str = "[fit]\nbias_reduction = \"always\"\n";

/// Reference values of an independent maximisation, three of the six also by R's brglm2.
#[test]
fn fits_agree_with_the_reference() {
    let expected = json("iris/bias_reduced.json");
    // The stated tolerance of the reference, relative to standard errors for the estimates.
    let tolerance = 1e-6;
    let cases = expected["cases"].as_array().unwrap();
    assert_eq!(cases.len(), 6);
    for case in cases {
        let id = case["id"].as_str().unwrap();
        let file = case["data"]["file"].as_str().unwrap().trim_start_matches("data/");
        let table = Table::read(&format!("{}/{file}", file.trim_end_matches(".csv")));
        let model = fitted(&plan(&toml_of(&case["model"])), &table).model;
        let terms = model.terms.len();
        let (found, errors) = (coefficients(&model), standard_errors(&model));
        let compared: Vec<&str> = model.compared_categories().collect();
        for wanted in case["coefficients"].as_array().unwrap() {
            let column = wanted["column"].as_str().unwrap().replace("(Intercept)", "(intercept)");
            let block = compared.iter().position(|c| wanted["category"] == **c).unwrap();
            let index = block * terms + model.terms.iter().position(|term| *term == column).unwrap();
            let (estimate, error) = (wanted["estimate"].as_f64().unwrap(), wanted["se"].as_f64().unwrap());
            assert_close(&format!("{id} {column}"), found[index], estimate, tolerance * error, tolerance);
            assert_close(&format!("{id} {column}"), errors[index], error, 0.0, tolerance);
        }
    }
}

fn toml_of(model: &Value) -> String {
    let count = model["weights"].as_str().map_or_else(String::new, |count| format!("count = \"{count}\"\n"));
    let mut toml = format!(
        "name = \"reference\"\n[data]\nfiles = [\"x\"]\n{count}[outcome]\nfield = {}\ncategories = {}\n{ALWAYS}",
        model["outcome"], model["categories"]
    );
    for term in model["terms"].as_array().unwrap() {
        let field = match term["type"].as_str().unwrap() {
            "numeric" => format!("[[field]]\nname = {}\nkind = \"number\"\n", term["name"]),
            _ => format!(
                "[[field]]\nname = {}\nkind = \"levels\"\nlevels = {}\n",
                term["name"], term["levels"]
            ),
        };
        toml.push_str(&field);
    }
    for pair in model["interactions"].as_array().into_iter().flatten() {
        let interaction = format!("[[interaction]]\nfields = {pair}\n");
        toml.push_str(&interaction);
    }
    toml
}

/// Nine numbers that separate three categories completely.
#[test]
fn complete_separation_has_an_estimate() {
    let expected = json("worked/fitting.json")["firth_ridge_gof_iia_terms"].clone();
    let table = Table::parse("y,x1\na,1\na,2\na,3\nb,4\nb,5\nb,6\nc,7\nc,8\nc,9");
    let model = fitted(&worked_plan("", &format!("{X1}{ALWAYS}")), &table).model;
    assert_all_close("beta", &coefficients(&model), &numbers(&expected["firth D3 beta"]), 0.0, 1e-8);
    assert_all_close("errors", &standard_errors(&model), &numbers(&expected["se#3"]), 0.0, 1e-8);
}

/// Closed forms: a saturated table is fitted as with half a case more in each cell, and so is the
/// mix of three categories of which one has its only case elsewhere.
#[test]
fn saturated_tables_are_fitted_with_half_a_case_more() {
    let table = Table::parse("y,x,n\na,0,10\nb,0,5\nc,0,5\na,1,4\nb,1,12\nc,1,8");
    let toml = format!(
        "name = \"t\"\n[data]\nfiles = [\"x\"]\ncount = \"n\"\n[outcome]\nfield = \"y\"\nreference = \"a\"\n{ALWAYS}\
         [[field]]\nname = \"x\"\nkind = \"flag\""
    );
    let model = fitted(&plan(&toml), &table).model;
    let at_0 = (5.5f64 / 10.5).ln();
    let wanted = [at_0, (12.5f64 / 4.5).ln() - at_0, at_0, (8.5f64 / 4.5).ln() - at_0];
    assert_all_close("beta", &coefficients(&model), &wanted, 0.0, 1e-8);
}

/// Only where maximum likelihood has no estimate is the bias reduced; the empty cell gets a finite
/// coefficient, and its field is tested by the adjusted likelihoods.
#[test]
fn separation_can_switch_it_on() {
    let tiny = Table::read("worked/tiny.csv");
    let toml = format!("{X1}{X2}{G}[fit]\nbias_reduction = \"if-separated\"\n");
    let sound = fitted(&worked_plan("", &toml), &tiny);
    assert!(sound.warnings.is_empty() && sound.model.fit.unwrap().log_likelihood > -53.23);
    let (y, g) = (tiny.column("y"), tiny.column("g"));
    let mut separated = tiny.clone();
    separated.rows.retain(|row| row[y] != "b" || row[g] != "m");
    assert!(try_fit(&worked_plan("", &format!("{X1}{X2}{G}")), &separated).is_err());
    let (fit, tests) = analysed(&worked_plan("", &toml), &separated, |mut analysis| {
        let tests = analysis.field_tests().unwrap();
        (analysis.fitted, tests)
    });
    assert!(fit.warnings.iter().any(|warning| warning.contains("bias-reduced")), "{:?}", fit.warnings);
    assert_close("empty cell", fit.model.coefficients["b"][4], -2.368_536_136_7, 0.0, 1e-6);
    let of_g = tests.iter().find(|test| test.tested == Tested::Field("g".into())).unwrap();
    assert_eq!(of_g.degrees_of_freedom, 4);
    assert!(of_g.likelihood_ratio.unwrap().p < 0.2 && of_g.wald.is_some());
}
