//! A disk that is full, and has room again later. The disk is a small file system in memory, which
//! only root can mount; without it these tests say so and do nothing.

use std::path::Path;
use std::process::{Command, Stdio};
use std::time::Duration;

use tempfile::TempDir;

use super::cluster::Cluster;
use super::parcels::{
    CATEGORIES, DAY, MODEL, START, outcome, outcomes, record, records, verified, with_live,
};
use crate::postgres::{PostgresAddress, PostgresStore};
use crate::sqlite::SqliteStore;
use crate::{Job, Ledger, LedgerError, Settings, Store, VersionRow};

const RECORDS_PER_BATCH: u32 = 1_000;

/// A small disk.
struct SmallDisk {
    folder: TempDir,
}

impl SmallDisk {
    fn mount(megabytes: u32) -> Option<Self> {
        let disk = Self { folder: TempDir::with_prefix("ledger-disk-").unwrap() };
        if disk.run("mount", &["-t", "tmpfs", "-o", &format!("size={megabytes}m"), "tmpfs"]) {
            return Some(disk);
        }
        eprintln!("skipped: a small disk can only be mounted by root");
        None
    }

    fn path(&self) -> &Path {
        self.folder.path()
    }

    fn grow(&self, megabytes: u32) {
        assert!(self.run("mount", &["-o", &format!("remount,size={megabytes}m")]));
    }

    fn run(&self, program: &str, arguments: &[&str]) -> bool {
        let status = Command::new(program).args(arguments).arg(self.path()).stderr(Stdio::null()).status();
        status.is_ok_and(|status| status.success())
    }
}

impl Drop for SmallDisk {
    fn drop(&mut self) {
        self.run("umount", &["--lazy"]);
    }
}

fn batch(live: &VersionRow, batch: u32) -> [Job; 2] {
    let ids: Vec<u32> = (0..RECORDS_PER_BATCH).map(|i| batch * RECORDS_PER_BATCH + i).collect();
    let record_of = |i: &u32| record(&format!("S-{i}"), START + i64::from(batch % 3) * DAY, *i);
    let outcome_of = |i: &u32| outcome(&format!("S-{i}"), CATEGORIES[*i as usize % 4], START);
    [
        Job::Records(records(live, ids.iter().map(record_of).collect())),
        Job::Outcomes(outcomes(ids.iter().map(outcome_of).collect())),
    ]
}

/// Writes until some requests were refused; which batches were acknowledged, and which refused.
fn fill(store: &mut dyn Store, live: &VersionRow) -> [Vec<u32>; 2] {
    let (mut kept, mut refused) = (Vec::new(), Vec::new());
    for number in 0..400 {
        match store.commit(&batch(live, number)) {
            Ok(_) => kept.push(number),
            Err(LedgerError::Storage(_) | LedgerError::Database(_) | LedgerError::Connect { .. }) => {
                refused.push(number);
            }
            Err(other) => panic!("{other}"),
        }
        if refused.len() == 3 {
            break;
        }
    }
    [kept, refused]
}

/// All that was acknowledged is there once, and what was refused can be sent again.
fn check(ledger: &Ledger, live: &VersionRow, [kept, refused]: &[Vec<u32>; 2]) {
    eprintln!("{} batches kept, {} refused", kept.len(), refused.len());
    assert!(!kept.is_empty() && refused.len() == 3, "{kept:?} kept, {refused:?} refused");
    let rows = u64::from(RECORDS_PER_BATCH);
    let counts = ledger.counts(MODEL).unwrap();
    assert_eq!((counts.records, counts.matched), (kept.len() as u64 * rows, kept.len() as u64 * rows));
    verified(ledger);
    for number in refused.iter().chain(kept.iter().rev().take(2)) {
        for job in batch(live, *number) {
            ledger.write(job).unwrap();
        }
    }
    assert_eq!(ledger.counts(MODEL).unwrap().matched, (kept.len() + refused.len()) as u64 * rows);
    verified(ledger);
}

#[test]
fn sqlite_survives_a_full_disk() {
    let Some(disk) = SmallDisk::mount(6) else { return };
    let path = disk.path().join("ledger.db");
    let open =
        || Ledger::with_store(Box::new(SqliteStore::with_runs(&path, 3_000).unwrap()), Settings::default());
    let live = with_live(&open().unwrap());
    let mut store = SqliteStore::with_runs(&path, 3_000).unwrap();
    let batches = fill(&mut store, &live);
    drop(store);
    disk.grow(64);
    check(&open().unwrap(), &live, &batches);
}

#[test]
fn postgres_survives_a_full_disk() {
    let Some(disk) = SmallDisk::mount(76) else { return };
    let cluster = Cluster::start_in(disk.path().join("server"), "trust");
    let address = PostgresAddress::parse(&cluster.address("postgres")).unwrap();
    let mut store = PostgresStore::with_patience(&address, Duration::from_millis(500)).unwrap();
    let ledger = Ledger::with_store(Box::new(PostgresStore::open(&address).unwrap()), Settings::default());
    let live = with_live(&ledger.unwrap());
    let batches = fill(&mut store, &live);
    drop(store);
    // The server may have stopped itself.
    cluster.crash();
    disk.grow(400);
    cluster.start_again();
    let ledger = Ledger::with_store(Box::new(PostgresStore::open(&address).unwrap()), Settings::default());
    check(&ledger.unwrap(), &live, &batches);
}
