//! Versions, their audit trail, and shadows: what every store does.

use std::ops::ControlFlow;

use super::parcels::{
    CATEGORIES, DAY, HOUR, MODEL, START, act, keep, observe, outcome, publish, record, records, verified,
    version, version_of, with_live,
};
use super::places::Place;
use crate::{
    Job, Ledger, LedgerError, OutcomeState, RawPair, Records, Reply, ShadowScore, ShadowScores, Stream,
    VersionChange, VersionRow, VersionState,
};

const ALWAYS: [i64; 2] = [i64::MIN, i64::MAX];

fn change(ledger: &Ledger, change: VersionChange) -> Result<VersionRow, LedgerError> {
    let job = Job::ChangeVersion { model: MODEL.into(), change, act: act("because") };
    match ledger.write(job)? {
        Reply::Changed(row) => Ok(row),
        other => panic!("{other:?}"),
    }
}

fn live(ledger: &Ledger) -> String {
    ledger.live(MODEL).unwrap().unwrap().fingerprint
}

pub(super) fn one_version_is_live(place: &dyn Place) {
    let ledger = place.open();
    assert_eq!(ledger.live(MODEL).unwrap(), None);
    let (first, second) = (version("first"), version("second"));
    publish(&ledger, &first, VersionState::Live);
    publish(&ledger, &second, VersionState::Shadow);
    assert_eq!(ledger.live(MODEL).unwrap(), Some(first.clone()));
    let promoted = change(&ledger, VersionChange::Promote(second.fingerprint.clone())).unwrap();
    assert_eq!(promoted, VersionRow { state: VersionState::Live, ..second.clone() });
    let states: Vec<_> = ledger.versions(None).unwrap().into_iter().map(|version| version.state).collect();
    assert_eq!(states, [VersionState::Retired, VersionState::Live]);
    let trail: Vec<_> = ledger
        .audit(MODEL)
        .unwrap()
        .into_iter()
        .map(|entry| (entry.what, entry.act.who, entry.act.why, entry.from, entry.to))
        .collect();
    let line = |what: &str, why: &str, from: Option<&VersionRow>, to: &VersionRow| {
        let from = from.map(|version| version.fingerprint.clone());
        (what.to_owned(), "Ada".to_owned(), why.to_owned(), from, Some(to.fingerprint.clone()))
    };
    assert_eq!(
        trail,
        [
            line("publish as live", "", None, &first),
            line("publish as shadow", "", Some(&first), &second),
            line("promote", "because", Some(&first), &second),
        ]
    );
}

pub(super) fn going_back_twice_goes_further_back(place: &dyn Place) {
    let ledger = place.open();
    let [first, second, third] = ["first", "second", "third"].map(version);
    for version in [&first, &second, &third] {
        publish(&ledger, version, VersionState::Live);
    }
    assert_eq!(change(&ledger, VersionChange::Rollback).unwrap().fingerprint, second.fingerprint);
    assert_eq!(change(&ledger, VersionChange::Rollback).unwrap().fingerprint, first.fingerprint);
    let further = change(&ledger, VersionChange::Rollback);
    assert!(matches!(further, Err(LedgerError::NoFormerVersion { .. })), "{further:?}");
    change(&ledger, VersionChange::Promote(third.fingerprint.clone())).unwrap();
    assert_eq!(change(&ledger, VersionChange::Rollback).unwrap().fingerprint, first.fingerprint);
    assert_eq!(live(&ledger), first.fingerprint);
    assert_eq!(ledger.audit(MODEL).unwrap().len(), 7, "what failed leaves no line");
}

pub(super) fn what_must_not_change_does_not(place: &dyn Place) {
    let ledger = place.open();
    let first = with_live(&ledger);
    let retire = change(&ledger, VersionChange::Retire(first.fingerprint.clone()));
    assert!(matches!(retire, Err(LedgerError::LiveVersion { .. })), "{retire:?}");
    let as_shadow = VersionRow { state: VersionState::Shadow, ..first.clone() };
    let refused = ledger.write(Job::Publish { version: as_shadow, who: "Ada".into() });
    assert!(matches!(refused, Err(LedgerError::LiveVersion { .. })), "{refused:?}");
    let unknown = change(&ledger, VersionChange::Promote("sha256:00".into()));
    assert!(matches!(unknown, Err(LedgerError::UnknownVersion { .. })), "{unknown:?}");
    assert_eq!(live(&ledger), first.fingerprint);
    let second = version("second");
    publish(&ledger, &second, VersionState::Shadow);
    let retired = change(&ledger, VersionChange::Retire(second.fingerprint.clone())).unwrap();
    assert_eq!(retired.state, VersionState::Retired);
    assert_eq!(ledger.versions(Some(VersionState::Shadow)).unwrap(), []);
}

