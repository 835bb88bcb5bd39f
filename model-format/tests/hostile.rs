//! Model files from somebody who means harm, or from a program that is broken: each gets an error
//! that says what is wrong, soon, and without a large amount of memory.

#![expect(clippy::unwrap_used, reason = "in tests, helpers included, a missing value is a failure")]

use std::io::Read;
use std::time::{Duration, Instant};

use kilter_model::fingerprint::fingerprint;
use kilter_model::{LARGEST_FILE, LARGEST_TERMS, LARGEST_VALUES, ModelFile, ModelFileError, read_limited};
use serde_json::{Value, json};

/// Far more than any of these takes, far less than one that grows out of bounds.
const LONGEST: Duration = Duration::from_mins(1);
/// An error is for people.
const LONGEST_ERROR: usize = 100_000;

/// A sound model file of two fields and two categories.
fn sound() -> Value {
    let mut document = json!({
        "format": "kilter-model",
        "format_version": "1.0",
        "name": "attempt",
        "outcome": {"field": "result", "categories": ["handed-over", "carded"], "reference": "handed-over"},
        "fields": [
            {"kind": "number", "name": "weight_kg", "form": "as-is"},
            {"kind": "levels", "name": "dwelling", "levels": ["flat", "house"], "reference": "flat"}
        ],
        "interactions": [],
        "terms": ["(intercept)", "weight_kg", "dwelling=house"],
        "coefficients": {"carded": [0.25, -1.5, 0.125]},
        "covariance": {"order": "category, then term", "lower": [1.0, 0.5, 1.0, 0.25, 0.5, 1.0]}
    });
    seal(&mut document);
    document
}

fn seal(document: &mut Value) {
    document["fingerprint"] = fingerprint(document).unwrap().into();
}

/// The text of the sound file after a change, with the fingerprint that belongs to it.
fn changed(change: impl FnOnce(&mut Value)) -> String {
    let mut document = sound();
    change(&mut document);
    seal(&mut document);
    document.to_string()
}

/// The text of the sound file with a part of it replaced, fingerprint and all.
fn replaced(from: &str, to: &str) -> String {
    let text = sound().to_string();
    assert!(text.contains(from), "`{from}` stands in {text}");
    text.replacen(from, to, 1)
}

fn assert_refused(cases: &[(&str, String, &str)]) {
    for (case, text, part) in cases {
        let start = Instant::now();
        let error = ModelFile::from_json(text).map(|_| ()).expect_err(case).to_string();
        assert!(error.contains(part), "{case}: {}", error.chars().take(500).collect::<String>());
        assert!(error.len() < LONGEST_ERROR, "{case}: an error of {} bytes", error.len());
        assert!(start.elapsed() < LONGEST, "{case}: {:?}", start.elapsed());
    }
}

#[test]
fn the_file_that_the_others_are_made_from_is_sound() {
    ModelFile::from_json(&changed(|_| ())).unwrap();
}

#[test]
fn texts_that_are_no_json() {
    assert_refused(&[
        ("nothing", String::new(), "EOF"),
        ("half a file", sound().to_string()[..200].to_owned(), "EOF"),
        ("a million open lists", "[".repeat(1_000_000), "recursion limit"),
        ("a million open objects", "{\"a\":".repeat(1_000_000), "recursion limit"),
        ("nested in a sound file", replaced("[0.25", &format!("{}0.25", "[".repeat(300))), "recursion limit"),
        ("an unclosed text", replaced("\"attempt\"", "\"attempt"), "line 1"),
        ("a line break in a text", replaced("attempt", "at\ntempt"), "control character"),
        ("half a surrogate pair", replaced("attempt", "\\ud800"), "hex escape"),
        ("something after the end", sound().to_string() + "x", "trailing characters"),
        ("two documents", sound().to_string().repeat(2), "trailing characters"),
        ("a byte order mark", format!("\u{feff}{}", sound()), "expected value"),
        ("NaN", replaced("0.25", "NaN"), "expected value"),
        ("Infinity", replaced("0.25", "Infinity"), "expected value"),
        ("minus Infinity", replaced("-1.5", "-Infinity"), "invalid number"),
        ("hexadecimal digits", replaced("0.25", "0x10"), "expected `,`"),
        ("a leading zero", replaced("0.25", "00.25"), "invalid number"),
        ("a number beyond all", replaced("0.25", "1e400"), "number out of range"),
        ("one below all", replaced("0.25", "-1e400"), "number out of range"),
        ("one of a million digits", replaced("0.25", &"9".repeat(1_000_000)), "number out of range"),
    ]);
}

