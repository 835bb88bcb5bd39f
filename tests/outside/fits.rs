//! Published examples, fitted by the program and held against published and independently
//! computed values. Each data set's folder names its source.

use std::path::Path;

use serde_json::Value;

use crate::support::{data, json_file, kilter_well, write};

/// One example: its plan, and the file of expected values.
struct Example {
    set: &'static str,
    expected: &'static str,
    plan: &'static str,
}

const EXAMPLES: [Example; 3] = [
    Example {
        set: "gator59",
        expected: "gator59_length.json",
        plan: r#"
name = "food"
[data]
files = ["gator59.csv"]
[outcome]
field = "food"
reference = "Other"
categories = ["Other", "Fish", "Invertebrate"]
[[field]]
name = "length"
kind = "number"
unit = "m"
"#,
    },
    Example {
        set: "hsb2",
        expected: "hsb2_ses_write.json",
        plan: r#"
name = "programme"
[data]
files = ["hsb2.csv"]
id = "id"
[outcome]
field = "prog"
reference = "academic"
[[field]]
name = "ses"
kind = "levels"
levels = ["low", "middle", "high"]
reference = "low"
[[field]]
name = "write"
kind = "number"
"#,
    },
    Example {
        set: "womenlf",
        expected: "womenlf_main.json",
        plan: r#"
name = "work"
[data]
files = ["womenlf.csv"]
[outcome]
field = "partic"
reference = "not.work"
categories = ["not.work", "parttime", "fulltime"]
[[field]]
name = "hincome"
kind = "number"
[[field]]
name = "children"
kind = "levels"
reference = "absent"
"#,
    },
];

/// Fits an example's plan in a folder of its own and gives the model file.
pub(crate) fn fit(folder: &Path, set: &str, plan: &str) -> Value {
    for entry in std::fs::read_dir(data(set)).expect("the data set") {
        let path = entry.expect("an entry").path();
        std::fs::copy(&path, folder.join(path.file_name().expect("a name"))).expect("copied");
    }
    write(&folder.join("plan.toml"), plan);
    kilter_well(folder, &["fit", "plan.toml", "-o", "out.model.json"]);
    json_file(&folder.join("out.model.json"))
}

/// The plan of an example.
pub(crate) fn plan_of(set: &str) -> &'static str {
    EXAMPLES.iter().find(|example| example.set == set).expect("an example").plan
}

fn number(value: &Value) -> f64 {
    value.as_f64().unwrap_or_else(|| panic!("{value} is no number"))
}

/// Tolerances as the expected files state them: coefficients 1e-7 absolute or relative, standard
/// errors 1e-6 relative, log-likelihoods 1e-7.
#[test]
fn coefficients_errors_and_likelihood_equal_independent_values() {
    for example in EXAMPLES {
        let folder = tempfile::tempdir().expect("a folder");
        let model = fit(folder.path(), example.set, example.plan);
        let expected = json_file(&data(example.set).join(example.expected));
        let columns = expected["model"]["columns"].as_array().expect("columns");
        let values = &expected["expected"];
        for (key, wanted) in
            [("log_likelihood", "loglik"), ("log_likelihood_null", "loglik_null"), ("aic", "aic")]
        {
            let (found, wanted) = (number(&model["fit"][key]), number(&values[wanted]));
            assert!((found - wanted).abs() < 1e-7, "{}: {key} {found}, expected {wanted}", example.set);
        }
        let errors = standard_errors(folder.path());
        for (pair, terms) in values["coefficients"].as_object().expect("coefficients") {
            let category = pair.split(" vs ").next().expect("a category");
            for (place, column) in columns.iter().enumerate() {
                let wanted = &terms[column.as_str().expect("a name")];
                let found = number(&model["coefficients"][category][place]);
                let estimate = number(&wanted["estimate"]);
                assert!(
                    (found - estimate).abs() <= 1e-7 * estimate.abs().max(1.0),
                    "{} {pair} {column}: {found}, expected {estimate}",
                    example.set
                );
                let error = number(&wanted["std_error"]);
                let found = errors.get(category, place);
                assert!(
                    (found / error - 1.0).abs() < 1e-6,
                    "{} {pair} {column}: standard error {found}, expected {error}",
                    example.set
                );
            }
        }
    }
}

