//! Deletion on request and removal by age: what every store does.

use super::parcels::{
    DAY, HOUR, MODEL, START, delete, keep, observe, outcome, publish, record, records, verified, version,
    with_live,
};
use super::places::Place;
use crate::{
    Counts, Job, OutcomeState, Pruned, Reply, ShadowScore, ShadowScores, Stream, VersionState, WindowSummary,
    day_of,
};

const ALWAYS: [i64; 2] = [i64::MIN, i64::MAX];

pub(super) fn deleted_records_leave_no_trace_in_summaries(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, vec![record("S-1", START, 1), record("S-2", START, 2)]);
    observe(&ledger, vec![outcome("S-1", "carded", START + HOUR)]);
    keep(&ledger, &live, (3..20).map(|i| record(&format!("S-{i}"), START + DAY, i)).collect());
    observe(&ledger, vec![outcome("S-5", "carded", START), outcome("S-5", "neighbour", START)]);
    assert_eq!(delete(&ledger, &["S-5", "S-2", "S-99", "S-5"]), [true, true, false, false]);
    verified(&ledger);
    assert_eq!(ledger.record(MODEL, "S-5").unwrap(), None);
    assert_eq!(ledger.former_outcomes(MODEL, "S-5").unwrap(), []);
    assert_eq!(delete(&ledger, &["S-1"]), [true]);
    let windows = ledger.summaries_of(MODEL, &live.fingerprint, &Stream::All, ALWAYS).unwrap();
    let left: Vec<_> =
        windows.iter().map(|window| (window.summary.scored(), window.summary.outcomes())).collect();
    assert_eq!(left, [(0.0, 0.0), (16.0, 0.0)]);
    let want = Counts {
        records: 16,
        matched: 0,
        waiting_records: 16,
        waiting_outcomes: 0,
        days: Some([day_of(START) + 1; 2]),
    };
    assert_eq!(ledger.counts(MODEL).unwrap(), want);
    let trail: Vec<String> = ledger.audit(MODEL).unwrap().into_iter().map(|entry| entry.what).collect();
    assert_eq!(trail[1..], ["delete 2 records", "delete 1 records"]);
    verified(&ledger);
}

pub(super) fn a_deleted_id_may_come_again(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, (0..9).map(|i| record(&format!("S-{i}"), START, i)).collect());
    observe(&ledger, vec![outcome("S-8", "carded", START)]);
    delete(&ledger, &["S-8"]);
    assert_eq!(keep(&ledger, &live, vec![record("S-8", START, 3)]), [false]);
    assert_eq!(ledger.record(MODEL, "S-8").unwrap().unwrap().outcome, None, "the outcome is gone, too");
    assert_eq!(observe(&ledger, vec![outcome("S-8", "neighbour", START)]), [OutcomeState::Matched]);
    verified(&ledger);
}

pub(super) fn deletion_covers_shadows_and_waiting_outcomes(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let shadow = version("second");
    publish(&ledger, &shadow, VersionState::Shadow);
    let new: Vec<_> = (0..4).map(|i| record(&format!("S-{i}"), START, i)).collect();
    let score = |seed| {
        let scored = record("", START, seed);
        Some(ShadowScore { log_odds: scored.log_odds, inputs: scored.inputs, segments: scored.segments })
    };
    let scores = vec![score(4), score(5), None, score(6)];
    let shadows = vec![ShadowScores { version: shadow.fingerprint.clone(), scores }];
    ledger.write(Job::RecordsWithShadows { records: records(&live, new), shadows }).unwrap();
    observe(&ledger, vec![outcome("S-1", "carded", START), outcome("S-waits", "carded", START)]);
    assert_eq!(delete(&ledger, &["S-1", "S-2", "S-waits"]), [true, true, true]);
    let whole = ledger.merged(MODEL, &shadow.fingerprint, &Stream::All, ALWAYS).unwrap().unwrap();
    assert_eq!((whole.scored(), whole.outcomes()), (2.0, 0.0));
    assert_eq!(ledger.counts(MODEL).unwrap().waiting_outcomes, 0);
    verified(&ledger);
}

