//! Processes that are killed, and processes that share a file. The processes are this test
//! program, called again for one test that does nothing unless it is told where the ledger is.

use std::collections::BTreeMap;
use std::io::{BufRead, BufReader, Write};
use std::path::Path;
use std::process::{Child, Command, Stdio};

use super::parcels::{
    CATEGORIES, DAY, MODEL, START, act, observe, outcome, record, records, verified, version, with_live,
};
use super::places::{Place, SqlitePlace};
use crate::sqlite::SqliteStore;
use crate::{Job, Ledger, OutcomeState, Reply, Settings, day_of};

const LEDGER: &str = "KILTER_LEDGER_OF_TEST_PROCESS";
const SEED: &str = "KILTER_SEED_OF_TEST_PROCESS";
/// Kills of one run of the test; more with this variable set.
const KILLS: &str = "KILTER_LEDGER_KILLS";
const FEW_KILLS: u32 = 12;
/// Ids of which each process writes some.
const IDS: u32 = 3_000;

fn id_of(i: u32) -> String {
    format!("S-{i}")
}

fn time_of(i: u32) -> i64 {
    START + i64::from(i % 4) * DAY
}

/// Numbers without pattern (xorshift, Marsaglia 2003).
struct Numbers(u64);

impl Numbers {
    fn next(&mut self, below: u32) -> u32 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 32) as u32 % below
    }
}

/// Writes records and outcomes until it is killed, or all are written, and says what is
/// acknowledged, each on a line.
#[test]
fn process() {
    let Ok(path) = std::env::var(LEDGER) else { return };
    let seed: u64 = std::env::var(SEED).unwrap().parse().unwrap();
    let store = SqliteStore::with_runs(Path::new(&path), 500).unwrap();
    let ledger = Ledger::with_store(Box::new(store), Settings::default()).unwrap();
    let mut numbers = Numbers(seed.wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1);
    for _ in 0..2_000 {
        let chosen: Vec<u32> = (0..=numbers.next(8)).map(|_| numbers.next(IDS)).collect();
        let category = numbers.next(CATEGORIES.len() as u32) as usize;
        let (job, line) = if numbers.next(2) == 0 {
            let new = chosen.iter().map(|i| record(&id_of(*i), time_of(*i), *i)).collect();
            (Job::Records(records(&version("first"), new)), format!("records {chosen:?}"))
        } else {
            let category = CATEGORIES[category];
            let new = chosen.iter().map(|i| outcome(&id_of(*i), category, START)).collect();
            (Job::Outcomes(super::parcels::outcomes(new)), format!("outcomes {chosen:?}"))
        };
        let said = move |reply: Result<Reply, _>| {
            reply.unwrap();
            let mut out = std::io::stdout().lock();
            writeln!(out, "{line}").and_then(|()| out.flush()).unwrap();
        };
        // Mostly many under way at once, sometimes one by one.
        if numbers.next(10) == 0 {
            said(ledger.write(job));
        } else {
            while ledger.submit(job.clone(), said.clone()).is_err() {}
        }
    }
}

fn start(path: &Path, seed: u32) -> Child {
    Command::new(std::env::current_exe().unwrap())
        .args(["--exact", "tests::crashes::process", "--nocapture", "--test-threads", "1"])
        .env(LEDGER, path)
        .env(SEED, seed.to_string())
        .stdout(Stdio::piped())
        .stderr(Stdio::null())
        .spawn()
        .unwrap()
}

/// What a line acknowledges: whether records or outcomes, and of which ids.
fn acknowledged(line: &str) -> Option<(bool, Vec<u32>)> {
    let (kind, list) = line.split_once(" [")?;
    let ids = list.trim_end_matches(']').split(", ").map(|i| i.parse().unwrap()).collect();
    match kind.rsplit(' ').next()? {
        "records" => Some((true, ids)),
        "outcomes" => Some((false, ids)),
        _ => None,
    }
}