#[test]
fn keys_that_stand_twice() {
    let twice = |from: &str, to: &str| replaced(from, to);
    assert_refused(&[
        (
            "the format",
            twice("\"name\"", "\"format\": \"kilter-model\", \"name\""),
            "key `format` stands twice",
        ),
        (
            "coefficients of a category",
            twice("\"carded\":[", "\"carded\":[0,0,0],\"carded\":["),
            "key `coefficients.carded` stands twice",
        ),
        (
            "written in another way",
            twice("\"carded\":[", "\"c\\u0061rded\":[0,0,0],\"carded\":["),
            "key `coefficients.carded` stands twice",
        ),
        (
            "in a list",
            twice("\"form\":\"as-is\"", "\"form\":\"as-is\",\"form\":\"log\""),
            "key `fields[0].form` stands twice",
        ),
        (
            "in a key of a later version",
            twice("\"name\"", "\"later\": [{\"a\": {\"b\": 1, \"b\": 1}}], \"name\""),
            "key `later[0].a.b` stands twice",
        ),
        (
            "the fingerprint",
            twice("\"name\"", "\"fingerprint\": \"\", \"name\""),
            "key `fingerprint` stands twice",
        ),
    ]);
}

#[test]
fn values_of_the_wrong_kind() {
    assert_refused(&[
        ("a list", "[]".into(), "`format` is absent"),
        ("a number", "7".into(), "`format` is absent"),
        ("another format", changed(|d| d["format"] = "x".repeat(1_000_000).into()), "`format` is \"xxx"),
        ("a later version", changed(|d| d["format_version"] = "2.0".into()), "version 2.0 is not supported"),
        ("version ten", changed(|d| d["format_version"] = "10.0".into()), "version 10.0 is not supported"),
        ("a version that is a number", changed(|d| d["format_version"] = json!(1.0)), "is not supported"),
        ("NaN as a text", changed(|d| d["coefficients"]["carded"][0] = "NaN".into()), "invalid type: string"),
        ("no coefficient", changed(|d| d["coefficients"]["carded"][0] = Value::Null), "invalid type: null"),
        ("true", changed(|d| d["coefficients"]["carded"][0] = true.into()), "invalid type: boolean"),
        (
            "a list in a list",
            changed(|d| d["coefficients"]["carded"][0] = json!([1])),
            "invalid type: sequence",
        ),
        ("a null variance", changed(|d| d["covariance"]["lower"][0] = Value::Null), "invalid type: null"),
        (
            "another kind of field",
            changed(|d| d["fields"][0]["kind"] = "date".into()),
            "unknown variant `date`",
        ),
        ("another form", changed(|d| d["fields"][0]["form"] = "root".into()), "unknown variant `root`"),
        (
            "a negative degree",
            changed(|d| d["fields"][0]["form"] = json!({"polynomial": -1})),
            "invalid value",
        ),
        (
            "a degree of 33 bits",
            changed(|d| d["fields"][0]["form"] = json!({"polynomial": 1u64 << 32})),
            "u32",
        ),
        ("fields as an object", changed(|d| d["fields"] = json!({})), "invalid type: map"),
        (
            "no fields",
            changed(|d| drop(d.as_object_mut().unwrap().remove("fields"))),
            "missing field `fields`",
        ),
    ]);
}

