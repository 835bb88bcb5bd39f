//! Places in which the suite keeps its ledgers.

use std::path::PathBuf;
use std::sync::Arc;

use tempfile::TempDir;

use super::cluster::{self, Cluster};
use crate::postgres::{PostgresAddress, PostgresStore};
use crate::sqlite::SqliteStore;
use crate::{Ledger, Settings};

/// Somewhere a ledger is kept.
pub(super) trait Place {
    /// Opens the ledger of this place; again for another handle.
    fn open(&self) -> Ledger;

    /// Its address, for other processes.
    fn url(&self) -> String;

    /// Ids of all records, and ids of all outcomes, each sorted; twice where they are there twice.
    fn ids(&self) -> [Vec<String>; 2];

    /// How many random cases are tried here; a new data base takes longer than a new file.
    fn cases(&self) -> u32 {
        48
    }

    /// A new place of the same kind.
    fn another(&self) -> Box<dyn Place>;

    /// Makes all stored summaries those of an earlier program: of version 0, and nothing that can be
    /// read.
    fn age_the_summaries(&self);

    /// Alters one stored summary behind the ledger's back.
    fn alter_a_summary(&self);

    /// Removes one stored record behind the ledger's back.
    fn lose_a_record(&self);
}

/// A SQLite file in a folder of its own. Runs are of seven rows, so that the tests have many.
pub(super) struct SqlitePlace {
    folder: TempDir,
}

const ROWS_PER_RUN: usize = 7;

impl SqlitePlace {
    pub(super) fn new() -> Self {
        Self { folder: TempDir::new().unwrap() }
    }

    pub(super) fn path(&self) -> PathBuf {
        self.folder.path().join("ledger.db")
    }

    pub(super) fn execute(&self, sql: &str) {
        let changed = rusqlite::Connection::open(self.path()).unwrap().execute(sql, []).unwrap();
        assert_eq!(changed, 1, "{sql}");
    }
}

impl Place for SqlitePlace {
    fn open(&self) -> Ledger {
        let store = SqliteStore::with_runs(&self.path(), ROWS_PER_RUN).unwrap();
        Ledger::with_store(Box::new(store), Settings::default()).unwrap()
    }

    fn url(&self) -> String {
        format!("sqlite:{}", self.path().display())
    }

    fn ids(&self) -> [Vec<String>; 2] {
        let connection = rusqlite::Connection::open(self.path()).unwrap();
        [
            "SELECT id FROM record ORDER BY id",
            "SELECT coalesce(outcome.id, record.id) AS id FROM outcome \
             LEFT JOIN record ON record.number = outcome.record ORDER BY id",
        ]
        .map(|sql| {
            let mut statement = connection.prepare(sql).unwrap();
            let ids = statement.query_map([], |row| row.get(0)).unwrap();
            ids.map(Result::unwrap).collect()
        })
    }

    fn another(&self) -> Box<dyn Place> {
        Box::new(Self::new())
    }

    fn age_the_summaries(&self) {
        let connection = rusqlite::Connection::open(self.path()).unwrap();
        connection.execute("UPDATE summary SET version = 0, summary = x'00'", []).unwrap();
    }

    fn alter_a_summary(&self) {
        self.execute(
            "UPDATE summary SET summary = (SELECT summary FROM summary WHERE number = 1) WHERE number = 2",
        );
    }

    fn lose_a_record(&self) {
        self.execute("DELETE FROM record WHERE number = 1");
    }
}

/// A PostgreSQL data base of its own.
pub(super) struct PostgresPlace {
    pub(super) cluster: Arc<Cluster>,
    database: String,
}

impl PostgresPlace {
    /// On the server that the tests share.
    pub(super) fn new() -> Self {
        Self::on(cluster::shared())
    }

    /// On a server of its own, which can be stopped.
    pub(super) fn on_its_own_server() -> Self {
        Self::on(Arc::new(Cluster::start()))
    }

    fn on(cluster: Arc<Cluster>) -> Self {
        let database = cluster.new_database();
        Self { cluster, database }
    }

    pub(super) fn address(&self) -> PostgresAddress {
        PostgresAddress::parse(&self.url()).unwrap()
    }

    fn execute(&self, sql: &str) {
        let changed = self.cluster.client(&self.database).execute(sql, &[]).unwrap();
        assert_eq!(changed, 1, "{sql}");
    }
}

impl Place for PostgresPlace {
    fn open(&self) -> Ledger {
        let store = PostgresStore::open(&self.address()).unwrap();
        Ledger::with_store(Box::new(store), Settings::default()).unwrap()
    }

    fn url(&self) -> String {
        self.cluster.address(&self.database)
    }

    fn ids(&self) -> [Vec<String>; 2] {
        let mut client = self.cluster.client(&self.database);
        [
            "SELECT id FROM kilter.record ORDER BY id COLLATE \"C\"",
            "SELECT id FROM (SELECT id FROM kilter.waiting_outcome UNION ALL \
             SELECT record.id FROM kilter.outcome LEFT JOIN kilter.record \
             ON record.day = outcome.day AND record.number = outcome.record) AS outcomes \
             ORDER BY id COLLATE \"C\"",
        ]
        .map(|sql| client.query(sql, &[]).unwrap().iter().map(|row| row.get(0)).collect())
    }

    fn cases(&self) -> u32 {
        16
    }

    fn another(&self) -> Box<dyn Place> {
        Box::new(Self::on(self.cluster.clone()))
    }

    fn age_the_summaries(&self) {
        let sql = "UPDATE kilter.summary SET version = 0, summary = '\\x00'; \
                   UPDATE kilter.state SET summary_version = 0";
        self.cluster.client(&self.database).batch_execute(sql).unwrap();
    }

    fn alter_a_summary(&self) {
        self.execute(
            "UPDATE kilter.summary SET summary = (SELECT summary FROM kilter.summary ORDER BY stream LIMIT 1) \
             WHERE stream = (SELECT stream FROM kilter.summary ORDER BY stream LIMIT 1 OFFSET 1)",
        );
    }

    fn lose_a_record(&self) {
        self.execute("DELETE FROM kilter.record WHERE number = 1");
    }
}
