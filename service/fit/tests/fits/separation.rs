//! Data that separate the categories have no estimate, and the fit says where it lies.

use kilter_fit::{FitError, FitSettings, SeparationReport, Session};

use crate::support::{G, Table, X1, X2, json, plan, try_fit, worked_plan};

fn report(fields: &str, table: &Table) -> SeparationReport {
    match try_fit(&worked_plan("", fields), table) {
        Err(FitError::Separated(report)) => *report,
        other => panic!("{other:?}"),
    }
}

/// Without the rows of category b at level m: one empty cell, one coefficient that falls.
#[test]
fn an_empty_cell_is_named() {
    let mut table = Table::read("worked/tiny.csv");
    let (y, g) = (table.column("y"), table.column("g"));
    table.rows.retain(|row| row[y] != "b" || row[g] != "m");
    assert_eq!(table.rows.len(), 57);
    let report = report(&format!("{X1}{X2}{G}"), &table);
    assert_eq!(report.findings, ["category `b` never occurs with `g` = `m` (16 cases)"]);
    let drifts: Vec<_> =
        report.drifts.iter().map(|d| (d.category.as_str(), d.term.as_str(), d.upwards)).collect();
    assert_eq!(drifts, [("b", "g=m", Some(false))]);
    assert!(report.exhaustive && report.complete == Some(false), "{report:?}");
    assert!(report.to_string().contains("never occurs"), "{report}");
}

/// Nine numbers in three runs: complete separation.
#[test]
fn ranges_that_do_not_overlap_are_named() {
    let table = Table::parse("y,x1\na,1\na,2\na,3\nb,4\nb,5\nb,6\nc,7\nc,8\nc,9");
    let report = report(X1, &table);
    assert!(
        report.findings.iter().any(|f| f == "`x1` is at most 3 with category `a` and at least 4 with `b`"),
        "{report:?}"
    );
    assert!(report.exhaustive && report.complete == Some(true), "{report:?}");
    assert_eq!(report.drifts.len(), 4, "{report:?}");
    assert!(
        report.drifts.iter().any(|d| d.category == "c" && d.term == "x1" && d.upwards == Some(true)),
        "{report:?}"
    );
}

fn checked(toml: &str, table: &Table) -> Option<SeparationReport> {
    let plan = plan(toml);
    let mut rows = table.batches(&plan, 1000);
    let mut session = Session::open(&plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
    session.check_separation().unwrap()
}

/// Status of data and model pairs by two linear programmes of another solver (HiGHS), with the
/// coefficients that have no finite estimate.
#[test]
fn verdicts_agree_with_the_reference() {
    let expected = json("iris/separation.json");
    let mut checked_cases = 0;
    for case in expected["cases"].as_array().unwrap() {
        let file = case["data"].as_str().unwrap().trim_start_matches("data/");
        let folder = file.trim_end_matches(".csv");
        if !["penguins", "iris", "womenlf"].contains(&folder) {
            continue;
        }
        let field = |name: &str| {
            let levels = ["island", "children", "region"].contains(&name);
            let kind = if levels { "levels" } else { "number" };
            // The levels of the reference stand in the order of their columns, its reference first.
            let reference = match name {
                "island" => "reference = \"Biscoe\"\n",
                "children" => "reference = \"absent\"\n",
                "region" => "reference = \"Atlantic\"\n",
                _ => "",
            };
            format!("[[field]]\nname = \"{name}\"\nkind = \"{kind}\"\n{reference}")
        };
        let fields: String =
            case["terms"].as_array().unwrap().iter().map(|t| field(t.as_str().unwrap())).collect();
        let toml = format!(
            "name = \"check\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = {}\ncategories = {}\n{fields}",
            case["outcome"], case["categories"]
        );
        let found = checked(&toml, &Table::read(&format!("{folder}/{file}")));
        let name = case["name"].as_str().unwrap();
        let status = match &found {
            None => "overlap",
            Some(report) if report.complete == Some(true) => "complete",
            Some(_) => "quasi-complete",
        };
        assert_eq!(status, case["status"], "{name}: {found:?}");
        if let (Some(report), Some(estimates)) = (&found, case["estimates"].as_object()) {
            assert!(report.exhaustive, "{name}");
            for (coefficient, wanted) in estimates {
                let (category, column) = coefficient.split_once('|').unwrap();
                let term = if column == "(Intercept)" { "(intercept)" } else { column };
                let drift = report.drifts.iter().find(|d| d.category == category && d.term == term);
                assert_eq!(drift.is_some(), wanted != "finite", "{name} {coefficient}: {report:?}");
                match wanted.as_str().unwrap() {
                    "+infinite" => assert_ne!(drift.unwrap().upwards, Some(false), "{name} {coefficient}"),
                    "-infinite" => assert_ne!(drift.unwrap().upwards, Some(true), "{name} {coefficient}"),
                    _ => {}
                }
            }
        }
        checked_cases += 1;
    }
    assert_eq!(checked_cases, 9);
}

/// More pairs than are taken at once: rounds of the programme on a growing part of them.
#[test]
fn many_rows_are_decided_in_rounds() {
    let mut table = Table::parse("y,x1,x2");
    let mut state = 1u64;
    let mut next = || {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 40) as f64 / f64::from(1 << 24)
    };
    for _ in 0..5000 {
        let (x1, x2, noise) = (next() * 10.0, next() * 10.0, next());
        // Category c is separated by x1 + x2; a and b overlap.
        let y = if x1 + x2 > 12.0 {
            "c"
        } else if noise * 10.0 > x1 {
            "a"
        } else {
            "b"
        };
        table.rows.push(vec![y.into(), x1.to_string(), x2.to_string()]);
    }
    let toml = "name = \"check\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = \"y\"\nreference = \"a\"\n";
    let report = checked(&format!("{toml}{X1}{X2}"), &table).unwrap();
    assert!(
        report.complete != Some(true) && report.drifts.iter().any(|d| d.category == "c" && d.term == "x2")
    );
    // One case of c among the others: nothing is separated any more.
    table.rows[0] = vec!["c".into(), "1".into(), "1".into()];
    table.rows[1] = vec!["a".into(), "9.5".into(), "9.5".into()];
    table.rows[2] = vec!["b".into(), "9.5".into(), "9.5".into()];
    assert_eq!(checked(&format!("{toml}{X1}{X2}"), &table), None);
}
