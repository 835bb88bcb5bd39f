//! The service over HTTP on loopback, with a model fitted to real data.

use std::path::Path;

use serde_json::{Value, json};

use crate::fits::{fit, plan_of};
use crate::support::{Service, data, kilter, kilter_well, write};

/// A folder with the programme-choice model published, ready to serve.
pub(crate) fn published(folder: &Path) {
    fit(folder, "hsb2", plan_of("hsb2"));
    write(
        &folder.join("kilter.toml"),
        "[service]\nlisten = \"127.0.0.1:0\"\nlargest_body = 200000\n\
         [[drop]]\nmodel = \"programme\"\nfolder = \"drop\"\nevery = \"1s\"\n",
    );
    kilter_well(folder, &["publish", "out.model.json"]);
}

/// The students as JSON records.
fn students() -> Vec<Value> {
    let table = std::fs::read_to_string(data("hsb2").join("hsb2.csv")).expect("the table");
    let mut lines = table.lines();
    let names: Vec<&str> = lines.next().expect("a head").split(',').collect();
    lines
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            let cell = |name: &str| cells[names.iter().position(|n| *n == name).expect("a column")];
            json!({"id": cell("id"), "ses": cell("ses"), "write": cell("write").parse::<f64>().expect("a number"),
                   "time": "2026-03-01T12:00:00Z"})
        })
        .collect()
}

/// Probabilities of a scored table, by id.
fn table_probabilities(text: &str) -> Vec<(String, Vec<u64>)> {
    let mut lines = text.lines();
    let names: Vec<&str> = lines.next().expect("a head").split(',').collect();
    let place =
        |name: &str| names.iter().position(|n| *n == name).unwrap_or_else(|| panic!("{name} in {names:?}"));
    let (id, columns) = (place("id"), ["p_academic", "p_general", "p_vocational"].map(place));
    lines
        .map(|line| {
            let cells: Vec<&str> = line.split(',').collect();
            let bits =
                columns.iter().map(|&c| cells[c].parse::<f64>().expect("a number").to_bits()).collect();
            (cells[id].to_owned(), bits)
        })
        .collect()
}

fn answer_probabilities(answer: &Value) -> Vec<(String, Vec<u64>)> {
    let record = |record: &Value| {
        let probabilities = record["probabilities"].as_object().expect("probabilities");
        let bits = ["academic", "general", "vocational"]
            .map(|category| probabilities[category].as_f64().expect("a number").to_bits());
        (record["id"].as_str().expect("an id").to_owned(), bits.to_vec())
    };
    answer["scored"].as_array().expect("scored records").iter().map(record).collect()
}

#[test]
fn posted_records_equal_the_scored_file_to_the_last_bit() {
    let folder = tempfile::tempdir().expect("a folder");
    published(folder.path());
    kilter_well(folder.path(), &["score", "out.model.json", "hsb2.csv", "-o", "scored.csv"]);
    let by_file =
        table_probabilities(&std::fs::read_to_string(folder.path().join("scored.csv")).expect("a table"));
    assert_eq!(by_file.len(), 200);

    let service = Service::start(folder.path());
    let (status, answer) = service.post_json("/models/programme/records", &Value::from(students()));
    assert_eq!(status, 200, "{answer}");
    assert_eq!(answer_probabilities(&answer), by_file);

    let lines: String = students().iter().map(|student| format!("{student}\n")).collect();
    let (status, text) = service.post("/models/programme/records", "application/x-ndjson", &lines);
    assert_eq!(status, 200);
    let records: Vec<Value> = text.lines().map(|line| serde_json::from_str(line).expect("JSON")).collect();
    assert!(records.iter().all(|record| record["repeated"] == true), "the same ids again are not counted");
    assert_eq!(answer_probabilities(&json!({ "scored": records })), by_file);
    assert_eq!(service.stop(), 0);
}

