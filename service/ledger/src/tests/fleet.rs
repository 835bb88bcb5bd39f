//! A fleet: replicas that share a PostgreSQL data base, of which some are killed, and a server that
//! crashes, stops answering and comes back meanwhile.

use std::ops::ControlFlow;
use std::sync::Arc;
use std::time::Duration;

use super::cluster::{Cluster, PASSWORD};
use super::parcels::{MODEL, START, keep, observe, outcome, record, records, verified, with_live};
use super::places::{Place, PostgresPlace};
use super::processes::{Known, Writer, id_of};
use crate::postgres::PostgresStore;
use crate::{Job, Ledger, LedgerError, OutcomeState, Settings, Store};

fn pause(milliseconds: u64) {
    std::thread::sleep(Duration::from_millis(milliseconds));
}

#[test]
fn three_replicas_survive_a_kill_and_a_restarted_data_base() {
    let place = PostgresPlace::on_its_own_server();
    with_live(&place.open());
    let mut known = Known::default();
    let mut writers: Vec<Writer> = (1..=3).map(|seed| Writer::start(&place, seed, 1_500)).collect();
    pause(400);
    let mut victim = writers.remove(0);
    victim.kill();
    victim.end(&mut known);
    for round in 0..4 {
        place.cluster.crash();
        pause(50 + 100 * round);
        place.cluster.start_again();
        pause(300);
    }
    // One comes back in place of the one that was killed.
    writers.push(Writer::start(&place, 4, 1_500));
    place.cluster.hold(true);
    pause(700);
    place.cluster.hold(false);
    for writer in writers {
        assert!(writer.end(&mut known), "a replica did not outlive the restarts");
    }
    let ledger = place.open();
    known.compare(&place, &ledger, "after all");
    assert_eq!(ledger.counts(MODEL).unwrap().records as usize, known.records().len());
}

/// Whoever waits when the server is gone is told so after a while, and nothing is half kept.
#[test]
fn a_server_that_does_not_come_back_is_an_error() {
    let place = PostgresPlace::on_its_own_server();
    let live = with_live(&place.open());
    let patience = Duration::from_millis(300);
    let mut store = PostgresStore::with_patience(&place.address(), patience).unwrap();
    let job = |id: &str| Job::Records(records(&live, vec![record(id, START, 1)]));
    store.commit(&[job("S-1")]).unwrap();
    place.cluster.crash();
    let error = store.commit(&[job("S-2"), job("S-3")]).unwrap_err();
    assert!(error.is_of_the_store(), "{error}");
    // Together and not one by one: that would take a patience for each.
    let ledger = Ledger::with_store(Box::new(Gone(store)), Settings::default());
    assert!(matches!(ledger, Err(LedgerError::Connect { .. })), "{ledger:?}");
    place.cluster.start_again();
    let ledger = place.open();
    assert_eq!(keep(&ledger, &live, vec![record("S-1", START, 1), record("S-2", START, 1)]), [true, false]);
    verified(&ledger);
}

/// A store whose reader cannot connect.
struct Gone(PostgresStore);

impl Store for Gone {
    fn commit(&mut self, jobs: &[Job]) -> Result<Vec<crate::Reply>, LedgerError> {
        self.0.commit(jobs)
    }

    fn maintain(&mut self) -> Result<(), LedgerError> {
        Ok(())
    }

    fn reader(&self) -> Result<Box<dyn crate::Reader>, LedgerError> {
        self.0.reader()
    }
}

/// A handle that was idle when the server was restarted notices when it is used again.
#[test]
fn idle_handles_outlive_a_restart() {
    let place = PostgresPlace::on_its_own_server();
    let ledger = place.open();
    let live = with_live(&ledger);
    for round in 0..3 {
        keep(&ledger, &live, vec![record(&id_of(round), START, round)]);
        assert_eq!(ledger.counts(MODEL).unwrap().records, u64::from(round) + 1);
        place.cluster.crash();
        place.cluster.start_again();
        assert_eq!(ledger.counts(MODEL).unwrap().records, u64::from(round) + 1);
        assert_eq!(observe(&ledger, vec![outcome(&id_of(round), "carded", START)]), [OutcomeState::Matched]);
    }
    verified(&ledger);
}

