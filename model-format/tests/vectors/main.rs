//! The committed test vectors against the scorer, and the scorer against two computations of other
//! kinds: the reader in Python and the expressions in SQL.

#![expect(clippy::unwrap_used, reason = "in tests, helpers included, a missing value is a failure")]

#[path = "../../examples/write_vectors/models.rs"]
mod models;
mod random;
mod reader;
mod sqlite;
#[path = "../../examples/write_vectors/vectors.rs"]
mod vectors;

use kilter_model::{ModelFile, RecordReader, Scorer};
use serde_json::Value;

/// The vector of a name.
fn vector(name: &str) -> vectors::Vector {
    models::all().into_iter().find(|vector| vector.name == name).expect("a vector of this name")
}

/// A committed vector file.
fn committed(name: &str) -> String {
    let path = format!("{}/vectors/{name}.json", env!("CARGO_MANIFEST_DIR"));
    std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{path}: {error}"))
}

/// The committed numbers are those of the scorer, bit for bit: every digit is compared.
#[test]
fn the_committed_vectors_are_current() {
    for vector in models::all() {
        let current = vectors::document(&vector) == committed(vector.name);
        assert!(
            current,
            "`{}` is stale: run `cargo run -p kilter-model --example write_vectors`",
            vector.name
        );
    }
}

#[test]
fn no_vector_is_left_over() {
    let folder = format!("{}/vectors", env!("CARGO_MANIFEST_DIR"));
    let mut files: Vec<String> = std::fs::read_dir(folder)
        .unwrap()
        .map(|file| file.unwrap().file_name().into_string().unwrap())
        .collect();
    files.sort();
    let mut known: Vec<String> = models::all().iter().map(|vector| format!("{}.json", vector.name)).collect();
    known.sort();
    assert_eq!(files, known);
}

/// A reader takes the model out of the vector, so it goes through another JSON text.
#[test]
fn committed_records_score_as_written() {
    for vector in models::all() {
        let document: Value = serde_json::from_str(&committed(vector.name)).unwrap();
        let model = ModelFile::from_json(&document["model"].to_string()).unwrap();
        assert_eq!(model, vector.model, "{}", vector.name);
        for case in document["cases"].as_array().unwrap() {
            let (key, found) = vectors::score(&model, &case["record"].to_string());
            assert_eq!(found, case[key], "{}: {}", vector.name, case["record"]);
        }
    }
}

/// Every number of the example in the description of the format is the one that comes out here.
#[test]
fn the_worked_record_of_the_description_is_right() {
    let description = std::fs::read_to_string(format!("{}/FORMAT.md", env!("CARGO_MANIFEST_DIR"))).unwrap();
    let vector = vector("worked");
    let scorer = Scorer::new(&vector.model).unwrap();
    let mut reader = RecordReader::new(&scorer.column_specs());
    reader.push_line(vector.records[0].as_bytes());
    let scored = scorer.score(&reader.finish());
    let design = scorer.design();
    let values: Vec<f64> = scored.coded.values.iter().map(|column| column[0]).collect();
    let (mut dense, mut terms) = (vec![0.0; design.dense().len()], vec![0.0; design.terms().len()]);
    design.fill_row(&values, &mut dense, &mut terms);
    let mut lines = vec![vector.records[0].to_owned()];
    for (index, term) in design.terms().iter().enumerate() {
        let coefficient = |category: &str| vector.model.coefficients[category][index];
        let (name, value) = (&term.name, terms[index]);
        lines.push(format!(
            "| `{name}` | {value} | {} | {} |",
            coefficient("neighbour"),
            coefficient("carded")
        ));
    }
    let (odds, shares) = (scored.log_odds_of(0), scored.probabilities_of(0));
    lines.push(format!("| log-odds | 0 | {} | {} |", odds[0], odds[1]));
    lines.push(format!("| exponential | 1 | {} | {} |", odds[0].exp(), odds[1].exp()));
    lines.push(format!("| probability | {} | {} | {} |", shares[0], shares[1], shares[2]));
    for line in lines {
        assert!(description.contains(&line), "FORMAT.md does not say `{line}`");
    }
}
