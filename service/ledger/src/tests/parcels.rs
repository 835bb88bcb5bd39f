//! An invented parcel round: the result of a first delivery attempt.

use kilter_model::ModelFile;
use serde_json::json;

use crate::{
    Act, Job, Ledger, NewOutcome, NewRecord, OutcomeState, Outcomes, Records, Reply, VersionRow, VersionState,
};

pub(super) const MODEL: &str = "attempt";
pub(super) const CATEGORIES: [&str; 4] = ["handed-over", "safe-place", "neighbour", "carded"];
pub(super) const HOUR: i64 = 3_600_000_000;
pub(super) const DAY: i64 = 24 * HOUR;
/// 2026-08-01T00:00:00Z.
pub(super) const START: i64 = 20_666 * DAY;

/// A version of the model; versions differ in their cautions alone.
pub(super) fn version(caution: &str) -> VersionRow {
    version_of(caution, &CATEGORIES)
}

pub(super) fn version_of(caution: &str, categories: &[&str]) -> VersionRow {
    let coefficients: serde_json::Map<String, serde_json::Value> =
        categories[1..].iter().map(|name| ((*name).to_owned(), json!([-1.0, 0.1, 0.5, -0.5, 0.2]))).collect();
    let document = json!({
        "format": "kilter-model", "format_version": "1.0", "name": MODEL, "cautions": [caution],
        "outcome": {"field": "result", "categories": categories, "reference": categories[0]},
        "fields": [
            {"kind": "number", "name": "weight_kg", "observed": [0.1, 30.0]},
            {"kind": "levels", "name": "dwelling", "levels": ["house", "flat", "farm"], "reference": "house"},
            {"kind": "flag", "name": "rain"},
        ],
        "terms": ["(intercept)", "weight_kg", "dwelling=flat", "dwelling=farm", "rain"],
        "coefficients": coefficients,
        "monitor": {"segments": ["depot"]},
        "fingerprint": "",
    });
    let mut model: ModelFile = serde_json::from_value(document).unwrap();
    model.seal().unwrap();
    VersionRow {
        model: MODEL.into(),
        fingerprint: model.fingerprint.clone(),
        file: model.to_json().unwrap(),
        state: VersionState::Live,
        published_at: START,
    }
}

pub(super) fn publish(ledger: &Ledger, version: &VersionRow, state: VersionState) {
    let version = VersionRow { state, ..version.clone() };
    assert_eq!(ledger.write(Job::Publish { version, who: "Ada".into() }).unwrap(), Reply::Published);
}

/// A ledger with one live version.
pub(super) fn with_live(ledger: &Ledger) -> VersionRow {
    let live = version("first");
    publish(ledger, &live, VersionState::Live);
    live
}

/// A record whose numbers follow from `seed`.
pub(super) fn record(id: &str, time: i64, seed: u32) -> NewRecord {
    let x = f64::from(seed % 17) / 5.0 - 1.6;
    NewRecord {
        id: id.into(),
        time,
        log_odds: vec![x, 0.3 - x, -1.0 + 0.2 * x],
        inputs: vec![0.5 + f64::from(seed % 40), f64::from(seed % 3), f64::from(seed % 2)],
        segments: vec![["north", "south", ""][seed as usize % 3].into()],
    }
}

pub(super) fn records(version: &VersionRow, records: Vec<NewRecord>) -> Records {
    Records {
        model: MODEL.into(),
        version: version.fingerprint.clone(),
        received: START + 400 * DAY,
        records,
    }
}

/// For each record whether it was there.
pub(super) fn keep(ledger: &Ledger, version: &VersionRow, new: Vec<NewRecord>) -> Vec<bool> {
    match ledger.write(Job::Records(records(version, new))).unwrap() {
        Reply::Records(repeated) => repeated,
        other => panic!("{other:?}"),
    }
}

pub(super) fn outcome(id: &str, category: &str, observed_at: i64) -> NewOutcome {
    NewOutcome { id: id.into(), category: category.into(), observed_at: Some(observed_at) }
}

pub(super) fn outcomes(outcomes: Vec<NewOutcome>) -> Outcomes {
    Outcomes { model: MODEL.into(), received: START + 401 * DAY, outcomes }
}

pub(super) fn observe(ledger: &Ledger, new: Vec<NewOutcome>) -> Vec<OutcomeState> {
    match ledger.write(Job::Outcomes(outcomes(new))).unwrap() {
        Reply::Outcomes(states) => states,
        other => panic!("{other:?}"),
    }
}

pub(super) fn act(why: &str) -> Act {
    Act { at: START + DAY, who: "Ada".into(), why: why.into() }
}

pub(super) fn delete(ledger: &Ledger, ids: &[&str]) -> Vec<bool> {
    let ids = ids.iter().map(|id| (*id).to_owned()).collect();
    match ledger.write(Job::Delete { model: MODEL.into(), ids, act: act("asked for") }).unwrap() {
        Reply::Deleted(found) => found,
        other => panic!("{other:?}"),
    }
}

#[track_caller]
pub(super) fn verified(ledger: &Ledger) {
    assert_eq!(ledger.verify().unwrap(), []);
}