/// Each bad input with the status and the words that its answer must have.
#[test]
fn bad_input_is_named_and_leaves_the_rest_working() {
    let folder = tempfile::tempdir().expect("a folder");
    published(folder.path());
    let service = Service::start(folder.path());
    let records = "/models/programme/records";
    let json = "application/json";
    let large = format!("[{}]", vec![r#"{"ses": "low", "write": 50}"#; 10_000].join(","));
    let cases: [(&str, &str, &str, u16, &str); 17] = [
        (records, json, r#"{"ses": "low", "write": 50,}"#, 400, "line 1 column 28"),
        (records, json, "", 400, "EOF"),
        (records, json, "[1", 400, "bad-body"),
        (records, json, "7", 400, "a JSON object or an array of objects"),
        (records, json, r#"{"ses": "top", "write": 50}"#, 200, "level 'top' was not in the fit"),
        (records, json, r#"{"ses": "low"}"#, 200, r#""field":"write","reason":"is missing""#),
        (
            records,
            json,
            r#"{"ses": "low", "write": "fifty"}"#,
            200,
            "expected a number, found the text `fifty`",
        ),
        (records, json, r#"{"ses": "low", "write": null}"#, 200, r#""reason":"is missing""#),
        (records, json, r#"{"ses": "low", "write": 50, "time": "soon"}"#, 200, "`soon` is not a time"),
        (records, json, r#"[{"ses": "low", "write": 50}, 3]"#, 200, r#""position":1"#),
        (records, json, r#"{"ses": "low", "write": 90}"#, 200, "above the fitted range 31 to 67"),
        (records, "text/plain", "x", 415, "text/plain"),
        (records, json, &large, 413, "200000 bytes"),
        ("/models/programe/records", json, "[]", 404, "did you mean `programme`?"),
        ("/nowhere", json, "[]", 404, "unknown-route"),
        ("/metrics", json, "[]", 405, "wrong-method"),
        (
            "/models/programme/records?strict=true",
            json,
            r#"[{"ses": "low", "write": 50}, {"ses": "x", "write": 1}]"#,
            422,
            "level 'x'",
        ),
    ];
    for (path, content_type, body, status, part) in cases {
        let (found, text) = service.post(path, content_type, body);
        let shown: String = body.chars().take(80).collect();
        assert_eq!(found, status, "{path} {shown}: {text}");
        assert!(text.contains(part), "{path} {shown}: {text}");
        if status >= 400 {
            assert!(text.contains("urn:kilter:problem:"), "{path} {shown}: {text}");
        }
    }
    let lines = "{\"ses\": \"low\", \"write\": 50}\nnot json\n\n{\"ses\": \"high\", \"write\": 50}\n";
    let (status, text) = service.post(records, "application/x-ndjson", lines);
    assert_eq!((status, text.lines().count()), (200, 3), "{text}");
    assert!(text.contains("not a JSON object"), "{text}");
    let (status, answer) = service.post_json(records, &json!({"ses": "low", "write": 50}));
    assert_eq!((status, answer["scored"].as_array().map(Vec::len)), (200, Some(1)), "the service goes on");
    assert_eq!(service.get("/alive").0, 200);
    assert_eq!(service.get("/ready").0, 200);
}

#[test]
fn outcomes_come_early_late_twice_and_corrected() {
    let folder = tempfile::tempdir().expect("a folder");
    published(folder.path());
    let service = Service::start(folder.path());
    let outcomes = "/models/programme/outcomes";
    let post = |body: Value| {
        let (status, answer) = service.post_json(outcomes, &body);
        assert_eq!(status, 200, "{answer}");
        answer
    };
    let early = post(json!({"id": "a", "category": "general", "observed_at": "2026-03-02T00:00:00Z"}));
    assert_eq!(early["waiting"], 1, "{early}");
    let record = json!([{"id": "a", "ses": "low", "write": 50, "time": "2026-03-01T08:00:00Z"},
                        {"id": "b", "ses": "high", "write": 40, "time": "2026-03-01T09:00:00Z"}]);
    assert_eq!(service.post_json("/models/programme/records", &record).0, 200);
    let answer = post(json!([{"id": "a", "category": "general", "observed_at": "2026-03-02T00:00:00Z"},
                             {"id": "b", "category": "academic"}, {"id": "b", "category": "nowhere"},
                             {"category": "general"}]));
    assert_eq!((&answer["repeated"], &answer["matched"]), (&json!(1), &json!(1)), "{answer}");
    let refused: Vec<&str> =
        answer["refused"].as_array().expect("a list").iter().filter_map(|r| r["reason"].as_str()).collect();
    assert_eq!(refused.len(), 2, "{answer}");
    assert!(refused[0].contains("nowhere") && refused[1].contains("missing"), "{answer}");
    assert_eq!(post(json!({"id": "b", "category": "vocational"}))["corrected"], 1);
    let drift = service.get_json("/models/programme/drift?from=2026-03-01&to=2026-03-01");
    assert_eq!(drift["scored"], 2.0, "{drift}");
    assert_eq!(drift["outcomes"], 2.0);
    let observed: Vec<f64> = drift["mix"]["categories"]
        .as_array()
        .expect("categories")
        .iter()
        .filter_map(|category| category["observed"].as_f64())
        .collect();
    assert_eq!(observed, [0.0, 1.0, 1.0]);
}

/// What was acknowledged before a power cut is there after it, once.
#[test]
fn a_kill_between_acknowledgement_and_shutdown_loses_nothing() {
    let folder = tempfile::tempdir().expect("a folder");
    published(folder.path());
    let students = students();
    let mut acknowledged = 0;
    for (round, part) in students.chunks(25).enumerate() {
        let service = Service::start(folder.path());
        let (status, answer) = service.post_json("/models/programme/records", &Value::from(part));
        assert_eq!(status, 200, "{answer}");
        acknowledged += answer["scored"].as_array().map_or(0, Vec::len);
        let outcome = json!({"id": part[0]["id"], "category": "general"});
        assert_eq!(service.post_json("/models/programme/outcomes", &outcome).0, 200);
        service.kill();
        let service = Service::start(folder.path());
        let drift = service.get_json("/models/programme/drift?from=2026-03-01&to=2026-03-01");
        assert_eq!(drift["scored"].as_f64(), Some(acknowledged as f64), "round {round}");
        assert_eq!(drift["outcomes"].as_f64(), Some((round + 1) as f64), "round {round}");
        assert_eq!(
            service.post_json("/models/programme/records", &Value::from(part)).1["scored"][0]["repeated"],
            true
        );
    }
    assert_eq!(acknowledged, 200);
}

#[test]
fn documents_pages_and_metrics() {
    let folder = tempfile::tempdir().expect("a folder");
    published(folder.path());
    let service = Service::start(folder.path());
    assert_eq!(service.post_json("/models/programme/records", &Value::from(students())).0, 200);
    let models = service.get_json("/models");
    assert_eq!(models["models"][0]["name"], "programme", "{models}");
    let file = service.get("/models/programme").1;
    let model = kilter_model::ModelFile::from_json(&file).expect("a sound model file");
    assert_eq!(models["models"][0]["live"], model.fingerprint.as_str());
    let page = service.get("/view/programme?from=2026-03-01&to=2026-03-01").1;
    assert!(page.contains("200") && page.contains("<svg") || page.contains("Mix"), "{page}");
    let overview = service.get("/").1;
    assert!(overview.contains("/view/programme"));
    for text in [&page, &overview] {
        assert!(!text.contains("src=\"http") && !text.contains("href=\"http") && !text.contains("@import"));
    }
    let metrics = service.get("/metrics").1;
    for name in ["kilter_records_scored_total{", "kilter_score_seconds_bucket{", "kilter_build_info{"] {
        assert!(metrics.contains(name), "{name} in\n{metrics}");
    }
    assert_eq!(service.get("/view/nothing").0, 404);
    assert_eq!(service.get("/models/programme/drift?from=soon").0, 400);
}

#[test]
fn wrong_configuration_is_found_before_anything_is_touched() {
    let folder = tempfile::tempdir().expect("a folder");
    for (text, part) in [
        ("[service]\nlisten = \"0.0.0.0:0\"\n", "[[token]]"),
        ("[service]\nlistn = \"127.0.0.1:0\"\n", "listn"),
        ("[ledger]\nurl = \"other:x\"\n", "other:x"),
    ] {
        write(&folder.path().join("kilter.toml"), text);
        let run = kilter(folder.path(), &["serve", "--check"]);
        assert_eq!(run.code, 64, "{text}: {}", run.err);
        assert!(run.err.contains(part), "{text}: {}", run.err);
    }
    assert!(!folder.path().join("ledger.db").exists());
    write(&folder.path().join("kilter.toml"), "");
    assert_eq!(kilter(folder.path(), &["serve", "--check"]).code, 0);
    assert!(!folder.path().join("ledger.db").exists(), "a check touches nothing");
}
