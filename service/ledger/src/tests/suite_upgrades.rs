//! Ledgers of earlier programs: what every store does with them.

use super::parcels::{
    DAY, MODEL, START, keep, observe, outcome, publish, record, records, verified, version, with_live,
};
use super::places::Place;
use crate::{Job, ShadowScore, ShadowScores, Stream, VersionState, WindowSummary, day_of};

const ALWAYS: [i64; 2] = [i64::MIN, i64::MAX];

fn windows(ledger: &crate::Ledger, version: &str) -> Vec<WindowSummary> {
    ledger.summaries(MODEL, version, ALWAYS).unwrap()
}

/// Summaries with other sums are computed anew when the ledger is opened; those whose records were
/// removed cannot be, and are not shown.
pub(super) fn summaries_of_an_earlier_program_are_computed_anew(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let shadow = version("second");
    publish(&ledger, &shadow, VersionState::Shadow);
    let new: Vec<_> = (0..30).map(|i| record(&format!("S-{i}"), START + i64::from(i % 4) * DAY, i)).collect();
    let score = |i: u32| {
        let scored = record("", START, i + 7);
        Some(ShadowScore { log_odds: scored.log_odds, inputs: scored.inputs, segments: scored.segments })
    };
    let shadows =
        vec![ShadowScores { version: shadow.fingerprint.clone(), scores: (0..30).map(score).collect() }];
    ledger.write(Job::RecordsWithShadows { records: records(&live, new), shadows }).unwrap();
    observe(&ledger, (0..20).map(|i| outcome(&format!("S-{i}"), "carded", START)).collect());
    ledger.prune(day_of(START) + 1).unwrap();
    let before = [windows(&ledger, &live.fingerprint), windows(&ledger, &shadow.fingerprint)];
    drop(ledger);
    place.age_the_summaries();
    let ledger = place.open();
    verified(&ledger);
    for (version, before) in [&live, &shadow].into_iter().zip(before) {
        let (kept, pruned): (Vec<_>, Vec<_>) =
            before.into_iter().partition(|window| window.day > day_of(START));
        assert!(!kept.is_empty() && !pruned.is_empty());
        let after = windows(&ledger, &version.fingerprint);
        assert_eq!(after.len(), kept.len());
        for (after, kept) in after.iter().zip(&kept) {
            assert_eq!((after.day, &after.stream), (kept.day, &kept.stream));
            assert_eq!(crate::compare::difference(&after.summary, &kept.summary), None);
        }
    }
    assert_eq!(keep(&ledger, &live, vec![record("S-new", START + DAY, 1)]), [false]);
    let all = ledger.merged(MODEL, &live.fingerprint, &Stream::All, ALWAYS).unwrap().unwrap();
    assert_eq!(all.scored(), 23.0);
    verified(&ledger);
}
