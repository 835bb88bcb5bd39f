//! Commands, their exit codes and their errors.

use std::fs;

use serde_json::Value;

use crate::fits::{fit, plan_of};
use crate::support::{json_file, kilter, kilter_well, write};

#[test]
fn wrong_arguments_end_with_64() {
    let folder = tempfile::tempdir().expect("a folder");
    for arguments in [&["fti"][..], &["fit"], &["score", "--nothing"], &["schema", "other"], &[]] {
        assert_eq!(kilter(folder.path(), arguments).code, 64, "{arguments:?}");
    }
    assert_eq!(kilter(folder.path(), &["--help"]).code, 0);
    assert_eq!(kilter(folder.path(), &["fit", "--help"]).code, 0);
}

#[test]
fn a_wrong_plan_names_the_key_and_touches_nothing() {
    let folder = tempfile::tempdir().expect("a folder");
    let plan = plan_of("womenlf");
    for (wrong, right, part) in [
        ("knd = \"number\"", "kind = \"number\"", "knd"),
        ("kind = \"numbers\"", "kind = \"number\"", "numbers"),
        ("reference = \"working\"", "reference = \"not.work\"", "working"),
    ] {
        write(&folder.path().join("plan.toml"), &plan.replace(right, wrong));
        let run = kilter(folder.path(), &["fit", "plan.toml"]);
        assert_eq!(run.code, 64, "{wrong}: {}", run.err);
        assert!(run.err.contains(part) && run.err.starts_with("error: "), "{wrong}: {}", run.err);
    }
    assert_eq!(kilter(folder.path(), &["fit", "absent.toml"]).code, 64);
}

#[test]
fn a_fit_without_its_data_fails_by_name() {
    let folder = tempfile::tempdir().expect("a folder");
    write(&folder.path().join("plan.toml"), plan_of("womenlf"));
    let run = kilter(folder.path(), &["fit", "plan.toml"]);
    assert_eq!(run.code, 2, "{}", run.err);
    assert!(run.err.contains("womenlf.csv"), "{}", run.err);
    write(&folder.path().join("womenlf.csv"), "partic,hincome,childern\nnot.work,1,absent\n");
    let run = kilter(folder.path(), &["fit", "plan.toml"]);
    assert_eq!(run.code, 2);
    assert!(run.err.contains("children") && run.err.contains("childern"), "{}", run.err);
}

/// Numbers of a scored table, by name of the column and row.
fn scored(folder: &std::path::Path, options: &[&str]) -> Vec<std::collections::BTreeMap<String, String>> {
    let arguments = [&["score", "out.model.json", "womenlf.csv"], options].concat();
    let table = kilter_well(folder, &arguments);
    let mut lines = table.lines();
    let head: Vec<String> = lines.next().expect("a head").split(',').map(str::to_owned).collect();
    lines.map(|line| head.iter().cloned().zip(line.split(',').map(str::to_owned)).collect()).collect()
}

/// Intervals enclose their probability, and the parts of an explanation sum to the log-odds.
#[test]
fn a_scored_table_may_hold_intervals_explanations_or_the_top_alone() {
    let folder = tempfile::tempdir().expect("a folder");
    let at = folder.path();
    fit(at, "womenlf", plan_of("womenlf"));
    let number = |row: &std::collections::BTreeMap<String, String>, name: &str| -> f64 {
        row[name].parse().unwrap_or_else(|_| panic!("{name} is no number in {row:?}"))
    };
    let rows = scored(at, &["--intervals", "--explain", "fulltime,parttime"]);
    assert_eq!(rows.len(), 263);
    for row in &rows {
        for category in ["not.work", "parttime", "fulltime"] {
            let [p, low, high] = ["", "_low", "_high"].map(|end| number(row, &format!("p_{category}{end}")));
            assert!(0.0 < low && low < p && p < high && high < 1.0, "{row:?}");
        }
        let terms = ["(intercept)", "hincome", "children=present"];
        let sum: f64 = terms.map(|term| number(row, &format!("explain_{term}"))).iter().sum();
        let odds = (number(row, "p_fulltime") / number(row, "p_parttime")).ln();
        assert!((sum - odds).abs() < 1e-9, "{sum} {odds}");
    }
    let narrow = scored(at, &["--intervals=0.5"]);
    assert!(number(&narrow[0], "p_fulltime_low") > number(&rows[0], "p_fulltime_low"));
    let top = scored(at, &["--top-only"]);
    assert!(top[0].contains_key("top") && !top[0].contains_key("p_fulltime"));
    for wrong in
        [&["--explain", "fulltime,partime"][..], &["--intervals=1.5"], &["--top-only", "--intervals"]]
    {
        let run = kilter(at, &[&["score", "out.model.json", "womenlf.csv", "-o", "s.csv"], wrong].concat());
        assert_eq!(run.code, 64, "{wrong:?}: {}", run.err);
        assert!(!at.join("s.csv").exists());
    }
}

#[test]
fn check_finds_a_changed_digit() {
    let folder = tempfile::tempdir().expect("a folder");
    fit(folder.path(), "womenlf", plan_of("womenlf"));
    assert!(kilter_well(folder.path(), &["check", "out.model.json"]).contains("sound"));
    let text = fs::read_to_string(folder.path().join("out.model.json")).expect("a model file");
    write(&folder.path().join("changed.json"), &text.replacen("-0.", "-1.", 1));
    let run = kilter(folder.path(), &["check", "out.model.json", "changed.json"]);
    assert_eq!(run.code, 1, "{}", run.out);
    assert!(run.out.contains("changed.json: `fingerprint`"), "{}", run.out);
    assert_eq!(kilter(folder.path(), &["check", "absent.json"]).code, 2);
    assert_eq!(kilter(folder.path(), &["publish", "changed.json"]).code, 64, "without a configuration");
}

