//! The demo, through the program: what the monitor says of each chapter, held against the truth.

use std::path::Path;

use serde_json::Value;

use crate::support::{json_file, kilter, kilter_well};

/// The chapters by their first and last day.
const HEALTHY: [&str; 2] = ["2026-04-27", "2026-05-24"];
const SAFE_PLACES: [&str; 2] = ["2026-05-25", "2026-06-14"];
const SILENT_RAIN: [&str; 2] = ["2026-06-22", "2026-07-05"];
const SEASON: [&str; 2] = ["2026-07-13", "2026-08-09"];

fn drift(folder: &Path, days: [&str; 2]) -> Value {
    let arguments = ["drift", "attempt", "--from", days[0], "--to", days[1], "--json"];
    serde_json::from_str(&kilter_well(folder, &arguments)).expect("JSON")
}

/// Kinds of the findings that are more than notes, with their subjects.
fn findings(report: &Value) -> Vec<(String, String)> {
    let word = |finding: &Value, key: &str| finding[key].as_str().unwrap_or_default().to_owned();
    report["findings"]
        .as_array()
        .expect("findings")
        .iter()
        .filter(|finding| finding["severity"] != "note")
        .map(|finding| (word(finding, "kind"), word(finding, "subject")))
        .collect()
}

#[test]
fn the_demo_tells_its_chapters_apart() {
    let folder = tempfile::tempdir().expect("a folder");
    let printed = kilter_well(folder.path(), &["demo", "--dir", "round"]);
    for part in [
        "weeks to fit on",
        "posted as JSON",
        "posted as NDJSON",
        "dropped as files",
        "Oxcross",
        "`rain_mm` is missing",
    ] {
        assert!(printed.contains(part), "{part} in\n{printed}");
    }
    let round = folder.path().join("round");
    the_fit_finds_the_truth(&round);

    assert_eq!(findings(&drift(&round, HEALTHY)), []);

    let found = findings(&drift(&round, SAFE_PLACES));
    let named = |kind: &str, subject: &str| found.iter().any(|(k, s)| k == kind && s.contains(subject));
    assert!(named("mix", "safe-place") && named("segment", "Oxcross"), "{found:?}");
    assert!(!found.iter().any(|(kind, _)| kind.starts_with("field")), "no field is to blame: {found:?}");

    let report = drift(&round, SILENT_RAIN);
    assert_eq!(findings(&report)[0], ("field-missing".to_owned(), "rain_mm".to_owned()));
    assert_eq!(report["findings"][0]["severity"], "severe");

    let found = findings(&drift(&round, SEASON));
    let moved: Vec<&str> =
        found.iter().filter(|(k, _)| k == "field-moved").map(|(_, s)| s.as_str()).collect();
    assert!(["weight_kg", "dwelling", "time_band"].iter().all(|field| moved.contains(field)), "{found:?}");
    let about_the_model = ["mix", "slope", "calibration", "log-loss", "segment"];
    assert!(!found.iter().any(|(kind, _)| about_the_model.contains(&kind.as_str())), "{found:?}");

    the_tour_works(&round);
    // A folder that no demo made is left alone.
    assert_eq!(kilter(folder.path(), &["demo", "--dir", "."]).code, 2);
    assert!(round.join("attempt.model.json").exists());
}

/// The commands of the README's tour, as they stand there.
fn the_tour_works(round: &Path) {
    let readme = include_str!("../../README.md");
    let tour = readme.split("<!-- tour -->").nth(1).and_then(|rest| rest.split("<!-- tour end -->").next());
    let commands = tour.expect("a tour").lines().filter_map(|line| line.strip_prefix("kilter "));
    let mut run = 0;
    for command in commands {
        let arguments: Vec<&str> = command.split_whitespace().collect();
        let found = kilter(round, &arguments);
        // Two of the rows to score are there to be refused.
        let expected = i32::from(arguments[0] == "score");
        assert_eq!(found.code, expected, "kilter {command}: {}", found.err);
        run += 1;
    }
    assert_eq!(run, 6, "commands in the tour");
    let refused = std::fs::read_to_string(round.join("refused.csv")).expect("refused rows");
    assert!(
        refused.contains("level 'barge' was not in the fit") && refused.contains("`heavy` is not a number")
    );
}

/// Every coefficient within four standard errors of the truth; of 51 the largest distance exceeds
/// that by chance in 3 of 1000 demos.
fn the_fit_finds_the_truth(round: &Path) {
    let truth = json_file(Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/../demo-data/truth.model.json")));
    let shown: Value =
        serde_json::from_str(&kilter_well(round, &["show", "attempt.model.json", "--json"])).expect("JSON");
    let terms: Vec<&str> =
        truth["terms"].as_array().expect("terms").iter().filter_map(Value::as_str).collect();
    let mut compared = 0;
    for (category, coefficients) in truth["coefficients"].as_object().expect("coefficients") {
        for estimate in shown["categories"][category].as_array().expect("estimates") {
            let term = estimate["term"].as_str().expect("a name");
            let place = terms
                .iter()
                .position(|known| *known == term)
                .unwrap_or_else(|| panic!("{term} is no true term"));
            let number = |value: &Value| value.as_f64().expect("a number");
            let distance = number(&estimate["estimate"]) - number(&coefficients[place]);
            let error = number(&estimate["standard_error"]);
            assert!(
                distance.abs() < 4.0 * error,
                "{category} {term}: off by {distance}, standard error {error}"
            );
            compared += 1;
        }
    }
    assert_eq!(compared, 51);
}
