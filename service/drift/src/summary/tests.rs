use super::*;
use crate::test_data::{parcel_frame, worked_frame, worked_summary};

const ODDS: [f64; 3] = [-1.0, 0.5, -2.0];

fn record(inputs: &[f64]) -> ScoredRecord<'_> {
    ScoredRecord { log_odds: &ODDS, inputs, terms: &[] }
}

#[test]
fn values_fall_into_their_bins() {
    let frame = parcel_frame();
    let mut summary = Summary::new(&frame, Detail::Light);
    for inputs in [
        // A number on an edge belongs to the lower bin; one beyond the range of the fit is counted.
        [1.0, 0.0, 0.0],
        [1.5, 2.0, 1.0],
        [30.5, -1.0, 1.0],
        [0.05, f64::NAN, f64::NAN],
        [f64::NAN, 3.0, 1.0],
    ] {
        summary.add_scored(&frame, &record(&inputs), 1.0).expect("a record");
    }
    let [weight, dwelling, rain] = &summary.fields[..] else { panic!("three fields") };
    assert_eq!((&weight.bins[..], weight.missing, weight.outside), (&[2.0, 1.0, 0.0, 1.0][..], 1.0, 2.0));
    assert_eq!((&dwelling.bins[..], dwelling.missing, dwelling.unseen), (&[1.0, 0.0, 1.0][..], 1.0, 2.0));
    assert_eq!((&rain.bins[..], rain.missing), (&[1.0, 3.0][..], 1.0));
    assert_eq!(summary.scored(), 5.0);
    assert_eq!(summary.outcomes(), 0.0);
}

#[test]
fn delays_fall_into_their_bins() {
    let frame = parcel_frame();
    let mut summary = Summary::new(&frame, Detail::Light);
    for delay in [-2.0, 1.0, 1.5, 24.0, 20_000.0, f64::NAN] {
        summary.add_outcome(&frame, &record(&[1.0, 0.0, 0.0]), 3, delay, 1.0).expect("an outcome");
    }
    let bins = &summary.outcomes.delays[3 * DELAY_EDGES_HOURS.len()..];
    assert_eq!((bins[0], bins[1], bins[4], bins[23]), (2.0, 1.0, 1.0, 1.0));
    assert_eq!(bins.iter().sum::<f64>(), 5.0);
    assert_eq!(summary.observed(), [0.0, 0.0, 0.0, 6.0]);
}

#[test]
fn surprises_are_counted_with_their_expectation() {
    let frame = worked_frame();
    let mut summary = Summary::new(&frame, Detail::Light);
    let log_odds = [(0.0005_f64 / 0.9).ln(), (0.0995_f64 / 0.9).ln()];
    let record = ScoredRecord { log_odds: &log_odds, inputs: &[], terms: &[] };
    summary.add_outcome(&frame, &record, 1, 1.0, 1.0).expect("an outcome");
    summary.add_outcome(&frame, &record, 0, 1.0, 1.0).expect("an outcome");
    assert_eq!(summary.outcomes.surprises, 1.0);
    assert!((summary.outcomes.surprises_expected.value() - 0.001).abs() < 1e-15);
}

#[test]
fn what_was_never_added_cannot_be_taken_out() {
    let frame = parcel_frame();
    let mut summary = Summary::new(&frame, Detail::Full);
    let inputs = [1.0, 0.0, 0.0];
    summary.add_scored(&frame, &record(&inputs), 1.0).expect("a record");
    summary.add_outcome(&frame, &record(&inputs), 2, 7.0, 1.0).expect("an outcome");
    let before = summary.clone();
    let negative =
        |result: Result<(), DriftError>| assert!(matches!(result, Err(DriftError::Negative { .. })));
    negative(summary.remove_scored(&frame, &record(&[4.0, 0.0, 0.0]), 1.0));
    negative(summary.remove_scored(&frame, &record(&inputs), 2.0));
    negative(summary.remove_outcome(&frame, &record(&inputs), 1, 7.0, 1.0));
    negative(summary.remove_outcome(&frame, &record(&inputs), 2, 70.0, 1.0));
    let other = ScoredRecord { log_odds: &[4.0, 0.5, -2.0], inputs: &inputs, terms: &[] };
    negative(summary.remove_outcome(&frame, &other, 2, 7.0, 1.0));
    assert_eq!(summary, before);
    let mut twice = summary.clone();
    twice.merge(&summary).expect("one frame");
    negative(summary.subtract(&twice).map(|_| ()));
    assert_eq!(summary, before);
}