#[test]
fn documents_that_contradict_themselves() {
    let spline = |knots: Vec<f64>| changed(|d| d["fields"][0]["form"] = json!({"spline": {"knots": knots}}));
    let means = |count: usize| json!({"mean-and-flag": {"means": vec![0.0; count]}});
    assert_refused(&[
        ("another fingerprint", replaced("0.25", "0.26"), "`fingerprint`: the file says"),
        ("a signature that is none", changed(|d| d["signature"] = json!("me")), "`signature`: "),
        ("a name with a path", changed(|d| d["name"] = "../../etc".into()), "`name`"),
        ("a name of a million letters", changed(|d| d["name"] = "a".repeat(1_000_000).into()), "`name`"),
        ("one category", changed(|d| d["outcome"]["categories"] = json!(["handed-over"])), "need at least 2"),
        (
            "a level that stands twice",
            changed(|d| d["fields"][1]["levels"][1] = "flat".into()),
            "stands twice",
        ),
        (
            "a field that stands twice",
            changed(|d| d["fields"][1]["name"] = "weight_kg".into()),
            "stands twice",
        ),
        ("two knots", spline(vec![0.0, 1.0]), "at least three knots"),
        ("knots that descend", spline(vec![0.0, 2.0, 1.0]), "ascending"),
        ("knots too near", spline(vec![0.0, 1e-200, 2e-200]), "too near together"),
        ("knots too far apart", spline(vec![-1e200, 0.0, 1e200]), "too far apart"),
        ("degree 0", changed(|d| d["fields"][0]["form"] = json!({"polynomial": 0})), "need 1 to 10"),
        (
            "the highest degree",
            changed(|d| d["fields"][0]["form"] = json!({"polynomial": u32::MAX})),
            "1 to 10",
        ),
        ("a million means", changed(|d| d["fields"][0]["missing"] = means(1_000_000)), "need 1"),
        (
            "a range upside down",
            changed(|d| d["fields"][0]["range"] = json!([1e308, -1e308])),
            "above the second",
        ),
        ("a field with itself", changed(|d| d["interactions"] = json!([["dwelling", "dwelling"]])), "itself"),
        ("a field that is none", changed(|d| d["interactions"] = json!([["dwelling", "x"]])), "no field"),
        ("a term too few", changed(|d| d["terms"] = json!(["(intercept)"])), "the fields make 3"),
        (
            "a coefficient too few",
            changed(|d| d["coefficients"]["carded"] = json!([1])),
            "need 3, one per term",
        ),
        ("a category too many", changed(|d| d["coefficients"]["x"] = json!([1, 2, 3])), "is no category"),
        ("variances too few", changed(|d| d["covariance"]["lower"] = json!([1])), "1 numbers, need 6"),
        ("a variance below 0", changed(|d| d["covariance"]["lower"][2] = json!(-1)), "is below 0"),
        ("no covariance", changed(|d| d["covariance"]["lower"][3] = json!(-0.9)), "it is no covariance"),
    ]);
}

#[test]
fn interactions_that_stand_twice() {
    let text = changed(|d| {
        d["interactions"] = json!([["weight_kg", "dwelling"], ["dwelling", "weight_kg"]]);
        d["terms"] = json!([
            "(intercept)",
            "weight_kg",
            "dwelling=house",
            "weight_kg:dwelling=house",
            "dwelling=house:weight_kg"
        ]);
        d["coefficients"]["carded"] = json!([1, 2, 3, 4, 5]);
        d["covariance"] = Value::Null;
    });
    assert_refused(&[("both ways round", text, "`interactions[1]`: `dwelling:weight_kg` stands twice")]);
}

fn numbered(count: usize, padding: usize) -> Vec<String> {
    (0..count).map(|level| format!("{level:0padding$}")).collect()
}