#[test]
fn what_was_acknowledged_survives_kills() {
    let kills = std::env::var(KILLS).map_or(FEW_KILLS, |kills| kills.parse().unwrap());
    let place = SqlitePlace::new();
    let live = with_live(&place.open());
    let mut known: BTreeMap<u32, [bool; 2]> = BTreeMap::new();
    for seed in 1..=kills {
        let mut child = start(&place.path(), seed);
        let lines = Numbers(u64::from(seed) * 7_919).next(400) as usize + 1;
        let mut output = BufReader::new(child.stdout.take().unwrap()).lines();
        for line in output.by_ref().map_while(Result::ok).take(lines) {
            note(&mut known, &line);
        }
        child.kill().unwrap();
        // What it had said before it died counts, too; a last line may be torn.
        let rest: Vec<String> = output.map_while(Result::ok).collect();
        rest.iter().filter(|line| line.ends_with(']')).for_each(|line| note(&mut known, line));
        child.wait().unwrap();
        compare(&place, &known, seed);
    }
    // Every acknowledged id is there once, so it is known when it comes again.
    let ledger = place.open();
    let ids: Vec<u32> = known.iter().filter(|(_, known)| known[0]).map(|(i, _)| *i).collect();
    let again = ids.iter().map(|i| record(&id_of(*i), time_of(*i), *i)).collect();
    assert!(super::parcels::keep(&ledger, &live, again).into_iter().all(|repeated| repeated));
}

fn note(known: &mut BTreeMap<u32, [bool; 2]>, line: &str) {
    if let Some((is_record, ids)) = acknowledged(line) {
        for id in ids {
            known.entry(id).or_default()[usize::from(!is_record)] = true;
        }
    }
}

fn compare(place: &SqlitePlace, known: &BTreeMap<u32, [bool; 2]>, seed: u32) {
    let ledger = place.open();
    verified(&ledger);
    let connection = rusqlite::Connection::open(place.path()).unwrap();
    let twice: i64 = connection
        .query_row("SELECT count(*) - count(DISTINCT id) FROM record", [], |row| row.get(0))
        .unwrap();
    assert_eq!(twice, 0, "after kill {seed}");
    let outcomes_twice: i64 = connection
        .query_row("SELECT count(*) - count(DISTINCT id_hash) FROM outcome", [], |row| row.get(0))
        .unwrap();
    assert_eq!(outcomes_twice, 0, "after kill {seed}");
    let mut statement = connection.prepare("SELECT EXISTS (SELECT 1 FROM record WHERE id = ?)").unwrap();
    for (id, [is_record, _]) in known {
        let there: bool = statement.query_row([id_of(*id)], |row| row.get(0)).unwrap();
        assert!(there || !is_record, "record {id} was acknowledged and is not there after kill {seed}");
    }
    let mut hashes = connection.prepare("SELECT EXISTS (SELECT 1 FROM outcome WHERE id_hash = ?)").unwrap();
    for (id, [_, is_outcome]) in known {
        let hash = crate::sqlite::id_hash(1, &id_of(*id));
        let there: bool = hashes.query_row([hash], |row| row.get(0)).unwrap();
        assert!(there || !is_outcome, "outcome {id} was acknowledged and is not there after kill {seed}");
    }
}

#[test]
fn processes_share_a_ledger() {
    let place = SqlitePlace::new();
    let ledger = place.open();
    let live = with_live(&ledger);
    let mut children: Vec<Child> = (1..=3).map(|seed| start(&place.path(), seed)).collect();
    let readers: Vec<_> = children
        .iter_mut()
        .map(|child| {
            let output = BufReader::new(child.stdout.take().unwrap());
            std::thread::spawn(move || output.lines().map_while(Result::ok).collect::<Vec<_>>())
        })
        .collect();
    // This process writes, too, and removes by age while the others write.
    for i in 0..50 {
        observe(&ledger, vec![outcome(&id_of(i), "carded", START)]);
    }
    ledger.write(Job::Delete { model: MODEL.into(), ids: vec![id_of(IDS)], act: act("never was") }).unwrap();
    let mut known = BTreeMap::new();
    for (child, reader) in children.iter_mut().zip(readers) {
        reader.join().unwrap().iter().for_each(|line| note(&mut known, line));
        assert!(child.wait().unwrap().success());
    }
    assert!(known.len() > IDS as usize / 2, "{} ids", known.len());
    compare(&place, &known, 0);
    let counts = ledger.counts(MODEL).unwrap();
    let records = known.values().filter(|known| known[0]).count();
    assert_eq!(counts.records as usize, records);
    let states = observe(&ledger, vec![outcome(&id_of(IDS + 1), "carded", START)]);
    assert_eq!(states, [OutcomeState::Waiting]);
    assert_eq!(counts.days, Some([day_of(START), day_of(START) + 3]));
    assert_eq!(ledger.live(MODEL).unwrap(), Some(live));
    verified(&ledger);
}