#[test]
fn schemas_are_schemas_and_what_is_written_follows_them() {
    let folder = tempfile::tempdir().expect("a folder");
    fit(folder.path(), "gator59", plan_of("gator59"));
    for of in ["model", "plan", "config"] {
        let schema: Value = serde_json::from_str(&kilter_well(folder.path(), &["schema", of])).expect("JSON");
        assert_eq!(schema["$schema"], "https://json-schema.org/draft/2020-12/schema", "{of}");
        let validator = jsonschema::validator_for(&schema).expect("a schema");
        if of == "model" {
            let model = json_file(&folder.path().join("out.model.json"));
            let fault = validator.iter_errors(&model).next().map(|fault| fault.to_string());
            assert_eq!(fault, None);
        }
    }
}

#[test]
fn scoring_refuses_rows_and_goes_on() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    fit(folder, "hsb2", plan_of("hsb2"));
    write(
        &folder.join("rows.csv"),
        "id,write,ses,note\n1,50,low,a\n2,fifty,low,b\n3,,low,c\n4,50,top,d\n5,61.5,high,\"e, f\"\n",
    );
    let run = kilter(
        folder,
        &["score", "out.model.json", "rows.csv", "-o", "scored.csv", "--refused", "refused.csv"],
    );
    assert_eq!(run.code, 1, "{}", run.err);
    let scored = fs::read_to_string(folder.join("scored.csv")).expect("scored");
    assert_eq!(scored.lines().count(), 3, "{scored}");
    let refused = fs::read_to_string(folder.join("refused.csv")).expect("refused");
    let expected = "id,write,ses,note,line,field,reason\n\
                    2,fifty,low,b,3,write,`fifty` is not a number\n\
                    3,,low,c,4,write,is missing\n\
                    4,50,top,d,5,ses,level 'top' was not in the fit\n";
    assert_eq!(refused, expected);

    write(&folder.join("columns.csv"), "id,wirte,ses\n1,50,low\n");
    let run = kilter(folder, &["score", "out.model.json", "columns.csv", "-o", "nothing.csv"]);
    assert_eq!(run.code, 2);
    assert!(run.err.contains("`write`") && run.err.contains("wirte"), "{}", run.err);
    assert!(!folder.join("nothing.csv").exists());

    write(&folder.join("empty.csv"), "");
    let run = kilter(folder, &["score", "out.model.json", "empty.csv", "-o", "nothing.csv"]);
    assert_eq!(run.code, 2);
    assert!(run.err.contains("empty.csv"), "{}", run.err);
    write(&folder.join("head.csv"), "id,write,ses\n");
    assert_eq!(kilter(folder, &["score", "out.model.json", "head.csv", "-o", "none.csv"]).code, 0);
    assert_eq!(fs::read_to_string(folder.join("none.csv")).expect("a head").lines().count(), 1);
}

#[test]
fn formats_mix_and_agree() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    fit(folder, "hsb2", plan_of("hsb2"));
    kilter_well(folder, &["score", "out.model.json", "hsb2.csv", "-o", "one.csv"]);
    kilter_well(folder, &["score", "out.model.json", "hsb2.csv", "-o", "two.parquet"]);
    kilter_well(folder, &["score", "out.model.json", "hsb2.csv", "-o", "three.ndjson"]);
    // A scored table cannot be scored again into the same columns: the clash is named.
    let run = kilter(folder, &["score", "out.model.json", "two.parquet", "-o", "again.csv"]);
    assert_eq!(run.code, 2);
    assert!(run.err.contains("p_academic"), "{}", run.err);
    let one = fs::read_to_string(folder.join("one.csv")).expect("a table");
    let head: Vec<&str> = one.lines().next().expect("a head").split(',').collect();
    let place = head.iter().position(|name| *name == "p_general").expect("a column");
    let lines = fs::read_to_string(folder.join("three.ndjson")).expect("lines");
    for (row, line) in one.lines().skip(1).zip(lines.lines()) {
        let record: Value = serde_json::from_str(line).expect("JSON");
        let text = row.split(',').nth(place).expect("a cell");
        assert_eq!(record["p_general"].as_f64(), text.parse().ok());
    }
    // A truncated Parquet file is refused by name.
    let bytes = fs::read(folder.join("two.parquet")).expect("a table");
    fs::write(folder.join("cut.parquet"), &bytes[..bytes.len() / 2]).expect("written");
    let run = kilter(folder, &["score", "out.model.json", "cut.parquet", "-o", "nothing.csv"]);
    assert_eq!(run.code, 2);
    assert!(run.err.contains("cut.parquet"), "{}", run.err);
    assert!(!folder.join("nothing.csv").exists());
}

#[test]
fn standard_output_takes_the_scored_table() {
    let folder = tempfile::tempdir().expect("a folder");
    fit(folder.path(), "hsb2", plan_of("hsb2"));
    kilter_well(folder.path(), &["score", "out.model.json", "hsb2.csv", "-o", "one.csv"]);
    let printed = kilter_well(folder.path(), &["score", "out.model.json", "hsb2.csv"]);
    assert_eq!(printed, fs::read_to_string(folder.path().join("one.csv")).expect("a table"));
}
