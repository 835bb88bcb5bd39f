//! Frames of model files.

use kilter_model::ModelFile;
use serde_json::{Value, json};

use crate::error::DriftError;
use crate::frame::{FieldBins, Frame};
use crate::record::ScoredRecord;
use crate::summary::{Detail, Summary};

/// A model file of a parcel round, with a baseline.
fn document() -> Value {
    json!({
        "format": "kilter-model",
        "format_version": "1.0",
        "name": "attempt",
        "outcome": {"field": "result", "categories": ["safe-place", "handed-over", "carded"], "reference": "handed-over"},
        "fields": [
            {"kind": "number", "name": "weight_kg", "observed": [0.1, 30.0]},
            {"kind": "levels", "name": "dwelling", "levels": ["house", "flat"], "reference": "house"},
            {"kind": "flag", "name": "rain"}
        ],
        "terms": ["(intercept)", "weight_kg", "dwelling=flat", "rain"],
        "coefficients": {"safe-place": [0.1, 0.2, 0.3, 0.4], "carded": [0.4, 0.3, 0.2, 0.1]},
        "baseline": {
            "cases": 1000.0,
            "mix": [0.3, 0.5, 0.2],
            "slopes": 6,
            "slope_information": 200.0,
            "expected_slope": 0.98,
            "variance": [200.0, 240.0, 150.0],
            "mean_probability": [0.3, 0.5, 0.2],
            "probability_covariance": [0.02, -0.01, -0.01, -0.01, 0.03, -0.02, -0.01, -0.02, 0.03],
            "probability_histogram": vec![vec![50.0; 18]; 3],
            "decile_edges": [0.2, 0.4, 0.6],
            "log_loss": 0.9,
            "fields": [
                {"name": "weight_kg", "edges": [1.0, 5.0], "counts": [300.0, 400.0, 290.0], "missing": 10.0, "observed": [0.2, 29.0]},
                {"name": "dwelling", "counts": [700.0, 300.0], "missing": 0.0, "rare_levels": [0, 0]},
                {"name": "rain", "counts": [600.0, 400.0], "missing": 0.0}
            ],
            "term_means": [4.0, 0.3, 0.4],
            "term_covariance": [9.0, 0.0, 0.21, 0.0, 0.0, 0.24]
        },
        "fingerprint": "sha256:"
    })
}

fn frame_of(document: Value) -> Result<Frame, DriftError> {
    let model: ModelFile = serde_json::from_value(document).expect("a model file");
    Frame::new(&model)
}

#[test]
fn a_frame_takes_everything_from_the_model_file() {
    let frame = frame_of(document()).expect("a frame");
    assert_eq!((frame.reference(), frame.terms(), frame.training_cases()), (1, 3, Some(1000.0)));
    assert_eq!(frame.expected_slope(), 0.98);
    let number = FieldBins::Number { edges: vec![1.0, 5.0], observed: Some([0.2, 29.0]) };
    assert_eq!(frame.fields()[0].bins, number, "the range of the fit, not the one accepted");
    assert_eq!(frame.fields()[1].len(), 2);
    let mut summary = Summary::new(&frame, Detail::Full);
    let record = ScoredRecord { log_odds: &[0.0, 0.0], inputs: &[2.0, 1.0, 0.0], terms: &[2.0, 1.0, 0.0] };
    summary.add_outcome(&frame, &record, 1, 24.0, 1.0).expect("an outcome");
    assert_eq!(summary.check(&frame), Ok(()));
}

#[test]
fn a_model_without_baseline_has_a_frame_too() {
    let mut bare = document();
    bare.as_object_mut().expect("an object").remove("baseline");
    let frame = frame_of(bare).expect("a frame");
    assert_eq!((frame.training_cases(), frame.expected_slope()), (None, 1.0));
    assert_eq!(frame.fields()[0].bins, FieldBins::Number { edges: Vec::new(), observed: Some([0.1, 30.0]) });
}

#[test]
fn a_baseline_that_does_not_fit_is_refused_by_name() {
    for (pointer, value, what) in [
        ("/baseline/mix", json!([0.5, 0.5]), "baseline.mix"),
        ("/baseline/fields/1/counts", json!([700.0]), "baseline.fields.counts"),
        ("/baseline/term_covariance", json!([9.0]), "baseline.term_covariance"),
        ("/baseline/probability_histogram/2", json!([9.0]), "baseline.probability_histogram"),
        ("/baseline/cases", json!(0.0), "baseline.cases"),
        ("/baseline/decile_edges", json!([0.4, 0.2]), "decile_edges"),
        ("/baseline/fields/0/edges", json!([5.0, 5.0]), "edges"),
        ("/outcome/categories", json!(["handed-over"]), "two categories"),
    ] {
        let mut broken = document();
        *broken.pointer_mut(pointer).expect("a place in the document") = value;
        let error = frame_of(broken).expect_err("refused").to_string();
        assert!(error.contains(what), "{error} does not name {what}");
    }
}
