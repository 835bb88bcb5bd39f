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

    // A folder that no demo made is left alone.
    assert_eq!(kilter(folder.path(), &["demo", "--dir", "."]).code, 2);
    assert!(round.join("attempt.model.json").exists());
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