fn windows(ledger: &crate::Ledger, version: &str) -> Vec<WindowSummary> {
    ledger.summaries(MODEL, version, ALWAYS).unwrap()
}

pub(super) fn pruned_days_keep_their_summaries(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let new = (0..50).map(|i| record(&format!("S-{i}"), START + i64::from(i) * 4 * HOUR, i)).collect();
    keep(&ledger, &live, new);
    observe(&ledger, (0..50).step_by(2).map(|i| outcome(&format!("S-{i}"), "carded", START)).collect());
    let before = windows(&ledger, &live.fingerprint);
    // In steps of seven rows, and then to the end.
    let first = ledger.write(Job::Prune { before: day_of(START) + 3, most_rows: 7 }).unwrap();
    assert_eq!(first, Reply::Pruned(Pruned { records: 7, outcomes: 7, more: true }));
    verified(&ledger);
    let rest = ledger.prune(day_of(START) + 3).unwrap();
    assert_eq!(rest, Pruned { records: 18 - 7, outcomes: 9 - 7, more: false });
    assert_eq!(windows(&ledger, &live.fingerprint), before);
    verified(&ledger);
    assert_eq!(ledger.record(MODEL, "S-17").unwrap(), None);
    assert!(ledger.record(MODEL, "S-18").unwrap().is_some());
    let counts = ledger.counts(MODEL).unwrap();
    assert_eq!((counts.records, counts.matched, counts.waiting_records), (50, 25, 16));
    assert_eq!(ledger.waiting_records().unwrap(), 16);
    // An earlier day than before changes nothing.
    assert_eq!(ledger.prune(day_of(START)).unwrap(), Pruned::default());
    drop(ledger);
    let ledger = place.open();
    assert_eq!(keep(&ledger, &live, vec![record("S-20", START + 4 * DAY, 1)]), [true]);
    assert_eq!(windows(&ledger, &live.fingerprint), before);
    verified(&ledger);
}

pub(super) fn what_comes_late_for_a_pruned_day_is_kept_but_not_folded(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, (0..5).map(|i| record(&format!("S-{i}"), START, i)).collect());
    ledger.prune(day_of(START) + 1).unwrap();
    let before = windows(&ledger, &live.fingerprint);
    assert_eq!(keep(&ledger, &live, vec![record("S-late", START, 1)]), [false]);
    assert_eq!(observe(&ledger, vec![outcome("S-late", "carded", START)]), [OutcomeState::Matched]);
    assert_eq!(observe(&ledger, vec![outcome("S-late", "neighbour", START)]), [OutcomeState::Corrected]);
    assert_eq!(observe(&ledger, vec![outcome("S-0", "carded", START)]), [OutcomeState::Waiting]);
    assert!(ledger.record(MODEL, "S-late").unwrap().is_some());
    assert_eq!(windows(&ledger, &live.fingerprint), before);
    assert_eq!(delete(&ledger, &["S-late"]), [true]);
    assert_eq!(windows(&ledger, &live.fingerprint), before);
    verified(&ledger);
}

pub(super) fn numbers_are_not_given_twice(place: &dyn Place) {
    let (one, other) = (place.open(), place.open());
    let live = with_live(&one);
    for round in 0..4 {
        let ids: Vec<String> = (0..10).map(|i| format!("S-{round}-{i}")).collect();
        keep(&one, &live, ids.iter().map(|id| record(id, START, 1)).collect());
        observe(&other, ids.iter().map(|id| outcome(id, "carded", START)).collect());
        let last: Vec<&str> = ids.iter().skip(5).map(String::as_str).collect();
        assert_eq!(delete(&other, &last), [true; 5]);
        let again = keep(&one, &live, ids.iter().map(|id| record(id, START, 2)).collect());
        assert_eq!(again, [true, true, true, true, true, false, false, false, false, false]);
        let states = observe(&one, ids.iter().map(|id| outcome(id, "carded", START)).collect());
        assert_eq!(states[4], OutcomeState::Repeated);
        assert_eq!(states[5], OutcomeState::Matched);
    }
    verified(&other);
}
