//! The queue and the writer's thread, on a store that the test holds up; and what only the embedded
//! store can show.

use std::path::Path;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::mpsc::{Receiver, Sender, channel};
use std::sync::{Arc, Mutex};

use super::parcels::{
    DAY, MODEL, START, delete, keep, observe, outcome, outcomes, record, records, verified, version,
    with_live,
};
use super::places::{Place, SqlitePlace};
use crate::sqlite::{SqliteStore, restore};
use crate::{Job, Ledger, LedgerError, LedgerUrl, NewRecord, Reader, Reply, Settings, Store};

/// A store that begins a commit only when it is told to, and fails where it is told to.
struct HeldUp {
    inner: SqliteStore,
    go: Receiver<()>,
    commits: Arc<Mutex<Vec<usize>>>,
}

impl Store for HeldUp {
    fn commit(&mut self, jobs: &[Job]) -> Result<Vec<Reply>, LedgerError> {
        self.go.recv().map_err(|_| LedgerError::Closed)?;
        self.commits.lock().unwrap().push(jobs.len());
        self.inner.commit(jobs)
    }

    fn maintain(&mut self) -> Result<(), LedgerError> {
        Ok(())
    }

    fn reader(&self) -> Result<Box<dyn Reader>, LedgerError> {
        self.inner.reader()
    }
}

/// The sender stands first, so that a test that fails lets the writer go before it waits for it.
struct Held {
    go: Sender<()>,
    ledger: Ledger,
    commits: Arc<Mutex<Vec<usize>>>,
    _place: SqlitePlace,
}

fn held_up(settings: Settings) -> Held {
    let place = SqlitePlace::new();
    let live = with_live(&place.open());
    assert_eq!(live, version("first"));
    let (go, wait) = channel();
    let commits = Arc::new(Mutex::new(Vec::new()));
    let store =
        HeldUp { inner: SqliteStore::open(&place.path()).unwrap(), go: wait, commits: commits.clone() };
    Held { go, ledger: Ledger::with_store(Box::new(store), settings).unwrap(), commits, _place: place }
}

fn one_record(i: u32) -> Job {
    Job::Records(records(&version("first"), vec![record(&format!("S-{i}"), START, i)]))
}

#[test]
fn a_full_queue_refuses_at_once_and_loses_nothing() {
    let held = held_up(Settings { longest_queue: 5, rows_per_commit: 1, ..Settings::default() });
    let (answer, answers) = channel();
    let (mut taken, mut busy) = (0, 0);
    for i in 0..20 {
        let answer = answer.clone();
        match held.ledger.submit(one_record(i), move |reply| answer.send(reply).unwrap()) {
            Ok(()) => taken += 1,
            Err(LedgerError::Busy) => busy += 1,
            Err(other) => panic!("{other}"),
        }
    }
    drop(answer);
    // Five lie in the queue; the writer may have taken one out before.
    assert!((5..=6).contains(&taken) && taken + busy == 20, "{taken} taken, {busy} refused");
    for _ in 0..taken {
        held.go.send(()).unwrap();
    }
    assert_eq!(answers.into_iter().flatten().count(), taken);
    assert_eq!(held.ledger.counts(MODEL).unwrap().records, taken as u64);
}

#[test]
fn rows_that_wait_are_bounded_but_a_large_request_is_taken_alone() {
    let held = held_up(Settings { most_rows_queued: 10, ..Settings::default() });
    let many = |from: u32, n: u32| {
        let new = (from..from + n).map(|i| record(&format!("S-{i}"), START, i)).collect();
        Job::Records(records(&version("first"), new))
    };
    let (answer, answers) = channel();
    let submit = |job| {
        let answer = answer.clone();
        held.ledger.submit(job, move |reply| answer.send(reply).unwrap())
    };
    submit(many(0, 50)).unwrap();
    // The writer takes it out of the queue at some moment; until then nothing else is taken.
    while let Err(error) = submit(many(100, 8)) {
        assert!(matches!(error, LedgerError::Busy), "{error}");
        std::thread::yield_now();
    }
    assert!(matches!(submit(many(200, 3)), Err(LedgerError::Busy)));
    submit(many(300, 2)).unwrap();
    for _ in 0..2 {
        held.go.send(()).unwrap();
    }
    for _ in 0..3 {
        assert!(answers.recv().unwrap().is_ok());
    }
    assert_eq!(held.ledger.counts(MODEL).unwrap().records, 60);
}