/// What the books and pages print, to their printed digits or the tolerance that the source's
/// own stopping rule asks for; see `published` in the expected files.
#[test]
fn published_coefficients_are_met() {
    for example in EXAMPLES {
        let folder = tempfile::tempdir().expect("a folder");
        let model = fit(folder.path(), example.set, example.plan);
        let expected = json_file(&data(example.set).join(example.expected));
        let mut checked = 0;
        for published in expected["published"].as_array().expect("published values") {
            let what = published["what"].as_str().unwrap_or_default();
            if what == "logLik" {
                let (found, wanted) =
                    (number(&model["fit"]["log_likelihood"]), number(&published["published"]));
                assert!((found - wanted).abs() < number(&published["tolerance_used"]), "{what}: {found}");
            }
            let Some((category, place)) = place_of(what, &model) else { continue };
            let found = number(&model["coefficients"][category][place]);
            let wanted = number(&published["published"]);
            let tolerance = number(&published["tolerance_used"]);
            assert!((found - wanted).abs() <= tolerance, "{what}: {found}, published {wanted}");
            checked += 1;
        }
        assert!(checked > 0, "{}: no published coefficient was found", example.set);
    }
}

/// Category and term of a published value such as `slope Fish vs Other` or `general write`.
fn place_of<'a>(what: &'a str, model: &'a Value) -> Option<(&'a str, usize)> {
    if what.starts_with("SE ") {
        return None;
    }
    let coefficients = model["coefficients"].as_object()?;
    let category = coefficients.keys().find(|category| what.split(' ').any(|word| word == *category))?;
    let terms = model["terms"].as_array()?;
    let word = |wanted: &str| what.split(' ').any(|word| word == wanted);
    let place = terms.iter().position(|term| {
        let term = term.as_str().unwrap_or_default();
        match term {
            "(intercept)" => word("intercept") || word("(Intercept)"),
            "length" => word("slope"),
            term => word(term),
        }
    })?;
    Some((category, place))
}

struct StandardErrors(Value);

impl StandardErrors {
    fn get(&self, category: &str, term: usize) -> f64 {
        number(&self.0["categories"][category][term]["standard_error"])
    }
}

/// Standard errors as `kilter show --json` gives them.
fn standard_errors(folder: &Path) -> StandardErrors {
    let shown = kilter_well(folder, &["show", "out.model.json", "--json"]);
    StandardErrors(serde_json::from_str(&shown).expect("JSON"))
}

/// Another reference category: same log-likelihood, coefficients are the differences.
#[test]
fn the_reference_category_changes_nothing() {
    let folder = tempfile::tempdir().expect("a folder");
    let model = fit(folder.path(), "hsb2", plan_of("hsb2"));
    let other_folder = tempfile::tempdir().expect("a folder");
    let plan = plan_of("hsb2").replace("reference = \"academic\"", "reference = \"vocational\"");
    let other = fit(other_folder.path(), "hsb2", &plan);
    let likelihood = |model: &Value| number(&model["fit"]["log_likelihood"]);
    assert!((likelihood(&model) - likelihood(&other)).abs() < 1e-9);
    for term in 0..4 {
        let difference = number(&model["coefficients"]["general"][term])
            - number(&model["coefficients"]["vocational"][term]);
        let refitted = number(&other["coefficients"]["general"][term]);
        assert!((difference - refitted).abs() < 1e-8, "term {term}: {difference} {refitted}");
    }
    let contrast: Value = serde_json::from_str(&kilter_well(
        folder.path(),
        &["contrast", "out.model.json", "general", "vocational", "--json"],
    ))
    .expect("JSON");
    let shown = standard_errors(other_folder.path());
    for term in 0..4 {
        let from_contrast = number(&contrast["terms"][term]["standard_error"]);
        let refitted = shown.get("general", term);
        assert!((from_contrast / refitted - 1.0).abs() < 1e-7, "term {term}: {from_contrast} {refitted}");
    }
}

/// A model without a finite optimum is explained and not written.
#[test]
fn separated_data_make_no_model_file() {
    let folder = tempfile::tempdir().expect("a folder");
    let rows: String =
        (1..=30).map(|x| format!("{x},{}\n", ["low", "middle", "high"][(x - 1) / 10])).collect();
    write(&folder.path().join("rows.csv"), &format!("x,y\n{rows}"));
    let plan = r#"
name = "separated"
[data]
files = ["rows.csv"]
[outcome]
field = "y"
reference = "low"
[[field]]
name = "x"
kind = "number"
"#;
    write(&folder.path().join("plan.toml"), plan);
    let run = crate::support::kilter(folder.path(), &["fit", "plan.toml", "-o", "out.model.json"]);
    assert_eq!(run.code, 2, "{}", run.err);
    assert!(run.err.contains("separat") && run.err.contains('x'), "{}", run.err);
    assert!(!folder.path().join("out.model.json").exists());
}
