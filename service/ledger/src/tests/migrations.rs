//! Ledgers that every earlier version of the schema had, brought up to date.

use super::parcels::{MODEL, START, keep, observe, outcome, record, verified, version};
use super::places::{Place, SqlitePlace};
use crate::{Counts, OutcomeState, day_of};

/// A ledger of each earlier schema, as SQL: eight records of one day, one outcome corrected and one
/// waiting.
const SQLITE: [&str; 1] = [include_str!("fixtures/sqlite_schema_1.sql")];

#[test]
fn every_earlier_sqlite_schema_is_brought_up_to_date() {
    for (position, fixture) in SQLITE.iter().enumerate() {
        let place = SqlitePlace::new();
        let connection = rusqlite::Connection::open(place.path()).unwrap();
        connection.execute_batch(fixture).unwrap();
        let schema: u32 = connection.pragma_query_value(None, "user_version", |row| row.get(0)).unwrap();
        assert_eq!(schema as usize, position + 1);
        drop(connection);
        let ledger = place.open();
        verified(&ledger);
        let live = ledger.live(MODEL).unwrap().unwrap();
        let want = Counts {
            records: 8,
            matched: 1,
            waiting_records: 7,
            waiting_outcomes: 1,
            days: Some([day_of(START); 2]),
        };
        assert_eq!(ledger.counts(MODEL).unwrap(), want);
        assert_eq!(ledger.former_outcomes(MODEL, "S-2").unwrap().len(), 1);
        // Ids of runs and those behind them are known, a deleted one is not.
        let again = keep(&ledger, &live, (0..10).map(|i| record(&format!("S-{i}"), START, i)).collect());
        assert_eq!(again, [true, true, true, true, true, false, true, true, true, false]);
        assert_eq!(observe(&ledger, vec![outcome("S-20", "carded", START)]), [OutcomeState::Repeated]);
        assert_eq!(ledger.summaries(MODEL, &live.fingerprint, [i64::MIN, i64::MAX]).unwrap().len(), 4);
        assert_eq!(live.model, version("first").model);
        verified(&ledger);
    }
}