#[test]
fn what_waits_during_a_commit_is_committed_together() {
    let held = held_up(Settings::default());
    let (answer, answers) = channel();
    for i in 0..10 {
        let answer = answer.clone();
        held.ledger.submit(one_record(i), move |reply| answer.send(reply).unwrap()).unwrap();
    }
    for _ in 0..2 {
        held.go.send(()).unwrap();
    }
    for _ in 0..10 {
        assert!(answers.recv().unwrap().is_ok());
    }
    let commits = held.commits.lock().unwrap().clone();
    assert!(commits.len() <= 2 && commits.iter().sum::<usize>() == 10, "{commits:?}");
}

#[test]
fn the_last_handle_may_go_in_a_callback() {
    let place = SqlitePlace::new();
    let ledger = place.open();
    let live = with_live(&ledger);
    let (done, wait) = channel();
    let clone = ledger.clone();
    let job = Job::Records(records(&live, vec![record("S-1", START, 1)]));
    ledger
        .submit(job, move |reply| {
            drop(clone);
            done.send(reply.is_ok()).unwrap();
        })
        .unwrap();
    drop(ledger);
    assert!(wait.recv().unwrap());
}

#[test]
fn a_ledger_of_a_later_program_is_not_touched() {
    let place = SqlitePlace::new();
    drop(place.open());
    rusqlite::Connection::open(place.path()).unwrap().pragma_update(None, "user_version", 99).unwrap();
    let before = std::fs::read(place.path()).unwrap();
    let url = LedgerUrl::Sqlite(place.path());
    let refused = Ledger::open(&url, Settings::default());
    assert!(matches!(refused, Err(LedgerError::NewerSchema { found: 99, .. })), "{refused:?}");
    assert_eq!(std::fs::read(place.path()).unwrap(), before);
}

#[test]
fn what_is_no_ledger_is_refused() {
    let folder = tempfile::TempDir::new().unwrap();
    let path = folder.path().join("notes.txt");
    std::fs::write(&path, "Round 7 was late on Monday. ".repeat(100)).unwrap();
    let refused = Ledger::open(&LedgerUrl::Sqlite(path.clone()), Settings::default());
    assert!(matches!(refused, Err(LedgerError::Open { .. })), "{refused:?}");
    let others = folder.path().join("others.db");
    rusqlite::Connection::open(&others).unwrap().execute_batch("CREATE TABLE round (depot TEXT)").unwrap();
    let before = std::fs::read(&others).unwrap();
    let refused = Ledger::open(&LedgerUrl::Sqlite(others.clone()), Settings::default());
    assert!(matches!(refused, Err(LedgerError::NoLedger { .. })), "{refused:?}");
    assert_eq!(std::fs::read(&others).unwrap(), before);
    let missing = LedgerUrl::Sqlite(folder.path().join("no such folder/ledger.db"));
    assert!(matches!(Ledger::open(&missing, Settings::default()), Err(LedgerError::Open { .. })));
}

/// On a disk that is full and emptied again, requests fail as a whole and can be sent again.
#[test]
fn a_full_disk_refuses_whole_requests_and_loses_nothing() {
    let place = SqlitePlace::new();
    let live = with_live(&place.open());
    let mut store = SqliteStore::with_runs(&place.path(), 50).unwrap();
    let ids = |batch: u32| (0..200).map(move |i| format!("S-{batch}-{i}"));
    let batch_of = |batch: u32| {
        let new = ids(batch).map(|id| record(&id, START + i64::from(batch % 3) * DAY, batch)).collect();
        Job::Records(records(&live, new))
    };
    let outcomes_of =
        |batch: u32| Job::Outcomes(outcomes(ids(batch).map(|id| outcome(&id, "carded", START)).collect()));
    let (mut kept, mut refused) = (Vec::new(), 0);
    for batch in 0..12 {
        store.allow_pages(batch % 4 * 2).unwrap();
        for job in [batch_of(batch), outcomes_of(batch)] {
            match store.commit(&[job]) {
                Ok(_) => kept.push(batch),
                Err(LedgerError::Storage(_)) => refused += 1,
                Err(other) => panic!("{other}"),
            }
        }
        // Housekeeping may fail on a full disk, too; it is tried again later.
        let _ = store.maintain();
    }
    assert!(refused >= 6 && kept.len() >= 6, "{refused} refused, {kept:?} kept");
    store.allow_pages(1 << 20).unwrap();
    for batch in 0..12 {
        store.commit(&[batch_of(batch), outcomes_of(batch)]).unwrap();
        store.maintain().unwrap();
    }
    drop(store);
    let ledger = place.open();
    let counts = ledger.counts(MODEL).unwrap();
    assert_eq!((counts.records, counts.matched, counts.waiting_outcomes), (12 * 200, 12 * 200, 0));
    verified(&ledger);
}

