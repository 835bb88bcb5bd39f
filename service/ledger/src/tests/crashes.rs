//! Processes that are killed, and processes that share a ledger: what every store survives.

use super::parcels::{MODEL, START, act, observe, outcome, record, verified, with_live};
use super::places::Place;
use super::processes::{IDS, Known, Numbers, Writer, id_of, time_of};
use crate::{Job, OutcomeState, day_of};

/// Kills of one run of a test; more with this variable set.
const KILLS: &str = "KILTER_LEDGER_KILLS";
const FEW_KILLS: u32 = 12;
/// More than a process writes before it is killed.
const MANY_JOBS: u32 = 200_000;

pub(super) fn what_was_acknowledged_survives_kills(place: &dyn Place) {
    let kills = std::env::var(KILLS).map_or(FEW_KILLS, |kills| kills.parse().unwrap());
    let live = with_live(&place.open());
    let mut known = Known::default();
    for seed in 1..=kills {
        let mut writer = Writer::start(place, seed, MANY_JOBS);
        let pause = 20 + u64::from(Numbers(u64::from(seed) * 7_919).next(500));
        std::thread::sleep(std::time::Duration::from_millis(pause));
        writer.kill();
        writer.end(&mut known);
        known.compare(place, &place.open(), &format!("after kill {seed}"));
    }
    eprintln!("{kills} kills with seeds 1 to {kills}, {} ids acknowledged", known.len());
    assert!(known.len() > 100, "{} ids", known.len());
    // Every acknowledged id is there once, so it is known when it comes again.
    let ledger = place.open();
    let again = known.records().iter().map(|i| record(&id_of(*i), time_of(*i), *i)).collect();
    assert!(super::parcels::keep(&ledger, &live, again).into_iter().all(|repeated| repeated));
}

pub(super) fn processes_share_a_ledger(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let writers: Vec<Writer> = (1..=3).map(|seed| Writer::start(place, seed, 2_000)).collect();
    // This process writes, too, while the others write.
    for i in 0..50 {
        observe(&ledger, vec![outcome(&id_of(i), "carded", START)]);
    }
    ledger.write(Job::Delete { model: MODEL.into(), ids: vec![id_of(IDS)], act: act("never was") }).unwrap();
    let mut known = Known::default();
    for writer in writers {
        assert!(writer.end(&mut known));
    }
    assert!(known.len() > IDS as usize / 2, "{} ids", known.len());
    known.compare(place, &ledger, "at the end");
    let counts = ledger.counts(MODEL).unwrap();
    assert_eq!(counts.records as usize, known.records().len());
    let states = observe(&ledger, vec![outcome(&id_of(IDS + 1), "carded", START)]);
    assert_eq!(states, [OutcomeState::Waiting]);
    assert_eq!(counts.days, Some([day_of(START), day_of(START) + 3]));
    assert_eq!(ledger.live(MODEL).unwrap(), Some(live));
    verified(&ledger);
}
