//! Whole reports over invented parcel rounds.

use kilter_model::{Baseline, FieldBaseline};

use crate::baseline::{FitFacts, baseline};
use crate::findings::{FindingKind, Severity};
use crate::frame::Frame;
use crate::record::ScoredRecord;
use crate::report::{Report, ReportSettings, report};
use crate::segments::Segment;
use crate::statistic::Status;
use crate::summary::{Detail, Summary};
use crate::test_data::parcel_frame;

/// A stream of numbers in 0..1, the same in every run (splitmix64, Steele et al. 2014).
struct Stream(u64);

impl Stream {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        ((z ^ (z >> 31)) >> 11) as f64 / (1_u64 << 53) as f64
    }
}

/// How the world differs from the model.
#[derive(Clone, Copy, Default)]
struct Drift {
    /// Added to the log-odds of the last category.
    carded: f64,
    /// Share of records without the weight.
    missing: f64,
    /// Added to the weight.
    heavier: f64,
    /// Share of records whose outcome never comes.
    lost: f64,
    /// Share of records of a dwelling that the model does not know.
    houseboats: f64,
}

/// Summaries of `n` records of a stream.
fn parcels(frame: &Frame, seed: u64, n: usize, drift: Drift) -> Summary {
    let mut stream = Stream(seed);
    let mut summary = Summary::new(frame, Detail::Full);
    for _ in 0..n {
        let weight = 0.2 + 8.0 * stream.next() + drift.heavier;
        let dwelling = (3.0 * stream.next()).floor();
        let rain = f64::from(u8::from(stream.next() < 0.3));
        let log_odds =
            [-1.0 + 0.4 * dwelling - 0.1 * weight, -0.5 + 0.3 * rain, -1.2 + 0.25 * weight - 0.3 * dwelling];
        let unseen = stream.next() < drift.houseboats;
        let without_weight = stream.next() < drift.missing;
        let inputs =
            [if without_weight { f64::NAN } else { weight }, if unseen { -1.0 } else { dwelling }, rain];
        let record = ScoredRecord { log_odds: &log_odds, inputs: &inputs, terms: &[] };
        summary.add_scored(frame, &record, 1.0).expect("a record");
        let odds = [1.0, log_odds[0].exp(), log_odds[1].exp(), (log_odds[2] + drift.carded).exp()];
        let mut point = stream.next() * odds.iter().sum::<f64>();
        let category = odds.iter().position(|odds| {
            point -= odds;
            point < 0.0
        });
        if stream.next() >= drift.lost {
            summary.add_outcome(frame, &record, category.unwrap_or(3), 30.0, 1.0).expect("an outcome");
        }
    }
    summary
}

fn known_frame() -> Frame {
    let plain = parcel_frame();
    let facts = FitFacts { cases: 20_000.0, slopes: 12, ..FitFacts::default() };
    let known = baseline(&plain, &parcels(&plain, 1, 20_000, Drift::default()), facts).expect("a baseline");
    let mut frame = plain;
    frame.baseline = Some(known);
    frame
}

fn report_of(frame: &Frame, summary: &Summary) -> Report {
    report(frame, summary, summary, &[], &ReportSettings::default()).expect("a report")
}

fn kinds(report: &Report) -> Vec<FindingKind> {
    report.findings.iter().map(|finding| finding.kind).collect()
}

#[test]
fn without_drift_nothing_is_found() {
    let frame = known_frame();
    let found = report_of(&frame, &parcels(&frame, 2, 5000, Drift::default()));
    assert_eq!(kinds(&found), [FindingKind::Calibration], "{:#?}", found.findings);
    assert_eq!(found.findings[0].severity, Severity::Note);
    assert_eq!(found.calibration.joint.status, Status::Valid);
    assert!(found.calibration.matrix.valid_p().is_some_and(|p| p > 0.01));
    assert_eq!(found.reliability.len(), 4);
}

#[test]
fn a_shifted_category_is_named() {
    let frame = known_frame();
    let found = report_of(&frame, &parcels(&frame, 3, 5000, Drift { carded: 0.4, ..Drift::default() }));
    let mix = found.findings.iter().find(|finding| finding.kind == FindingKind::Mix).expect("a finding");
    assert_eq!(mix.subject, "carded");
    assert!(mix.sentence.starts_with("`carded` was observed"), "{}", mix.sentence);
    assert!(mix.sentence.contains(" more"), "{}", mix.sentence);
    let intercept = &found.calibration.estimates.intercepts[2];
    let [low, high] = intercept.estimate.interval.expect("a known fit");
    assert!(low < 0.4 && 0.4 < high, "{low}, {high}");
}

#[test]
fn a_broken_feed_is_named() {
    let frame = known_frame();
    let drift = Drift { missing: 0.1, heavier: 4.0, houseboats: 0.06, ..Drift::default() };
    let found = report_of(&frame, &parcels(&frame, 4, 3000, drift));
    let found = kinds(&found);
    for kind in [
        FindingKind::FieldMissing,
        FindingKind::FieldUnseen,
        FindingKind::FieldMoved,
        FindingKind::PredictedMix,
    ] {
        assert!(found.contains(&kind), "{kind:?} in {found:?}");
    }
    assert!(!found.contains(&FindingKind::Mix), "a moved field alone does not make the model wrong");
}

