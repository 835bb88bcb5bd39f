//! Moving a ledger from SQLite to PostgreSQL.

use std::ops::ControlFlow;

use super::parcels::{
    DAY, HOUR, MODEL, START, delete, keep, observe, outcome, publish, record, records, verified, version,
    with_live,
};
use super::places::{Place, PostgresPlace, SqlitePlace};
use crate::{
    FileStart, Job, Ledger, LedgerError, Moved, OutcomeState, RawRecord, ShadowScore, ShadowScores,
    VersionState, day_of, move_from_sqlite,
};

const ALWAYS: [i64; 2] = [i64::MIN, i64::MAX];

/// A ledger with something of everything.
fn fill(ledger: &Ledger) {
    let live = with_live(ledger);
    let shadow = version("second");
    publish(ledger, &shadow, VersionState::Shadow);
    let time = |i: u32| START + i64::from(i % 5) * DAY + i64::from(i) * HOUR / 7;
    let mut new: Vec<_> = (0..60).map(|i| record(&format!("S-{i}"), time(i), i)).collect();
    new.push(record("a\0b", START + 2 * DAY, 4));
    let score = |i: u32| {
        let scored = record("", START, i + 7);
        Some(ShadowScore { log_odds: scored.log_odds, inputs: scored.inputs, segments: scored.segments })
    };
    let scores = (0..61).map(|i| if i % 3 == 0 { None } else { score(i) }).collect();
    let shadows = vec![ShadowScores { version: shadow.fingerprint, scores }];
    ledger.write(Job::RecordsWithShadows { records: records(&live, new), shadows }).unwrap();
    observe(
        ledger,
        (0..80).step_by(2).map(|i| outcome(&format!("S-{i}"), "carded", time(i) + HOUR)).collect(),
    );
    observe(ledger, (0..80).step_by(6).map(|i| outcome(&format!("S-{i}"), "neighbour", time(i))).collect());
    delete(ledger, &["S-59", "S-58"]);
    ledger.prune(day_of(START) + 1).unwrap();
    let file = FileStart {
        model: MODEL.into(),
        sha256: "5f".repeat(32),
        name: "monday.csv".into(),
        claim: "a".into(),
        result: "monday.scored".into(),
        started: START,
    };
    ledger.write(Job::BeginFile(file)).unwrap();
}

fn all_records(ledger: &Ledger, version: &str) -> Vec<RawRecord> {
    let mut found = Vec::new();
    ledger
        .records(MODEL, version, ALWAYS, |record| {
            found.push(record);
            ControlFlow::Continue(())
        })
        .unwrap();
    found
}

#[test]
fn a_moved_ledger_is_the_same() {
    let (old, new) = (SqlitePlace::new(), PostgresPlace::new());
    fill(&old.open());
    let moved = move_from_sqlite(&old.path(), &new.address()).unwrap();
    let want =
        Moved { records: 47, outcomes: 33, versions: 2, summaries: moved.summaries, differences: vec![] };
    let (before, after) = (old.open(), new.open());
    let counts = before.counts(MODEL).unwrap();
    assert_eq!(moved, want, "{counts:?}");
    assert_eq!(after.counts(MODEL).unwrap(), counts);
    let versions = before.versions(None).unwrap();
    assert_eq!(after.versions(None).unwrap(), versions);
    assert_eq!(after.audit(MODEL).unwrap(), before.audit(MODEL).unwrap());
    for version in versions.iter().map(|version| &version.fingerprint) {
        assert_eq!(after.streams(MODEL, version).unwrap(), before.streams(MODEL, version).unwrap());
        assert_eq!(
            after.summaries(MODEL, version, ALWAYS).unwrap(),
            before.summaries(MODEL, version, ALWAYS).unwrap()
        );
        assert_eq!(all_records(&after, version), all_records(&before, version));
    }
    for i in 0..80 {
        let id = format!("S-{i}");
        assert_eq!(after.record(MODEL, &id).unwrap(), before.record(MODEL, &id).unwrap(), "{id}");
        assert_eq!(after.former_outcomes(MODEL, &id).unwrap(), before.former_outcomes(MODEL, &id).unwrap());
    }
    verified(&after);
    // Writing goes on in the same way in both.
    let live = version("first");
    for ledger in [&before, &after] {
        let again = vec![record("a\0b", START, 1), record("S-17", START, 1), record("S-59", START + DAY, 1)];
        assert_eq!(keep(ledger, &live, again), [true, true, false]);
        assert_eq!(observe(ledger, vec![outcome("S-72", "carded", START)]), [OutcomeState::Corrected]);
        assert_eq!(observe(ledger, vec![outcome("S-59", "carded", START)]), [OutcomeState::Matched]);
        publish(ledger, &version("third"), VersionState::Shadow);
        verified(ledger);
    }
    assert_eq!(after.counts(MODEL).unwrap(), before.counts(MODEL).unwrap());
}

#[test]
fn a_ledger_is_moved_only_where_there_is_none() {
    let (old, new) = (SqlitePlace::new(), PostgresPlace::new());
    fill(&old.open());
    with_live(&new.open());
    let refused = move_from_sqlite(&old.path(), &new.address());
    assert!(
        matches!(&refused, Err(LedgerError::NotEmpty { ledger }) if ledger.contains("postgres@")),
        "{refused:?}"
    );
    assert_eq!(new.open().counts(MODEL).unwrap().records, 0);
    let nowhere = old.path().with_extension("missing");
    let refused = move_from_sqlite(&nowhere, &PostgresPlace::new().address());
    assert!(matches!(refused, Err(LedgerError::NoLedger { .. })), "{refused:?}");
    assert!(!nowhere.exists());
}

#[test]
fn a_postgres_ledger_says_how_it_is_copied() {
    let ledger = PostgresPlace::new().open();
    let refused = ledger.backup(std::path::Path::new("/nowhere")).unwrap_err();
    assert!(refused.to_string().contains("pg_dump"), "{refused}");
}