#[test]
fn deleted_ids_stand_nowhere_in_the_files() {
    let place = SqlitePlace::new();
    let ledger = place.open();
    let live = with_live(&ledger);
    let secret = "Mrs-Quill-4471-Harbour-Lane";
    let waiting = "Mr-Haven-12-Mill-Row";
    let ids = (0..200).map(|i| format!("S-{i}"));
    let new = ids.chain([secret.to_owned()]).map(|id| record(&id, START, 5)).collect();
    keep(&ledger, &live, new);
    observe(&ledger, vec![outcome(secret, "carded", START), outcome(waiting, "carded", START)]);
    let stands = |text: &str| {
        let holds = |path: &Path| {
            let bytes = std::fs::read(path).unwrap_or_default();
            bytes.windows(text.len()).any(|window| window == text.as_bytes())
        };
        holds(&place.path()) || holds(&place.path().with_extension("db-wal"))
    };
    assert!(stands(secret) && stands(waiting));
    assert_eq!(delete(&ledger, &[secret, waiting]), [true, true]);
    assert!(!stands(secret) && !stands(waiting));
    assert!(stands("S-199"));
    verified(&ledger);
}

#[test]
fn a_backup_while_writing_is_of_one_moment() {
    let place = SqlitePlace::new();
    let ledger = place.open();
    let live = with_live(&ledger);
    let stop = AtomicBool::new(false);
    let folder = tempfile::TempDir::new().unwrap();
    std::thread::scope(|scope| {
        scope.spawn(|| {
            for round in 0_u32..10_000 {
                let ids: Vec<String> = (0..20).map(|i| format!("S-{round}-{i}")).collect();
                let new: Vec<NewRecord> =
                    ids.iter().map(|id| record(id, START + i64::from(round % 7) * DAY, round)).collect();
                keep(&ledger, &live, new);
                observe(&ledger, ids.iter().map(|id| outcome(id, "carded", START)).collect());
                if stop.load(Ordering::Relaxed) {
                    return;
                }
            }
        });
        for copy in 0..5 {
            while ledger.counts(MODEL).unwrap().records < 100 * (copy + 1) {
                std::thread::yield_now();
            }
            ledger.backup(&folder.path().join(format!("{copy}.db"))).unwrap();
        }
        stop.store(true, Ordering::Relaxed);
    });
    for copy in 0..5 {
        let path = folder.path().join(format!("again/{copy}.db"));
        std::fs::create_dir_all(path.parent().unwrap()).unwrap();
        restore(&folder.path().join(format!("{copy}.db")), &path).unwrap();
        let restored = Ledger::open(&LedgerUrl::Sqlite(path), Settings::default()).unwrap();
        let counts = restored.counts(MODEL).unwrap();
        assert!(counts.records >= 100 * (copy + 1) && counts.records.is_multiple_of(20), "{counts:?}");
        verified(&restored);
        let one = restored.counts(MODEL).unwrap().records;
        keep(&restored, &live, vec![record("S-new", START, 1)]);
        assert_eq!(restored.counts(MODEL).unwrap().records, one + 1);
    }
    verified(&ledger);
}

#[test]
fn a_torn_backup_is_not_restored_and_no_ledger_is_overwritten() {
    let place = SqlitePlace::new();
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, (0..500).map(|i| record(&format!("S-{i}"), START, i)).collect());
    let folder = tempfile::TempDir::new().unwrap();
    let (copy, torn) = (folder.path().join("copy.db"), folder.path().join("torn.db"));
    ledger.backup(&copy).unwrap();
    let bytes = std::fs::read(&copy).unwrap();
    let target = folder.path().join("ledger.db");
    for length in [0, 50, bytes.len() / 3, bytes.len() - 5000] {
        std::fs::write(&torn, &bytes[..length]).unwrap();
        assert!(restore(&torn, &target).is_err(), "{length} of {} bytes", bytes.len());
        assert!(!target.exists());
    }
    assert!(matches!(restore(&copy, &place.path()), Err(LedgerError::Copy { .. })));
    assert_eq!(ledger.counts(MODEL).unwrap().records, 500);
    let nowhere = folder.path().join("no such folder/copy.db");
    assert!(matches!(ledger.backup(&nowhere), Err(LedgerError::Copy { .. })));
}
