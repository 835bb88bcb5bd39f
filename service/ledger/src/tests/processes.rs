//! Processes that write to a ledger until they are killed: this test program, called again for one
//! test that does nothing unless it is told where the ledger is.

use std::collections::BTreeMap;
use std::io::{BufRead, BufReader, Write};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::thread::JoinHandle;

use super::parcels::{CATEGORIES, DAY, START, outcome, outcomes, record, records, verified, version};
use super::places::Place;
use crate::sqlite::SqliteStore;
use crate::{Job, Ledger, LedgerUrl, Reply, Settings};

const LEDGER: &str = "KILTER_LEDGER_OF_TEST_PROCESS";
const SEED: &str = "KILTER_SEED_OF_TEST_PROCESS";
const JOBS: &str = "KILTER_JOBS_OF_TEST_PROCESS";
/// Ids of which each process writes some.
pub(super) const IDS: u32 = 3_000;

pub(super) fn id_of(i: u32) -> String {
    format!("S-{i}")
}

pub(super) fn time_of(i: u32) -> i64 {
    START + i64::from(i % 4) * DAY
}

/// Numbers without pattern (xorshift, Marsaglia 2003).
pub(super) struct Numbers(pub(super) u64);

impl Numbers {
    pub(super) fn next(&mut self, below: u32) -> u32 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 32) as u32 % below
    }
}

fn open(url: &str) -> Ledger {
    match LedgerUrl::parse(url, Path::new("/")).unwrap() {
        // Runs are short, so that kills meet the writing of one.
        LedgerUrl::Sqlite(path) => {
            let store = SqliteStore::with_runs(&path, 500).unwrap();
            Ledger::with_store(Box::new(store), Settings::default()).unwrap()
        }
        url @ LedgerUrl::Postgres(_) => Ledger::open(&url, Settings::default()).unwrap(),
    }
}

/// Writes records and outcomes until it is killed, or all are written, and says what is
/// acknowledged, each on a line.
#[test]
fn process() {
    let Ok(url) = std::env::var(LEDGER) else { return };
    let number = |name| -> u64 { std::env::var(name).unwrap().parse().unwrap() };
    let ledger = open(&url);
    let mut numbers = Numbers(number(SEED).wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1);
    for _ in 0..number(JOBS) {
        let chosen: Vec<u32> = (0..=numbers.next(8)).map(|_| numbers.next(IDS)).collect();
        let category = CATEGORIES[numbers.next(CATEGORIES.len() as u32) as usize];
        let job = if numbers.next(2) == 0 {
            let new = chosen.iter().map(|i| record(&id_of(*i), time_of(*i), *i)).collect();
            Job::Records(records(&version("first"), new))
        } else {
            Job::Outcomes(outcomes(chosen.iter().map(|i| outcome(&id_of(*i), category, START)).collect()))
        };
        let said = move |reply: Result<Reply, _>| {
            let line = match reply.unwrap() {
                Reply::Records(repeated) => {
                    let new = chosen.iter().zip(repeated).filter(|(_, repeated)| !repeated);
                    format!("records {chosen:?} new {:?}", new.map(|(i, _)| *i).collect::<Vec<u32>>())
                }
                _ => format!("outcomes {chosen:?} new []"),
            };
            let mut out = std::io::stdout().lock();
            writeln!(out, "{line}").and_then(|()| out.flush()).unwrap();
        };
        // Mostly many under way at once, sometimes one by one.
        if numbers.next(10) == 0 {
            said(ledger.write(job));
        } else {
            while ledger.submit(job.clone(), said.clone()).is_err() {
                std::thread::yield_now();
            }
        }
    }
}

/// A process, and what it says.
pub(super) struct Writer {
    child: Child,
    output: Option<JoinHandle<Vec<String>>>,
}

impl Writer {
    pub(super) fn start(place: &dyn Place, seed: u32, jobs: u32) -> Self {
        let mut child = Command::new(std::env::current_exe().unwrap())
            .args(["--exact", "tests::processes::process", "--nocapture", "--test-threads", "1"])
            .env(LEDGER, place.url())
            .env(SEED, seed.to_string())
            .env(JOBS, jobs.to_string())
            .stdout(Stdio::piped())
            .stderr(Stdio::null())
            .spawn()
            .unwrap();
        let lines = BufReader::new(child.stdout.take().unwrap()).lines();
        // A last line may be torn.
        let whole = |line: &String| line.ends_with(']');
        let read = move || lines.map_while(Result::ok).filter(whole).collect();
        Self { child, output: Some(std::thread::spawn(read)) }
    }

    pub(super) fn kill(&mut self) {
        self.child.kill().unwrap();
    }

    /// Waits for its end; whether it ended well.
    pub(super) fn end(mut self, known: &mut Known) -> bool {
        let lines = self.output.take().unwrap().join().unwrap();
        for line in &lines {
            known.note(line);
        }
        self.child.wait().unwrap().success()
    }
}

/// What was acknowledged.
#[derive(Default)]
pub(super) struct Known {
    /// For each id how often its record was said to be new, where it was acknowledged; and whether
    /// an outcome was acknowledged.
    ids: BTreeMap<u32, (Option<u32>, bool)>,
}

impl Known {
    fn note(&mut self, line: &str) {
        let Some((sent, new)) = line.split_once(" new ") else { return };
        let Some((kind, sent)) = sent.split_once(" [") else { return };
        let ids = |list: &str| -> Vec<u32> {
            list.trim_matches(['[', ']']).split(", ").filter_map(|i| i.parse().ok()).collect()
        };
        for i in ids(sent) {
            let known = self.ids.entry(i).or_default();
            if kind.ends_with("records") {
                known.0 = known.0.or(Some(0));
            } else {
                known.1 = true;
            }
        }
        for i in ids(new) {
            *self.ids.entry(i).or_default().0.get_or_insert(0) += 1;
        }
    }

    pub(super) fn len(&self) -> usize {
        self.ids.len()
    }

    /// Ids whose records were acknowledged.
    pub(super) fn records(&self) -> Vec<u32> {
        self.ids.iter().filter(|(_, known)| known.0.is_some()).map(|(i, _)| *i).collect()
    }

    /// Every acknowledged item is there, nothing is there twice, no record was twice said to be new,
    /// and the summaries are what the records give.
    pub(super) fn compare(&self, place: &dyn Place, ledger: &Ledger, when: &str) {
        verified(ledger);
        let [records, outcomes] = place.ids();
        for (kind, ids) in [("record", &records), ("outcome", &outcomes)] {
            for pair in ids.windows(2) {
                assert_ne!(pair[0], pair[1], "{kind} twice {when}");
            }
        }
        for (i, (record, outcome)) in &self.ids {
            let id = id_of(*i);
            assert!(
                record.is_none() || records.binary_search(&id).is_ok(),
                "record {id} is not there {when}"
            );
            assert!(!outcome || outcomes.binary_search(&id).is_ok(), "outcome {id} is not there {when}");
            assert!(record.is_none_or(|new| new <= 1), "record {id} was new {record:?} times {when}");
        }
    }
}