/// Threads of one process and of several handles write the same ids: each is new once.
#[test]
fn the_same_ids_from_many_handles_count_once() {
    let place = PostgresPlace::on_its_own_server();
    let live = Arc::new(with_live(&place.open()));
    let ledgers: Vec<Ledger> = (0..3).map(|_| place.open()).collect();
    let new: usize = std::thread::scope(|scope| {
        let threads: Vec<_> = ledgers
            .iter()
            .map(|ledger| {
                let live = live.clone();
                scope.spawn(move || {
                    let mut new = 0;
                    for round in 0..60 {
                        let sent: Vec<_> = (0..5).map(|i| record(&id_of(round * 5 + i), START, i)).collect();
                        new += keep(ledger, &live, sent).iter().filter(|repeated| !**repeated).count();
                        observe(ledger, vec![outcome(&id_of(round * 5), "carded", START)]);
                    }
                    new
                })
            })
            .collect();
        threads.into_iter().map(|thread| thread.join().unwrap()).sum()
    });
    assert_eq!(new, 300);
    let counts = ledgers[0].counts(MODEL).unwrap();
    assert_eq!((counts.records, counts.matched, counts.waiting_outcomes), (300, 60, 0));
    verified(&ledgers[1]);
}

#[test]
fn a_cluster_that_was_never_there_is_an_error_without_a_password() {
    let url = "postgres://me:s3cret@%2Fnonexistent/kilter";
    let address = crate::PostgresAddress::parse(url).unwrap();
    let patience = Duration::from_millis(100);
    let Err(error) = PostgresStore::with_patience(&address, patience) else { panic!("{url}") };
    assert!(matches!(error, LedgerError::Connect { .. }), "{error}");
    let shown = format!("{error} {error:?}");
    assert!(!shown.contains("cret") && shown.contains("me@"), "{shown}");
}

/// What the server says of a wrong password does not quote it.
#[test]
fn a_wrong_password_is_not_shown() {
    let cluster = Cluster::start_with("scram-sha-256");
    drop(cluster.client("postgres"));
    let address = cluster.address("postgres").replace(PASSWORD, "s3cret");
    let address = crate::PostgresAddress::parse(&address).unwrap();
    let Err(error) = PostgresStore::open(&address) else { panic!("{address}") };
    let shown = format!("{error} {error:?} {address} {address:?}");
    assert!(!shown.contains("s3cret") && shown.contains("password authentication failed"), "{shown}");
}

/// Encrypted where it is asked for, and never with a server that cannot prove who it is.
#[test]
fn encrypted_connections_are_verified() {
    let cluster = Cluster::start();
    let (url, certificate) = cluster.encrypted();
    let open = |url: &str, options: &str| {
        let address = crate::PostgresAddress::parse(&format!("{url}{options}")).unwrap();
        PostgresStore::with_patience(&address, Duration::from_millis(100))
    };
    let roots = format!("sslrootcert={}", certificate.display());
    for mode in ["require", "verify-full"] {
        let store = open(&url, &format!("?sslmode={mode}&{roots}")).unwrap();
        let ledger = Ledger::with_store(Box::new(store), Settings::default()).unwrap();
        let sql = "SELECT count(*) FROM pg_stat_ssl JOIN pg_stat_activity USING (pid) \
                   WHERE ssl AND application_name = 'kilter'";
        let encrypted: i64 = cluster.client("postgres").query_one(sql, &[]).unwrap().get(0);
        assert_eq!(encrypted, 2, "the writer and a reader");
        with_live(&ledger);
        verified(&ledger);
        drop(ledger);
        // Connections are closed by threads of their own.
        pause(300);
    }
    for options in ["?sslmode=require", "?sslmode=require&sslrootcert=/nonexistent.pem"] {
        let Err(error) = open(&url, options) else { panic!("{options}") };
        let named = matches!(&error, LedgerError::Connect { reason, .. } if reason.contains("certificate"));
        assert!(named, "{error}");
    }
    assert!(open(&url, "").is_ok(), "without encryption, because nobody asked for it");
    let other_name = url.replace("localhost", "127.0.0.1");
    let refused = open(&other_name, &format!("?sslmode=require&{roots}"));
    assert!(matches!(refused, Err(LedgerError::Connect { .. })), "a certificate of another name");
}

/// Opening, reading, visiting and dropping wait for the server, and may be done in an asynchronous
/// program all the same.
#[test]
fn a_ledger_may_be_used_in_an_asynchronous_program() {
    let place = PostgresPlace::new();
    let runtime = tokio::runtime::Builder::new_current_thread().build().unwrap();
    runtime.block_on(async {
        let ledger = Ledger::open(&crate::LedgerUrl::Postgres(place.address()), Settings::default()).unwrap();
        let live = with_live(&ledger);
        keep(&ledger, &live, (0..600).map(|i| record(&id_of(i), START, i)).collect());
        for most in [5, 10_000] {
            let mut visited = 0;
            ledger
                .records(MODEL, &live.fingerprint, [i64::MIN, i64::MAX], |_| {
                    visited += 1;
                    if visited == most { ControlFlow::Break(()) } else { ControlFlow::Continue(()) }
                })
                .unwrap();
            assert_eq!(visited, most.min(600));
        }
        verified(&ledger);
    });
}
