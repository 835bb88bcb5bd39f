//! How fast the ledger keeps and matches, with random ids, every commit synced to the disk.
//!
//! `cargo bench -p kilter-ledger -- [ROWS] [BATCH] [PLACE] [PARTS]`: bulk by batches until ROWS, then
//! single records from 64 threads, then outcomes in random order, then reading summaries; PARTS, such
//! as `single,match`, leaves out parts after the first. For each part a line with the rate, for bulk
//! a line for each tenth. Beside it a floor: the bytes of the same records appended to a file and
//! synced with the same batches. PLACE is a folder, or the address of an empty PostgreSQL data base; the
//! floor is then a plain COPY of the same rows by the same batches, into a table without an index and
//! into one with a primary key on the ids. The rate by the writer's processor time is what a machine would do
//! that does nothing else (where the system tells it).

#![expect(clippy::print_stdout, reason = "the figures are what this program is for")]

use std::fs::File;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::time::Instant;

use kilter_ledger::{
    Job, Ledger, LedgerUrl, NewOutcome, NewRecord, OutcomeState, Outcomes, Records, Reply, Settings, Stream,
    VersionRow, VersionState,
};
use kilter_model::ModelFile;
use postgres::binary_copy::BinaryCopyInWriter;
use postgres::types::Type;
use postgres::{Client, NoTls};
use serde_json::json;

const MODEL: &str = "attempt";
const CATEGORIES: [&str; 4] = ["handed-over", "safe-place", "neighbour", "carded"];
const FIELDS: usize = 10;
const DAYS: u64 = 7;
const DEPOTS: u64 = 20;
const MICROS_PER_DAY: i64 = 86_400_000_000;
const START: i64 = 20_666 * MICROS_PER_DAY;
const THREADS: u64 = 64;
const SINGLES_PER_THREAD: u64 = 500;

