//! Penalised fits.

use kilter_fit::inference::coefficients as estimates;
use kilter_fit::{FitError, Fitted};
use serde_json::Value;

use crate::support::{
    G, Table, X1, X2, assert_all_close, assert_close, coefficients, fitted, json, numbers, plan,
    standard_errors, try_fit, worked_plan,
};

/// The worked numbers are given to this relative precision.
const DIGITS: f64 = 1e-8;

fn expected() -> Value {
    json("worked/fitting.json")["firth_ridge_gof_iia_terms"].clone()
}

fn penalised(fields: &str, ridge: &str) -> Fitted {
    fitted(&worked_plan("", &format!("{fields}[fit]\nridge = {ridge}")), &Table::read("worked/tiny.csv"))
}

/// Slopes per standard deviation of x1 and x2, of a fit with `terms` terms.
fn slopes(all: &[f64], terms: usize) -> Vec<f64> {
    let scale = [1.442_486_279_541_912, 7.210_794_377_567_256, 1.0, 1.0];
    let block = |block: &[f64]| block[1..].iter().zip(scale).map(|(b, s)| b * s).collect::<Vec<_>>();
    all.chunks_exact(terms).flat_map(block).collect()
}

fn without_intercepts(all: &[f64], terms: usize) -> Vec<f64> {
    all.chunks_exact(terms).flat_map(|block| block[1..].to_vec()).collect()
}

/// Two numbers; the values are those of glmnet, as differences of its categories.
#[test]
fn numbers_are_penalised_per_standard_deviation() {
    let expected = expected();
    for (ridge, beta, effective, errors) in [
        ("0.02", "ridge num lam=0.02", "edf total, per coef", "se post"),
        ("0.1", "ridge num lam=0.1", "edf total, per coef#2", "se post#2"),
    ] {
        let fit = penalised(&format!("{X1}{X2}"), ridge);
        let wanted = without_intercepts(&numbers(&expected[beta]), 3);
        assert_all_close(ridge, &slopes(&coefficients(&fit.model), 3), &wanted, 0.0, DIGITS);
        let wanted = without_intercepts(&numbers(&expected[errors]), 3);
        assert_all_close(ridge, &slopes(&standard_errors(&fit.model), 3), &wanted, 0.0, DIGITS);
        let figures = fit.model.fit.as_ref().unwrap();
        assert_eq!(figures.ridge, ridge.parse::<f64>().unwrap());
        let wanted = numbers(&expected[effective]);
        assert_close("effective", figures.effective_parameters.unwrap(), wanted[0], 0.0, DIGITS);
        let found = &fit.ridge.as_ref().unwrap().effective_parameters;
        // The intercepts, then x1 and x2 over both categories.
        let by_field = [wanted[1] + wanted[4], wanted[2] + wanted[5], wanted[3] + wanted[6]];
        assert_all_close("by field", found, &by_field, 0.0, DIGITS);
    }
}

/// With levels: log-likelihood, effective numbers and both kinds of errors.
#[test]
fn levels_are_penalised_alike() {
    let expected = expected();
    let fit = penalised(&format!("{X1}{X2}{G}"), "0.05");
    let wanted = without_intercepts(&numbers(&expected["ridge full .05"]), 5);
    assert_all_close("beta", &slopes(&coefficients(&fit.model), 5), &wanted, 0.0, DIGITS);
    let wanted = without_intercepts(&numbers(&expected["se post#3"]), 5);
    assert_all_close("errors", &slopes(&standard_errors(&fit.model), 5), &wanted, 0.0, DIGITS);
    let figures = fit.model.fit.as_ref().unwrap();
    assert_close("ll", figures.log_likelihood, expected["ll"].as_f64().unwrap(), 0.0, 1e-11);
    assert_close("AIC", figures.aic, 2.0 * (54.379_290_635_083_32 + 7.800_375_103_590_062), 0.0, 1e-10);
    let ridge = fit.ridge.unwrap();
    let wanted = numbers(&expected["edf by field (int,x1,x2,g)"]);
    assert_all_close("effective", &ridge.effective_parameters, &wanted, 0.0, DIGITS);
    let found: Vec<f64> =
        ["b", "c"].iter().flat_map(|category| ridge.sampling_errors[*category].clone()).collect();
    let wanted = without_intercepts(&numbers(&expected["se freq"]), 5);
    assert_all_close("sampling errors", &slopes(&found, 5), &wanted, 0.0, DIGITS);
    // Estimates that are pulled towards 0 are not tested for being 0.
    assert!(
        estimates(&fit.model, 0.9).unwrap().iter().all(|e| e.uncertainty.unwrap().significance.is_none())
    );
}