#[test]
fn what_does_not_fit_is_refused_and_changes_nothing() {
    let frame = parcel_frame();
    let mut summary = Summary::new(&frame, Detail::Full);
    let empty = summary.clone();
    let inputs = [1.0, 0.0, 0.0];
    let short = ScoredRecord { log_odds: &[0.0], inputs: &inputs, terms: &[] };
    assert!(matches!(summary.add_scored(&frame, &short, 1.0), Err(DriftError::Length { .. })));
    let few = record(&[1.0]);
    assert!(matches!(summary.add_scored(&frame, &few, 1.0), Err(DriftError::Length { .. })));
    let broken = ScoredRecord { log_odds: &[0.0, f64::NAN, 0.0], inputs: &inputs, terms: &[] };
    assert!(matches!(summary.add_outcome(&frame, &broken, 0, 1.0, 1.0), Err(DriftError::Number { .. })));
    assert!(matches!(summary.add_scored(&frame, &record(&inputs), 0.0), Err(DriftError::Number { .. })));
    let outside = summary.add_outcome(&frame, &record(&inputs), 4, 1.0, 1.0);
    assert_eq!(outside, Err(DriftError::UnknownCategory { found: 4, categories: 4 }));
    assert_eq!(summary, empty);
    assert_eq!(summary.merge(&worked_summary()), Err(DriftError::Shape { part: "fields" }));
    assert_eq!(
        summary.merge(&Summary::new(&frame, Detail::Light)),
        Err(DriftError::Shape { part: "detail" })
    );
    assert!(worked_summary().check(&frame).is_err());
}

#[test]
fn a_later_version_is_not_read() {
    let frame = worked_frame();
    let mut value = serde_json::to_value(worked_summary()).expect("a summary can be written");
    value["version"] = 2.into();
    let summary: Summary = serde_json::from_value(value).expect("the shape is the same");
    assert_eq!(summary.check(&frame), Err(DriftError::SummaryVersion { found: 2, supported: 1 }));
}

#[test]
fn many_categories_fold_too() {
    let names: Vec<String> = (0..40).map(|index| format!("zone {index}")).collect();
    let frame = Frame::for_fit(names, 7, Vec::new(), Vec::new(), 0).expect("a frame");
    let mut summary = Summary::new(&frame, Detail::Full);
    let log_odds = vec![0.0; 39];
    let record = ScoredRecord { log_odds: &log_odds, inputs: &[], terms: &[] };
    summary.add_outcome(&frame, &record, 39, 1.0, 1.0).expect("an outcome");
    assert!(summary.expected().iter().all(|expected| (expected - 0.025).abs() < 1e-15));
    assert!(summary.full.as_ref().is_some_and(|full| full.matrix.is_none()));
}

#[test]
fn hardly_anything_left_asks_for_a_rebuild() {
    let frame = worked_frame();
    let mut large = Summary::new(&frame, Detail::Light);
    let record = ScoredRecord { log_odds: &[0.3, -0.2], inputs: &[], terms: &[] };
    large.add_outcome(&frame, &record, 0, 1.0, 1e8).expect("an outcome");
    let taken = large.clone();
    large.add_outcome(&frame, &record, 1, 1.0, 1.0).expect("an outcome");
    assert_eq!(large.subtract(&taken), Ok(Remainder::Rebuild));
    assert_eq!(large.subtract(&Summary::new(&frame, Detail::Light)), Ok(Remainder::Precise));
}
