//! Events in any order, with repeats, corrections, deletions and restarts.

use std::collections::BTreeMap;

use proptest::prelude::*;
use proptest::test_runner::{Config, TestRunner};

use super::parcels::{
    CATEGORIES, DAY, HOUR, MODEL, START, delete, keep, observe, outcome, record, verified, with_live,
};
use super::places::Place;
use crate::{Ledger, OutcomeState, Stream, VersionRow};

/// Something that is sent to the ledger. Ids are few, so that they meet often.
#[derive(Debug, Clone)]
enum Event {
    Records(Vec<(u8, u32)>),
    Outcomes(Vec<(u8, usize)>),
    Delete(u8),
    Reopen,
}

fn events() -> impl Strategy<Value = Vec<Event>> {
    let id = 0..25_u8;
    let event = prop_oneof![
        6 => prop::collection::vec((id.clone(), any::<u32>()), 1..6).prop_map(Event::Records),
        8 => prop::collection::vec((id.clone(), 0..CATEGORIES.len()), 1..6).prop_map(Event::Outcomes),
        1 => id.prop_map(Event::Delete),
        1 => Just(Event::Reopen),
    ];
    prop::collection::vec(event, 1..40)
}

/// What a ledger should hold, kept in the plainest way.
#[derive(Default)]
struct Expected {
    records: BTreeMap<u8, i64>,
    outcomes: BTreeMap<u8, usize>,
}

fn time_of(seed: u32) -> i64 {
    START + i64::from(seed % 5) * DAY + i64::from(seed % 23) * HOUR
}

impl Expected {
    fn send(&mut self, ledger: &Ledger, live: &VersionRow, event: &Event) {
        match event {
            Event::Records(new) => {
                let sent = new.iter().map(|(id, seed)| record(&format!("S-{id}"), time_of(*seed), *seed));
                let repeated = keep(ledger, live, sent.collect());
                for ((id, seed), repeated) in new.iter().zip(repeated) {
                    assert_eq!(repeated, self.records.contains_key(id), "record {id}");
                    self.records.entry(*id).or_insert(time_of(*seed));
                }
            }
            Event::Outcomes(new) => {
                let sent = new
                    .iter()
                    .map(|(id, category)| outcome(&format!("S-{id}"), CATEGORIES[*category], START));
                for ((id, category), state) in new.iter().zip(observe(ledger, sent.collect())) {
                    let want = match self.outcomes.insert(*id, *category) {
                        Some(former) if former == *category => OutcomeState::Repeated,
                        Some(_) => OutcomeState::Corrected,
                        None if self.records.contains_key(id) => OutcomeState::Matched,
                        None => OutcomeState::Waiting,
                    };
                    assert_eq!(state, want, "outcome {id}");
                }
            }
            Event::Delete(id) => {
                let there = self.records.remove(id).is_some() | self.outcomes.remove(id).is_some();
                assert_eq!(delete(ledger, &[&format!("S-{id}")]), [there], "deletion of {id}");
            }
            Event::Reopen => {}
        }
    }

    /// Compares counts by day; the sums are compared by the verification.
    fn compare(&self, ledger: &Ledger, live: &VersionRow) {
        let mut want: BTreeMap<i64, (f64, [f64; 4])> = BTreeMap::new();
        for (id, time) in &self.records {
            let window = want.entry(crate::day_of(*time)).or_default();
            window.0 += 1.0;
            if let Some(category) = self.outcomes.get(id) {
                window.1[*category] += 1.0;
            }
        }
        let windows =
            ledger.summaries_of(MODEL, &live.fingerprint, &Stream::All, [i64::MIN, i64::MAX]).unwrap();
        let found: BTreeMap<i64, (f64, [f64; 4])> = windows
            .iter()
            .filter(|window| !window.summary.is_empty())
            .map(|window| {
                (window.day, (window.summary.scored(), window.summary.observed().try_into().unwrap()))
            })
            .collect();
        assert_eq!(found, want);
        let counts = ledger.counts(MODEL).unwrap();
        let waiting = self.outcomes.keys().filter(|id| !self.records.contains_key(id)).count();
        assert_eq!(
            (counts.records as usize, counts.waiting_outcomes as usize),
            (self.records.len(), waiting)
        );
        verified(ledger);
    }
}

pub(super) fn any_order_gives_the_same(first: &dyn Place) {
    let mut runner =
        TestRunner::new(Config { cases: first.cases(), failure_persistence: None, ..Config::default() });
    let outcome = runner.run(&events(), |events| {
        let place = first.another();
        let mut ledger = place.open();
        let live = with_live(&ledger);
        let mut expected = Expected::default();
        for event in &events {
            if matches!(event, Event::Reopen) {
                drop(ledger);
                ledger = place.open();
            }
            expected.send(&ledger, &live, event);
        }
        expected.compare(&ledger, &live);
        Ok(())
    });
    outcome.unwrap();
}
