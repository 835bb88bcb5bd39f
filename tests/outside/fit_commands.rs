//! What goes with a fit: report, analysis, signature, SQL.

use std::fs;
use std::process::Stdio;
use std::time::Duration;

use serde_json::Value;

use crate::fits::{fit, plan_of};
use crate::support::{data, json_file, kilter, kilter_well, program, write};

/// A folder with a data set and its plan.
fn prepared(set: &str) -> tempfile::TempDir {
    let folder = tempfile::tempdir().expect("a folder");
    let table = format!("{set}.csv");
    fs::copy(data(set).join(&table), folder.path().join(&table)).expect("a copy");
    write(&folder.path().join("plan.toml"), plan_of(set));
    folder
}

/// The page loads nothing from outside, and text of the plan stays text.
#[test]
fn the_report_stands_alone_and_keeps_markup_as_text() {
    let folder = prepared("hsb2");
    let purpose = "purpose = \"<script>alert(1)</script> & more\"\n";
    write(&folder.path().join("plan.toml"), &(purpose.to_owned() + plan_of("hsb2")));
    kilter_well(folder.path(), &["fit", "plan.toml", "--report", "report.html", "--diagnose"]);
    let page = fs::read_to_string(folder.path().join("report.html")).expect("a report");
    for outside in ["http://", "https://", "src=", "@import", "url("] {
        let found = page.replace("http://www.w3.org/2000/svg", "");
        assert!(!found.contains(outside), "{outside} in the report");
    }
    assert!(!page.contains("<script") && page.contains("&lt;script&gt;"));
    for part in
        ["worth", "curves", "coefficients", "fields", "effects", "mix", "calibration", "checks", "origin"]
    {
        assert!(page.contains(&format!("<h2 id=\"{part}\">")), "no section {part}");
    }
    assert!(page.contains("var(--series-2)") && page.contains("Separate fits"));
    assert!(!page.contains("NaN") && !page.contains("inf<"), "numbers that are none");
}

/// Likelihood ratios and Wald tests of the published example, as `show` and the analysis give them.
#[test]
fn field_tests_agree_between_analysis_and_model_file() {
    let folder = prepared("hsb2");
    kilter_well(folder.path(), &["fit", "plan.toml", "-o", "m.json", "--analysis", "a.json"]);
    let analysis = json_file(&folder.path().join("a.json"));
    let shown: Value =
        serde_json::from_str(&kilter_well(folder.path(), &["show", "m.json", "--json"])).expect("JSON");
    let expected = json_file(&data("hsb2").join("hsb2_ses_write.json"));
    for (place, field) in ["ses", "write"].into_iter().enumerate() {
        let test = &analysis["field_tests"][place];
        assert_eq!(test["tested"]["field"], field);
        let wald = |document: &Value| {
            document["field_tests"][place]["wald"]["statistic"].as_f64().expect("a statistic")
        };
        assert!((wald(&analysis) / wald(&shown) - 1.0).abs() < 1e-9, "{field}");
        let wanted = &expected["expected"]["terms"][field];
        for (key, name) in [("likelihood_ratio", "lr_chi2"), ("wald", "wald_chi2")] {
            let found = test[key]["statistic"].as_f64().expect("a statistic");
            let wanted = wanted[name].as_f64().expect("a statistic");
            assert!((found - wanted).abs() < 1e-6, "{field}: {key} {found}, expected {wanted}");
        }
    }
    let text = kilter_well(folder.path(), &["fit", "plan.toml", "-o", "m.json", "--analysis", "-"]);
    assert!(text.contains("Average marginal effects") && text.contains("Nagelkerke"), "{text}");
    assert_eq!(kilter(folder.path(), &["fit", "plan.toml", "--diagnose"]).code, 64);
}

#[test]
fn a_signed_file_is_told_from_one_that_was_changed_or_signed_by_another() {
    let folder = tempfile::tempdir().expect("a folder");
    let at = folder.path();
    fit(at, "womenlf", plan_of("womenlf"));
    for key in ["ours", "theirs"] {
        kilter_well(at, &["sign", "--new-key", "--key", key]);
    }
    // A key is never written over.
    assert_eq!(kilter(at, &["sign", "--new-key", "--key", "ours"]).code, 2);
    assert_eq!(kilter(at, &["check", "out.model.json", "--key", "ours.public"]).code, 1);
    kilter_well(at, &["sign", "out.model.json", "--key", "ours"]);
    assert!(kilter_well(at, &["check", "out.model.json", "--key", "ours.public"]).contains("signed"));
    let run = kilter(at, &["check", "out.model.json", "--key", "theirs.public"]);
    assert!(run.code == 1 && run.out.contains("not with"), "{}", run.out);
    let text = fs::read_to_string(at.join("out.model.json")).expect("a model file");
    write(&at.join("changed.json"), &text.replacen("-0.", "-1.", 1));
    let run = kilter(at, &["check", "changed.json", "--key", "ours.public"]);
    assert!(run.code == 1 && run.out.contains("`signature`"), "{}", run.out);
    assert_eq!(kilter(at, &["check", "out.model.json", "--key", "absent"]).code, 64);
}

#[test]
fn sql_names_every_category() {
    let folder = tempfile::tempdir().expect("a folder");
    fit(folder.path(), "womenlf", plan_of("womenlf"));
    let query = kilter_well(folder.path(), &["sql", "out.model.json", "--from", "households"]);
    for part in ["\"p_not.work\"", "\"p_parttime\"", "\"p_fulltime\"", "\"households\""] {
        assert!(query.contains(part), "{part} in {query}");
    }
    let expression = kilter_well(folder.path(), &["sql", "out.model.json"]);
    assert!(!expression.contains("SELECT") && expression.contains("\"hincome\""), "{expression}");
}

/// A fit that is interrupted at any moment leaves no model file, or a whole one.
#[test]
fn an_interrupted_fit_leaves_nothing_half_written() {
    let folder = prepared("hsb2");
    let at = folder.path();
    let mut whole = 0;
    for milliseconds in [1, 5, 10, 20, 30, 40, 60, 80, 120, 200, 400] {
        let mut child = program(at)
            .args(["fit", "plan.toml", "-o", "m.json", "--report", "r.html"])
            .stdout(Stdio::null())
            .stderr(Stdio::null())
            .spawn()
            .expect("starts");
        std::thread::sleep(Duration::from_millis(milliseconds));
        let interrupt = ["-s", "INT", &child.id().to_string()].map(str::to_owned);
        // It may have ended by itself.
        let _ = std::process::Command::new("kill").args(interrupt).stderr(Stdio::null()).status();
        child.wait().expect("ended");
        if at.join("m.json").exists() {
            kilter_well(at, &["check", "m.json"]);
            whole += 1;
            fs::remove_file(at.join("m.json")).expect("removed");
        }
    }
    assert!(whole < 11, "every fit was faster than its interruption");
}