/// Probabilities depend neither on the reference category nor on the reference level.
#[test]
fn references_do_not_matter() {
    let table = Table::read("worked/tiny.csv");
    let toml = |category: &str, level: &str| {
        format!(
            "name = \"worked\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = \"y\"\nreference = \"{category}\"\n{X1}\
             [[field]]\nname = \"g\"\nkind = \"levels\"\nreference = \"{level}\"\n[fit]\nridge = 0.03"
        )
    };
    let probabilities = |category, level| {
        let model = fitted(&plan(&toml(category, level)), &table).model;
        let scorer = kilter_model::Scorer::new(&model).unwrap();
        scorer.score(&table.batch(&scorer.column_specs())).probabilities
    };
    let here = probabilities("a", "k");
    assert_all_close("level", &probabilities("a", "m"), &here, 1e-11, 0.0);
    assert_all_close("category", &probabilities("c", "l"), &here, 1e-11, 0.0);
}

/// Reference values of scikit-learn and glmnet; on the penguins maximum likelihood has no estimate.
#[test]
fn fits_agree_with_the_reference() {
    for (folder, data) in [("hsb2", "hsb2.csv"), ("penguins", "penguins.csv")] {
        let expected = json(&format!("{folder}/ridge_{folder}.json"));
        let model = &expected["model"];
        let names: Vec<&str> =
            model["columns"].as_array().unwrap()[1..].iter().map(|n| n.as_str().unwrap()).collect();
        let fields: String =
            names.iter().map(|n| format!("[[field]]\nname = \"{n}\"\nkind = \"number\"\n")).collect();
        for expected in
            expected["expected"].as_array().unwrap().iter().filter(|e| e["penalty"] == "symmetric")
        {
            let fit = fitted(
                &plan(&format!(
                    "name = \"r\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = {}\ncategories = {}\n{fields}[fit]\nridge = {}",
                    model["outcome"],
                    model["categories"],
                    expected["lambda_"].as_f64().unwrap() / model["rows"].as_f64().unwrap()
                )),
                &Table::read(&format!("{folder}/{data}")),
            );
            let what = format!("{folder} {}", expected["lambda_"]);
            let log_likelihood = fit.model.fit.as_ref().unwrap().log_likelihood;
            assert_close(&what, log_likelihood, expected["loglik"].as_f64().unwrap(), 0.0, 1e-9);
            for (category, wanted) in expected["contrasts_with_reference"].as_object().unwrap() {
                for (index, name) in names.iter().enumerate() {
                    let deviation = model["feature_transform"]["sd"][name].as_f64().unwrap();
                    let found = fit.model.coefficients[category][index + 1] * deviation;
                    assert_close(&what, found, wanted[name].as_f64().unwrap(), 1e-6, 0.0);
                }
            }
        }
    }
}

/// Columns that others determine stay in a penalised fit; only a constant goes.
#[test]
fn only_constants_are_left_out() {
    let mut table = Table::read("worked/tiny.csv");
    table.header.extend(["double", "same"].map(String::from));
    for row in &mut table.rows {
        let x1: f64 = row[2].parse().unwrap();
        row.push(format!("{}", 1.0 - 2.0 * x1));
        row.push("7.3".into());
    }
    let number = |name: &str| format!("[[field]]\nname = \"{name}\"\nkind = \"number\"\n");
    let fields = format!("{X1}{}{}[fit]\nridge = 0.1", number("double"), number("same"));
    let fit = fitted(&worked_plan("", &fields), &table);
    assert_eq!(fit.aliased, ["same = 7.3"]);
    // Twins share the effect: per standard deviation both have the same size.
    let b = &fit.model.coefficients["c"];
    assert_close("twins", b[1], -2.0 * b[2], 0.0, 1e-9);
}

#[test]
fn cross_validation_chooses_and_reports() {
    let table = Table::read("hsb2/hsb2.csv");
    let toml = "name = \"p\"\n[data]\nfiles = [\"x\"]\nid = \"id\"\n[outcome]\nfield = \"prog\"\n\
                [[field]]\nname = \"write\"\nkind = \"number\"\n[[field]]\nname = \"math\"\nkind = \"number\"\n\
                [fit]\nridge = \"cross-validate\"";
    let fit = fitted(&plan(toml), &table);
    let ridge = fit.ridge.unwrap();
    let validation = ridge.cross_validation.unwrap();
    assert_eq!((validation.folds, validation.candidates.len()), (5, 25));
    assert_eq!(fit.model.fit.unwrap().ridge, validation.chosen);
    assert!(validation.chosen >= validation.smallest_loss);
    // The losses lie between that of the mix and nothing.
    assert!(validation.candidates.iter().all(|c| c.loss > 0.5 && c.loss < 1.1 && c.error > 0.0));
    let small = Table { rows: table.rows[..20].to_vec(), ..table };
    let error = try_fit(&plan(toml), &small).unwrap_err();
    assert!(matches!(error, FitError::TooFewForFolds { folds: 5, .. }), "{error}");
}