/// Numbers without pattern from a counter (splitmix, Steele, Lea & Flood 2014).
fn mixed(counter: u64) -> u64 {
    let mut x = counter.wrapping_mul(0x9E37_79B9_7F4A_7C15).wrapping_add(0x632B_E59B_D9B4_E019);
    x = (x ^ (x >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    x = (x ^ (x >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    x ^ (x >> 31)
}

fn id_of(i: u64) -> String {
    format!("{:016x}-{:08x}", mixed(i), mixed(i ^ 0xABCD) as u32)
}

fn version() -> VersionRow {
    let fields: Vec<_> = (0..FIELDS)
        .map(|i| json!({"kind": "number", "name": format!("x{i}"), "observed": [0.0, 1.0]}))
        .collect();
    let terms: Vec<String> =
        std::iter::once("(intercept)".to_owned()).chain((0..FIELDS).map(|i| format!("x{i}"))).collect();
    let coefficients: serde_json::Map<String, serde_json::Value> =
        CATEGORIES[1..].iter().map(|name| ((*name).to_owned(), json!(vec![0.1; FIELDS + 1]))).collect();
    let document = json!({
        "format": "kilter-model", "format_version": "1.0", "name": MODEL,
        "outcome": {"field": "result", "categories": CATEGORIES, "reference": CATEGORIES[0]},
        "fields": fields, "terms": terms, "coefficients": coefficients,
        "monitor": {"segments": ["depot"]}, "fingerprint": "",
    });
    let mut model: ModelFile = serde_json::from_value(document).expect("a model file");
    model.seal().expect("finite numbers");
    VersionRow {
        model: MODEL.into(),
        fingerprint: model.fingerprint.clone(),
        file: model.to_json().expect("finite numbers"),
        state: VersionState::Live,
        published_at: START,
    }
}

fn record(i: u64) -> NewRecord {
    let unit = |k: u64| (mixed(i * 32 + k) >> 11) as f64 / (1_u64 << 53) as f64;
    NewRecord {
        id: id_of(i),
        time: START + (unit(0) * (DAYS as f64) * MICROS_PER_DAY as f64) as i64,
        log_odds: (1..4).map(|k| 2.0 * unit(k) - 1.0).collect(),
        inputs: (4..4 + FIELDS as u64).map(unit).collect(),
        segments: vec![format!("depot {}", mixed(i) % DEPOTS)],
    }
}

fn records(version: &VersionRow, range: std::ops::Range<u64>) -> Records {
    Records {
        model: MODEL.into(),
        version: version.fingerprint.clone(),
        received: START,
        records: range.map(record).collect(),
    }
}

/// Keeps records `0..rows` by batches; time for making them is not counted.
fn bulk(ledger: &Ledger, version: &VersionRow, rows: u64, batch: u64) {
    let (mut seconds, mut since, mut slowest) = (0.0, 0, 0.0_f64);
    let mut processor = writer_seconds();
    let step = (rows / 10).max(batch);
    for first in (0..rows).step_by(batch as usize) {
        let job = Job::Records(records(version, first..(first + batch).min(rows)));
        let begun = Instant::now();
        ledger.write(job).expect("records are kept");
        let elapsed = begun.elapsed().as_secs_f64();
        seconds += elapsed;
        slowest = slowest.max(elapsed);
        since += batch;
        if since >= step {
            println!(
                "bulk, batches of {batch}, at {:>9} rows: {:>8.0} rows/s, {:>8.0} by processor time, \
                 slowest batch {:.0} ms",
                first + batch,
                since as f64 / seconds,
                since as f64 / (writer_seconds() - processor),
                slowest * 1e3
            );
            (seconds, since, slowest) = (0.0, 0, 0.0);
            processor = writer_seconds();
        }
    }
}

/// Seconds of processor time that the writer has taken; 0 where the system does not tell.
fn writer_seconds() -> f64 {
    let ticks_of = |task: std::fs::DirEntry| -> Option<f64> {
        let name = std::fs::read_to_string(task.path().join("comm")).ok()?;
        let stat = std::fs::read_to_string(task.path().join("stat")).ok()?;
        let mut numbers = stat.rsplit_once(')')?.1.split_whitespace().skip(11);
        let ticks = numbers.next()?.parse::<f64>().ok()? + numbers.next()?.parse::<f64>().ok()?;
        (name.trim() == "ledger-writer").then_some(ticks)
    };
    let Ok(tasks) = std::fs::read_dir("/proc/self/task") else { return 0.0 };
    tasks.filter_map(Result::ok).filter_map(ticks_of).sum::<f64>() / 100.0
}

fn singles(ledger: &Ledger, version: &VersionRow, from: u64) {
    let (begun, processor) = (Instant::now(), writer_seconds());
    let mut waits: Vec<f64> = std::thread::scope(|scope| {
        let threads: Vec<_> = (0..THREADS)
            .map(|thread| {
                scope.spawn(move || {
                    let first = from + thread * SINGLES_PER_THREAD;
                    let one = |i| {
                        let begun = Instant::now();
                        ledger.write(Job::Records(records(version, i..i + 1))).expect("a record is kept");
                        begun.elapsed().as_secs_f64()
                    };
                    (first..first + SINGLES_PER_THREAD).map(one).collect::<Vec<_>>()
                })
            })
            .collect();
        threads.into_iter().flat_map(|thread| thread.join().expect("no thread fails")).collect()
    });
    let rate = waits.len() as f64 / begun.elapsed().as_secs_f64();
    waits.sort_by(f64::total_cmp);
    println!(
        "single records from {THREADS} threads: {rate:.0} records/s, {:.0} by processor time, median {:.2} ms, 99th percentile {:.2} ms",
        waits.len() as f64 / (writer_seconds() - processor),
        waits[waits.len() / 2] * 1e3,
        waits[waits.len() * 99 / 100] * 1e3
    );
}

fn matching(ledger: &Ledger, rows: u64, batch: u64) {
    let share = rows / 2;
    let processor = writer_seconds();
    let (mut matched, mut seconds, mut outcomes) = (0, 0.0, 0);
    // An odd factor visits the records in an order without locality, each at most once.
    let order = |k: u64| (k.wrapping_mul(0x9E37_79B1) + 12_345) % rows;
    for first in (0..share).step_by(batch as usize) {
        let new: Vec<NewOutcome> = (first..(first + batch).min(share))
            .map(|k| NewOutcome {
                id: id_of(order(k)),
                category: CATEGORIES[(mixed(k) % 4) as usize].into(),
                observed_at: Some(START + 3 * MICROS_PER_DAY),
            })
            .collect();
        outcomes += new.len();
        let job = Job::Outcomes(Outcomes { model: MODEL.into(), received: START, outcomes: new });
        let begun = Instant::now();
        let reply = ledger.write(job).expect("outcomes are kept");
        seconds += begun.elapsed().as_secs_f64();
        if let Reply::Outcomes(states) = reply {
            matched += states.iter().filter(|state| **state == OutcomeState::Matched).count();
        }
    }
    let rate = outcomes as f64 / seconds;
    let by_processor = outcomes as f64 / (writer_seconds() - processor);
    println!(
        "outcomes in random order, batches of {batch}: {rate:.0} outcomes/s, {by_processor:.0} by processor time, \
         {matched} of {outcomes} matched"
    );
}

fn reading(ledger: &Ledger, version: &VersionRow) {
    let begun = Instant::now();
    let windows =
        ledger.summaries(MODEL, &version.fingerprint, [i64::MIN, i64::MAX]).expect("summaries are read");
    println!("all {} window summaries read in {:.1} ms", windows.len(), begun.elapsed().as_secs_f64() * 1e3);
    let begun = Instant::now();
    ledger
        .merged(MODEL, &version.fingerprint, &Stream::All, [i64::MIN, i64::MAX])
        .expect("summaries are merged");
    println!("stream of all records merged in {:.1} ms", begun.elapsed().as_secs_f64() * 1e3);
}

/// Appends as many bytes as the records have, and syncs after every batch.
fn floor(folder: &Path, rows: u64, batch: u64) {
    let path = folder.join("floor.bin");
    let mut file = File::create(&path).expect("a file");
    let bytes = vec![7_u8; batch as usize * (8 * (FIELDS + 3) + 25 + 24 + 12)];
    let begun = Instant::now();
    for _ in 0..(rows / batch).clamp(1, 500) {
        file.write_all(&bytes).and_then(|()| file.sync_data()).expect("bytes are written");
    }
    let rate = ((rows / batch).clamp(1, 500) * batch) as f64 / begun.elapsed().as_secs_f64();
    println!("floor, the same bytes appended and synced: {rate:.0} rows/s");
    std::fs::remove_file(path).expect("the file is removed");
}

/// Copies the same rows into a table of one's own, and gives the rate.
fn copy_floor(address: &str, version: &VersionRow, rows: u64, batch: u64, key: &str) {
    let mut client = Client::connect(address, NoTls).expect("a connection");
    let table = format!(
        "DROP TABLE IF EXISTS plain; CREATE TABLE plain (id text {key}, time bigint, version text, \
         log_odds bytea, inputs bytea, segment text)"
    );
    client.batch_execute(&table).expect("a table");
    let types = [Type::TEXT, Type::INT8, Type::TEXT, Type::BYTEA, Type::BYTEA, Type::TEXT];
    let bytes = |values: &[f64]| values.iter().flat_map(|value| value.to_le_bytes()).collect::<Vec<u8>>();
    let mut seconds = 0.0;
    for first in (0..rows).step_by(batch as usize) {
        let records: Vec<NewRecord> = (first..(first + batch).min(rows)).map(record).collect();
        let begun = Instant::now();
        let copy = client.copy_in("COPY plain FROM STDIN (FORMAT binary)").expect("a copy");
        let mut copy = BinaryCopyInWriter::new(copy, &types);
        for record in &records {
            let (log_odds, inputs) = (bytes(&record.log_odds), bytes(&record.inputs));
            let version = &&version.fingerprint[..16];
            copy.write(&[&record.id, &record.time, version, &log_odds, &inputs, &record.segments[0]])
                .expect("a row");
        }
        copy.finish().expect("the copy ends");
        seconds += begun.elapsed().as_secs_f64();
    }
    println!("floor, a plain COPY into a table {key}: {:.0} rows/s", rows as f64 / seconds);
    client.batch_execute("DROP TABLE plain").expect("the table is removed");
}

fn main() {
    // Without this word the program is run as a test, of which it is none.
    let arguments: Vec<String> = std::env::args().skip(1).collect();
    if !arguments.iter().any(|argument| argument == "--bench") {
        return;
    }
    let mut given = arguments.iter().filter(|argument| *argument != "--bench");
    let mut number = |otherwise: u64| given.next().and_then(|text| text.parse().ok()).unwrap_or(otherwise);
    let (rows, batch) = (number(1_000_000), number(100_000));
    let place = given.next().map_or_else(|| std::env::temp_dir().display().to_string(), String::clone);
    let parts = given.next().map_or("single,match,read", String::as_str);
    let version = version();
    if place.starts_with("postgres") {
        let url = LedgerUrl::parse(&place, Path::new("/")).expect("an address");
        copy_floor(&place, &version, rows, batch, "");
        copy_floor(&place, &version, rows, batch, "PRIMARY KEY");
        run(&url, &version, (rows, batch), parts);
        return;
    }
    let folder = PathBuf::from(place);
    let path = folder.join("kilter-ledger-bench.db");
    let remove = || {
        for ending in ["db", "db-wal", "db-shm"] {
            let _ = std::fs::remove_file(path.with_extension(ending));
        }
    };
    remove();
    floor(&folder, rows, batch);
    run(&LedgerUrl::Sqlite(path.clone()), &version, (rows, batch), parts);
    println!("{} bytes a record", std::fs::metadata(&path).map_or(0, |metadata| metadata.len()) / rows);
    remove();
}

fn run(url: &LedgerUrl, version: &VersionRow, (rows, batch): (u64, u64), parts: &str) {
    let ledger = Ledger::open(url, Settings::default()).expect("a ledger");
    ledger
        .write(Job::Publish { version: version.clone(), who: "bench".into() })
        .expect("the version is published");
    bulk(&ledger, version, rows, batch);
    if parts.contains("single") {
        singles(&ledger, version, rows);
    }
    if parts.contains("match") {
        matching(&ledger, rows, batch);
    }
    if parts.contains("read") {
        reading(&ledger, version);
    }
    drop(ledger);
    let begun = Instant::now();
    drop(Ledger::open(url, Settings::default()).expect("a ledger"));
    println!("opened again in {:.0} ms", begun.elapsed().as_secs_f64() * 1e3);
}
