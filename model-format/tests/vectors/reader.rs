//! The reader in Python, which was written after the description of the format alone, must find
//! what the scorer finds.

use std::io::Write;
use std::path::Path;
use std::process::{Command, Output, Stdio};

use kilter_model::ModelFile;
use serde_json::Value;

use crate::random::{self, Random};
use crate::{models, vector, vectors};

/// Both compute with 64-bit numbers; their sums and powers may round in another order.
const RELATIVE: f64 = 1e-12;
/// Below this, floating-point numbers have fewer digits.
const TINY: f64 = 1e-300;

fn python(arguments: &[&str], input: &[u8]) -> Output {
    let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("reader.py");
    let mut child = Command::new("python3")
        .arg("-B")
        .arg(script)
        .args(arguments)
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("this test needs `python3` on the path");
    let mut stdin = child.stdin.take().unwrap();
    // A reader that refuses the model does not read its records: that is no error here.
    drop(stdin.write_all(input));
    drop(stdin);
    child.wait_with_output().unwrap()
}

/// What the reader makes of records, one JSON text each.
fn scored_by_reader(model: &ModelFile, records: &[String]) -> Vec<Value> {
    let file = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(file.path(), model.to_json().unwrap()).unwrap();
    let output = python(&[file.path().to_str().unwrap()], (records.join("\n") + "\n").as_bytes());
    let said = String::from_utf8(output.stdout).unwrap();
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    let scored: Vec<Value> = said.lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    assert_eq!(scored.len(), records.len());
    scored
}

/// Whether two answers are the same: the same field refused, or the same probabilities. The wording
/// of a reason is no part of the format.
fn agree(ours: &(&str, Value), theirs: &Value) -> bool {
    match ours {
        ("refused", refusal) => theirs["refused"]["field"] == refusal["field"],
        (_, probabilities) => {
            let numbers =
                |value: &Value| -> Option<Vec<f64>> { value.as_array()?.iter().map(Value::as_f64).collect() };
            let (Some(ours), Some(theirs)) = (numbers(probabilities), numbers(&theirs["probabilities"]))
            else {
                return false;
            };
            let near = |(a, b): (&f64, &f64)| (a - b).abs() <= RELATIVE * b + TINY;
            ours.len() == theirs.len() && theirs.iter().zip(&ours).all(near)
        }
    }
}

fn assert_agree(model: &ModelFile, records: &[String]) {
    for (record, theirs) in records.iter().zip(scored_by_reader(model, records)) {
        let ours = vectors::score(model, record);
        assert!(agree(&ours, &theirs), "{record}: {theirs} instead of {ours:?}");
    }
}

#[test]
fn the_reader_agrees_on_all_vectors() {
    for vector in models::all() {
        let records: Vec<String> = vector.records.iter().map(|record| (*record).to_owned()).collect();
        assert_agree(&vector.model, &records);
    }
}

#[test]
fn the_reader_compares_itself_with_the_vectors() {
    let paths: Vec<String> = models::all()
        .iter()
        .map(|vector| format!("{}/vectors/{}.json", env!("CARGO_MANIFEST_DIR"), vector.name))
        .collect();
    let arguments: Vec<&str> = ["--vectors"].into_iter().chain(paths.iter().map(String::as_str)).collect();
    let output = python(&arguments, b"");
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stdout));
}

/// Two thousand records over twenty models. At least half must be scored and a tenth refused, or
/// the comparison would say little.
#[test]
fn the_reader_agrees_on_random_records_of_random_models() {
    let mut random = Random(20_260_301);
    let (mut scored, mut refused) = (0, 0);
    for _ in 0..20 {
        let model = random::model(&mut random);
        let records: Vec<String> =
            (0..100).map(|_| random::record(&mut random, &model).to_string()).collect();
        assert_agree(&model, &records);
        for record in &records {
            if vectors::score(&model, record).0 == "refused" { refused += 1 } else { scored += 1 }
        }
    }
    assert!(scored >= 1000 && refused >= 200, "{scored} scored, {refused} refused");
}

/// Lines that are no JSON objects, or give a field twice, in both.
#[test]
fn the_reader_agrees_on_malformed_records() {
    let vector = vector("forms");
    let sound = vector.records[0];
    let cut = &sound[..sound.len() - 1];
    let records = [
        "7",
        "[]",
        "null",
        "",
        "{",
        cut,
        &format!("{sound} {sound}"),
        &format!("{cut}, \"hour\": 3}}"),
        &format!("{cut}, \"other\": 3, \"other\": 4}}"),
        &sound.replace("3.5", "1e400"),
        &sound.replace("3.5", "NaN"),
        &sound.replace("3.5", "-Infinity"),
        &sound.replace("3.5", "03.5"),
        &sound.replace("3.5", "123456789012345678901234567890"),
        &sound.replace("3.5", "9007199254740993"),
        &sound.replace("3.5", "\"NaN\""),
        &sound.replace("3.5", &"[".repeat(100_000)),
    ]
    .map(str::to_owned);
    assert_agree(&vector.model, &records);
}

/// Model files that are damaged or of another version are refused by both.
#[test]
fn the_reader_refuses_the_files_that_are_refused_here() {
    let sound = vector("later-version").model.to_json().unwrap();
    let changes: [(&str, &str); 9] = [
        ("\"1.9\"", "\"2.0\""),
        ("\"kilter-model\"", "\"another\""),
        ("333333333.3333333", "333333333.3333334"),
        ("1e-7", "0.00000010000000000000001"),
        ("\"purpose\"", "\"purposes\""),
        ("\"purpose\"", "\"name\": \"later-version\", \"purpose\""),
        ("9007199254740993", "1e400"),
        ("1e-7", "NaN"),
        ("\"sha256:", "\"sha512:"),
    ];
    for (from, to) in changes {
        let changed = sound.replacen(from, to, 1);
        assert_ne!(changed, sound, "{from} stands in the file");
        assert!(ModelFile::from_json(&changed).is_err(), "{from} to {to}");
        let file = tempfile::NamedTempFile::new().unwrap();
        std::fs::write(file.path(), &changed).unwrap();
        let output = python(&[file.path().to_str().unwrap()], b"{}\n");
        assert_eq!(output.status.code(), Some(2), "{from} to {to}");
    }
}