fn crossed(count: usize, padding: usize) -> String {
    let levels = numbered(count, padding);
    changed(|d| {
        let field =
            |name: &str| json!({"kind": "levels", "name": name, "levels": levels, "reference": levels[0]});
        d["fields"] = json!([field("street"), field("depot")]);
        d["interactions"] = json!([["street", "depot"]]);
    })
}

#[test]
fn documents_that_would_need_much() {
    let number = |index: usize| json!({"kind": "number", "name": format!("number {index}")});
    let spline = json!({"spline": {"knots": (0..1_000_000).map(f64::from).collect::<Vec<_>>()}});
    assert_refused(&[
        ("a thousand million terms", crossed(31_624, 1), "make 1000077"),
        ("names of a gigabyte", crossed(300, 10_000), "the names of the terms would take"),
        ("a million knots", changed(|d| d["fields"][0]["form"] = spline), "`weight_kg` alone makes 999999"),
        (
            "one field too many",
            changed(|d| d["fields"] = (0..LARGEST_TERMS).map(number).collect()),
            "make 100001 terms",
        ),
        (
            "a million categories",
            changed(|d| d["outcome"]["categories"] = json!(numbered(1_000_000, 1))),
            "`outcome.reference`: `handed-over` is not among the categories",
        ),
        (
            "a million categories without coefficients",
            changed(|d| {
                d["outcome"] = json!({"field": "x", "categories": numbered(1_000_000, 1), "reference": "7"});
            }),
            "`coefficients.0`: is missing",
        ),
        (
            "a million levels that stand twice",
            changed(|d| d["fields"][1]["levels"] = json!(vec!["flat"; 1_000_000])),
            "level `flat` stands twice",
        ),
        (
            "a million interactions",
            changed(|d| d["interactions"] = json!(vec![["dwelling", "dwelling"]; 1_000_000])),
            "`interactions[1]`: `dwelling:dwelling` stands twice",
        ),
        ("a list of many values", format!("[0{}]", ",0".repeat(LARGEST_VALUES)), "more than 16000000 values"),
        ("a file of a quarter gigabyte", " ".repeat(LARGEST_FILE + 1), "larger than 268435456 bytes"),
    ]);
}

#[test]
fn a_source_without_end_is_read_to_the_limit() {
    let endless = std::io::repeat(b' ');
    assert!(matches!(read_limited(endless), Err(ModelFileError::TooLarge)));
    let whole = read_limited(std::io::repeat(b' ').take(LARGEST_FILE as u64)).unwrap();
    assert_eq!(whole.len(), LARGEST_FILE);
    assert!(matches!(read_limited(&b"\xff"[..]), Err(ModelFileError::Read(_))));
}

/// What looks odd and is sound.
#[test]
fn names_may_be_odd_and_levels_many() {
    let odd =
        ["<script>alert(1)</script>", "a\"b'c", "two\nlines", "\u{0}", "'; DROP TABLE t; --", "e\u{301}"];
    let names: Vec<String> = odd.iter().map(ToString::to_string).chain(numbered(10_000, 1)).collect();
    let text = changed(|d| {
        d["fields"][1]["levels"] = json!(names);
        d["fields"][1]["reference"] = names[0].clone().into();
        let levels = names[1..].iter().map(|level| format!("dwelling={level}"));
        let terms: Vec<String> =
            ["(intercept)".into(), "weight_kg".into()].into_iter().chain(levels).collect();
        d["coefficients"]["carded"] = vec![0.5; terms.len()].into();
        d["terms"] = json!(terms);
        d["covariance"] = Value::Null;
    });
    let model = ModelFile::from_json(&text).unwrap();
    assert_eq!(model.terms.len(), 10_007);
    let mut again = model.clone();
    again.seal().unwrap();
    assert_eq!(ModelFile::from_json(&again.to_json().unwrap()).unwrap(), again);
}
