//! Data that several tests share.

use crate::frame::{FieldBins, FieldLayout, Frame};
use crate::record::{ScoredRecord, log_odds_of_rounded};
use crate::summary::{Detail, Summary};

/// Probabilities of the worked example (three categories, the first is the reference). Its figures
/// were computed independently in double precision and are given to ten digits.
pub(crate) const WORKED_P: [[f64; 3]; 8] = [
    [0.7, 0.2, 0.1],
    [0.5, 0.3, 0.2],
    [0.25, 0.6, 0.15],
    [0.1, 0.3, 0.6],
    [0.4, 0.4, 0.2],
    [0.85, 0.1, 0.05],
    [0.3, 0.2, 0.5],
    [0.05, 0.15, 0.8],
];
/// Its outcomes.
pub(crate) const WORKED_Y: [usize; 8] = [0, 1, 1, 2, 0, 1, 2, 2];
/// The mix of the fit in it, of 1000 cases.
pub(crate) const WORKED_MIX: [f64; 3] = [0.5, 0.3, 0.2];

/// The digits of the worked example.
pub(crate) const WORKED_DIGITS: f64 = 2e-9;

/// Asserts that two numbers agree to an absolute tolerance.
#[track_caller]
pub(crate) fn close(what: &str, found: f64, wanted: f64, tolerance: f64) {
    assert!((found - wanted).abs() <= tolerance, "{what}: {found}, not {wanted}");
}

/// A frame of categories alone.
pub(crate) fn plain_frame(categories: &[&str], decile_edges: &[f64]) -> Frame {
    let names = categories.iter().map(|name| (*name).to_owned()).collect();
    Frame::for_fit(names, 0, Vec::new(), decile_edges.to_vec(), 0).expect("a frame")
}

/// The frame of the worked example.
pub(crate) fn worked_frame() -> Frame {
    plain_frame(&["handed-over", "neighbour", "carded"], &[0.45, 0.72])
}

/// Log-odds of probabilities against the first category.
pub(crate) fn log_odds(p: &[f64]) -> Vec<f64> {
    let mut log_odds = vec![0.0; p.len() - 1];
    log_odds_of_rounded(p, 0, &mut log_odds).expect("probabilities");
    log_odds
}

/// A full summary of probabilities with outcomes.
pub(crate) fn summary_of<P: AsRef<[f64]>>(frame: &Frame, p: &[P], y: &[usize]) -> Summary {
    let mut summary = Summary::new(frame, Detail::Full);
    for (p, y) in p.iter().zip(y) {
        let log_odds = log_odds(p.as_ref());
        let record = ScoredRecord { log_odds: &log_odds, inputs: &[], terms: &[] };
        summary.add_scored(frame, &record, 1.0).expect("a record");
        summary.add_outcome(frame, &record, *y, 30.0, 1.0).expect("an outcome");
    }
    summary
}

/// The summary of the worked example.
pub(crate) fn worked_summary() -> Summary {
    summary_of(&worked_frame(), &WORKED_P, &WORKED_Y)
}

/// A frame with one field of each kind and two terms.
pub(crate) fn parcel_frame() -> Frame {
    let number = FieldLayout {
        name: "weight_kg".into(),
        bins: FieldBins::Number { edges: vec![1.0, 2.0, 5.0], observed: Some([0.1, 30.0]) },
    };
    let levels = FieldLayout {
        name: "dwelling".into(),
        bins: FieldBins::Levels { levels: vec!["house".into(), "flat".into(), "farm".into()] },
    };
    let flag = FieldLayout { name: "rain".into(), bins: FieldBins::Flag };
    let categories = ["handed-over", "safe-place", "neighbour", "carded"].map(str::to_owned).to_vec();
    Frame::for_fit(categories, 0, vec![number, levels, flag], vec![0.2, 0.4, 0.6], 2).expect("a frame")
}