#[test]
fn lost_outcomes_are_told() {
    let frame = known_frame();
    let found = report_of(&frame, &parcels(&frame, 5, 3000, Drift { lost: 0.4, ..Drift::default() }));
    assert!(found.coverage.incomplete);
    assert!(kinds(&found).contains(&FindingKind::Coverage));
    assert!(found.coverage.test.valid_p().is_some_and(|p| p > 0.001));
}

#[test]
fn one_segment_apart_is_pointed_at() {
    let frame = known_frame();
    let drifts = [0.0, 0.0, 0.0, 0.0, 1.2];
    let parts: Vec<Summary> = drifts
        .iter()
        .enumerate()
        .map(|(index, carded)| {
            parcels(&frame, 10 + index as u64, 1500, Drift { carded: *carded, ..Drift::default() })
        })
        .collect();
    let mut whole = Summary::new(&frame, Detail::Full);
    for part in &parts {
        whole.merge(part).expect("one frame");
    }
    let depots = ["north", "east", "south", "west", "harbour"];
    let segments: Vec<Segment> = depots
        .iter()
        .zip(&parts)
        .map(|(value, summary)| Segment { label: "depot", value, summary })
        .collect();
    let found = report(&frame, &whole, &whole, &segments, &ReportSettings::default()).expect("a report");
    let group = &found.segments[0];
    assert_eq!(group.label, "depot");
    assert_eq!(group.look_at, ["harbour"]);
    assert_eq!(group.segments[0].value, "harbour", "the largest misfit comes first");
    assert!(group.segments[0].wrong);
    let pointed =
        found.findings.iter().find(|finding| finding.kind == FindingKind::Segment).expect("a finding");
    assert_eq!(pointed.subject, "depot=harbour");
}

#[test]
fn a_field_stuck_in_one_segment_is_told() {
    let frame = known_frame();
    let lively = parcels(&frame, 21, 500, Drift::default());
    let mut stuck = Summary::new(&frame, Detail::Full);
    for _ in 0..200 {
        let record = ScoredRecord { log_odds: &[-1.0, -0.5, -0.6], inputs: &[4.2, 1.0, 0.0], terms: &[] };
        stuck.add_scored(&frame, &record, 1.0).expect("a record");
    }
    let segments = [("north", &lively), ("harbour", &stuck)].map(|(value, summary)| Segment {
        label: "depot",
        value,
        summary,
    });
    let found = report(&frame, &lively, &lively, &segments, &ReportSettings::default()).expect("a report");
    let told: Vec<&str> = found
        .findings
        .iter()
        .filter(|finding| finding.subject == "depot=harbour")
        .map(|finding| finding.sentence.as_str())
        .collect();
    assert!(told.iter().any(|sentence| sentence.contains("`weight_kg` in one place")), "{told:?}");
    assert!(!found.findings.iter().any(|finding| finding.subject == "depot=north"));
}

#[test]
fn too_few_outcomes_and_no_baseline_are_said() {
    let frame = known_frame();
    let few = report_of(&frame, &parcels(&frame, 6, 20, Drift::default()));
    assert_eq!(kinds(&few), [FindingKind::TooFewOutcomes]);
    let unknown = parcel_frame();
    let found = report_of(&unknown, &parcels(&unknown, 7, 500, Drift::default()));
    assert_eq!(kinds(&found), [FindingKind::NoBaseline]);
    assert_eq!(found.calibration.joint.status, Status::TrainingSizeUnknown);
    let empty = report_of(&frame, &Summary::new(&frame, Detail::Full));
    assert_eq!(kinds(&empty), [FindingKind::TooFewOutcomes]);
}

#[test]
fn a_report_can_be_written() {
    let frame = known_frame();
    let found = report_of(&frame, &parcels(&frame, 8, 300, Drift::default()));
    let value = serde_json::to_value(&found).expect("a report can be written");
    let keys: Vec<&String> = value.as_object().expect("an object").keys().collect();
    assert_eq!(
        keys,
        [
            "findings",
            "categories",
            "scored",
            "outcomes",
            "training",
            "mix",
            "log_loss",
            "brier",
            "calibration",
            "reliability",
            "grouped_fit",
            "fields",
            "predictions",
            "predicted_mix",
            "coverage",
            "delays",
            "segments"
        ]
    );
    assert_eq!(value["calibration"]["joint"]["status"], "valid");
    assert_eq!(value["calibration"]["estimates"]["intercepts"][0]["category"], "safe-place");
}

#[test]
fn the_baseline_of_a_fit_reads_back_into_a_frame() {
    let frame = known_frame();
    let known: &Baseline = frame.baseline().expect("a baseline");
    let weights: &FieldBaseline = &known.fields[0];
    assert_eq!(weights.edges, [1.0, 2.0, 5.0]);
    assert_eq!(weights.counts.iter().sum::<f64>(), 20_000.0);
    assert!((known.mix.iter().sum::<f64>() - 1.0).abs() < 1e-12);
    assert!(known.expected_slope > 0.98 && known.expected_slope < 1.0);
}