pub(super) fn what_a_bad_model_file_gives(place: &dyn Place) {
    let ledger = place.open();
    let good = version("first");
    let other_name = VersionRow { model: "another".into(), ..good.clone() };
    let torn = VersionRow { file: good.file[..200].into(), ..good.clone() };
    let altered = VersionRow { file: good.file.replace("0.5", "0.6"), ..good };
    for version in [other_name, torn, altered] {
        let refused = ledger.write(Job::Publish { version, who: "Ada".into() });
        assert!(matches!(refused, Err(LedgerError::ModelFile { .. })), "{refused:?}");
    }
    assert_eq!(ledger.versions(None).unwrap(), []);
}

fn score(seed: u32) -> ShadowScore {
    let scored = record("", START, seed);
    ShadowScore { log_odds: scored.log_odds, inputs: scored.inputs, segments: scored.segments }
}

fn keep_with_shadow(
    ledger: &Ledger,
    records: Records,
    shadow: &VersionRow,
    scores: Vec<Option<ShadowScore>>,
) {
    let shadows = vec![ShadowScores { version: shadow.fingerprint.clone(), scores }];
    let reply = ledger.write(Job::RecordsWithShadows { records, shadows }).unwrap();
    assert!(matches!(reply, Reply::Records(_)), "{reply:?}");
}

fn pairs(ledger: &Ledger, live: &VersionRow, shadow: &VersionRow) -> Vec<RawPair> {
    let mut found = Vec::new();
    ledger
        .pairs(MODEL, &live.fingerprint, &shadow.fingerprint, ALWAYS, |pair| {
            found.push(pair);
            ControlFlow::Continue(())
        })
        .unwrap();
    found
}

fn observed(ledger: &Ledger, version: &VersionRow) -> Vec<f64> {
    let summary = ledger.merged(MODEL, &version.fingerprint, &Stream::All, ALWAYS).unwrap().unwrap();
    summary.observed().to_vec()
}

pub(super) fn shadows_are_kept_beside(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let shadow = version("second");
    publish(&ledger, &shadow, VersionState::Shadow);
    observe(&ledger, vec![outcome("S-1", "carded", START)]);
    let three = || (1..4).map(|i| record(&format!("S-{i}"), START, i)).collect();
    keep_with_shadow(&ledger, records(&live, three()), &shadow, vec![Some(score(7)), None, Some(score(9))]);
    // The same records again change nothing, whatever the shadow makes of them now.
    keep_with_shadow(&ledger, records(&live, three()), &shadow, vec![Some(score(8)); 3]);
    observe(&ledger, vec![outcome("S-2", "neighbour", START), outcome("S-3", "neighbour", START)]);
    assert_eq!(observe(&ledger, vec![outcome("S-3", "safe-place", START + HOUR)]), [OutcomeState::Corrected]);
    assert_eq!(observed(&ledger, &live), [0.0, 1.0, 1.0, 1.0]);
    assert_eq!(observed(&ledger, &shadow), [0.0, 1.0, 0.0, 1.0]);
    let found = pairs(&ledger, &live, &shadow);
    let found: Vec<_> = found
        .iter()
        .map(|pair| (pair.record.id.as_str(), &pair.shadow, pair.record.outcome.as_ref().unwrap()))
        .map(|(id, shadow, outcome)| (id, shadow.clone(), outcome.category.as_str()))
        .collect();
    assert_eq!(found, [("S-1", score(7), "carded"), ("S-3", score(9), "safe-place")]);
    let mut log_odds = Vec::new();
    ledger
        .records(MODEL, &shadow.fingerprint, ALWAYS, |record| {
            log_odds.push(record.log_odds);
            ControlFlow::Continue(())
        })
        .unwrap();
    assert_eq!(log_odds, [score(7).log_odds, score(9).log_odds]);
    assert_eq!(ledger.waiting_records().unwrap(), 0, "a record waits once, however many versions scored it");
    verified(&ledger);
    // A shadow that became live answers, and its windows hold both.
    change(&ledger, VersionChange::Promote(shadow.fingerprint.clone())).unwrap();
    keep(&ledger, &shadow, vec![record("S-8", START, 8)]);
    let whole = ledger.merged(MODEL, &shadow.fingerprint, &Stream::All, ALWAYS).unwrap().unwrap();
    assert_eq!(whole.scored(), 3.0);
    verified(&ledger);
}

pub(super) fn a_shadow_need_not_know_every_category(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let shadow = version_of("without carded", &CATEGORIES[..3]);
    publish(&ledger, &shadow, VersionState::Shadow);
    let mut narrow = score(2);
    narrow.log_odds.pop();
    let new = vec![record("S-1", START, 1), record("S-2", START + DAY, 2)];
    keep_with_shadow(&ledger, records(&live, new), &shadow, vec![Some(narrow.clone()), Some(narrow)]);
    observe(&ledger, vec![outcome("S-1", "carded", START), outcome("S-2", "neighbour", START)]);
    assert_eq!(observed(&ledger, &live), [0.0, 0.0, 1.0, 1.0]);
    assert_eq!(observed(&ledger, &shadow), [0.0, 0.0, 1.0]);
    verified(&ledger);
    assert_eq!(observe(&ledger, vec![outcome("S-1", "neighbour", START)]), [OutcomeState::Corrected]);
    assert_eq!(observed(&ledger, &shadow), [0.0, 0.0, 2.0]);
    verified(&ledger);
}
