//! Places in which the suite keeps its ledgers.

use std::path::PathBuf;

use tempfile::TempDir;

use crate::sqlite::SqliteStore;
use crate::{Ledger, Settings};

/// Somewhere a ledger is kept.
pub(super) trait Place {
    /// Opens the ledger of this place; again for another handle.
    fn open(&self) -> Ledger;

    /// A new place of the same kind.
    fn another(&self) -> Box<dyn Place>;

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

    fn another(&self) -> Box<dyn Place> {
        Box::new(Self::new())
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
