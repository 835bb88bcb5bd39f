//! Drop folders: files in, scored files, refused rows and receipts out.

use std::fs;
use std::path::Path;
use std::time::{Duration, Instant};

use serde_json::{Value, json};

use crate::service::published;
use crate::support::{Service, json_file, kilter, kilter_well, write};

const HEAD: &str = "id,time,ses,write,remark\n";
const ROWS: &str = "a,2026-03-01,low,50,\"first, quoted\"\nb,2026-03-01,high,60,\nc,2026-03-02,middle,41,x\n";

/// Names of the files in a subfolder of the drop folder, sorted; an absent folder has none.
fn files(folder: &Path, subfolder: &str) -> Vec<String> {
    let Ok(entries) = fs::read_dir(folder.join("drop").join(subfolder)) else { return Vec::new() };
    let mut names: Vec<String> =
        entries.map(|entry| entry.expect("an entry").file_name().to_string_lossy().into_owned()).collect();
    names.sort();
    names
}

/// Puts a file into the drop folder as a careful sender does: written aside, then renamed.
fn drop_file(folder: &Path, name: &str, text: &str) {
    let incoming = folder.join("drop/incoming");
    write(&folder.join("aside"), text);
    fs::create_dir_all(&incoming).expect("a folder");
    fs::rename(folder.join("aside"), incoming.join(name)).expect("renamed");
}

fn receipt(folder: &Path, name: &str) -> Value {
    json_file(&folder.join("drop/receipts").join(name))
}

fn scored_records(folder: &Path) -> f64 {
    let report =
        kilter_well(folder, &["drift", "programme", "--from", "2026-03-01", "--to", "2026-03-02", "--json"]);
    serde_json::from_str::<Value>(&report).expect("JSON")["scored"].as_f64().expect("a number")
}

#[test]
fn a_swept_file_is_scored_whole_once_and_receipted() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    published(folder);
    drop_file(folder, "stops.csv", &format!("{HEAD}{ROWS}d,2026-03-02,top,50,\ne,2026-03-02,low,,\n"));
    let run = kilter(folder, &["sweep"]);
    assert_eq!(run.code, 1, "rows were refused: {}", run.err);
    assert_eq!((files(folder, "incoming"), files(folder, "working")), (vec![], vec![]));
    assert_eq!(files(folder, "scored"), ["stops.csv"]);
    let scored = fs::read_to_string(folder.join("drop/scored/stops.csv")).expect("a table");
    let mut lines = scored.lines();
    assert_eq!(
        lines.next(),
        Some("id,time,ses,write,remark,p_academic,p_general,p_vocational,top,version,notes")
    );
    assert!(lines.next().expect("a row").starts_with("a,2026-03-01,low,50,\"first, quoted\",0."), "{scored}");
    assert_eq!(scored.lines().count(), 4);
    let refused = fs::read_to_string(folder.join("drop/refused/stops.csv")).expect("refused rows");
    assert!(refused.contains("d,2026-03-02,top,50,,5,ses,level 'top' was not in the fit"), "{refused}");
    assert!(refused.contains(",6,write,is missing"), "{refused}");
    let receipt = receipt(folder, "stops.csv.json");
    assert_eq!(
        (&receipt["rows"], &receipt["scored"], &receipt["refused"]),
        (&json!(5), &json!(3), &json!(2))
    );
    assert_eq!(receipt["file"], "stops.csv");
    assert_eq!(receipt["sha256"].as_str().map(str::len), Some(64));
    assert_eq!(scored_records(folder), 3.0);
}

#[test]
fn the_same_content_again_is_reported_and_not_scored_twice() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    published(folder);
    drop_file(folder, "one.csv", &format!("{HEAD}{ROWS}"));
    assert_eq!(kilter(folder, &["sweep"]).code, 0);
    drop_file(folder, "two.csv", &format!("{HEAD}{ROWS}"));
    let run = kilter(folder, &["sweep"]);
    assert_eq!(run.code, 1, "{}", run.err);
    assert_eq!(receipt(folder, "two.csv.json")["state"], "repeated");
    assert_eq!(receipt(folder, "two.csv.json")["repeats"], "one.csv");
    assert_eq!(files(folder, "scored"), ["one.csv"]);
    assert_eq!(files(folder, "incoming"), Vec::<String>::new());
    assert_eq!(scored_records(folder), 3.0);
    // The same name with other content is another file, and neither result is overwritten.
    drop_file(folder, "one.csv", &format!("{HEAD}z,2026-03-02,low,33,\n"));
    assert_eq!(kilter(folder, &["sweep"]).code, 0);
    assert_eq!(files(folder, "scored").len(), 2);
    assert_eq!(scored_records(folder), 4.0);
}

#[test]
fn files_that_cannot_be_read_are_set_aside_whole_with_the_reason() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    published(folder);
    drop_file(folder, "empty.csv", "");
    drop_file(folder, "columns.csv", "id,ses,wirte\na,low,50\n");
    drop_file(folder, "broken.parquet", "PAR1 this is no Parquet file");
    drop_file(folder, "letter.docx", "x");
    drop_file(folder, "good.csv", &format!("{HEAD}{ROWS}"));
    let run = kilter(folder, &["sweep"]);
    assert_eq!(run.code, 1, "{}", run.err);
    for (name, part) in [
        ("empty.csv", "empty"),
        ("columns.csv", "write"),
        ("broken.parquet", "broken.parquet"),
        ("letter.docx", "docx"),
    ] {
        let receipt = receipt(folder, &format!("{name}.json"));
        assert_eq!(receipt["state"], "refused", "{receipt}");
        assert!(receipt["reason"].as_str().unwrap_or_default().contains(part), "{receipt}");
        assert!(files(folder, "refused").contains(&name.to_owned()), "{name} is kept");
    }
    assert_eq!(files(folder, "scored"), ["good.csv"], "the good file went through");
    assert_eq!(files(folder, "incoming"), Vec::<String>::new());
}

#[test]
fn the_running_service_sweeps_by_itself() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    published(folder);
    let service = Service::start(folder);
    drop_file(folder, "stops.csv", &format!("{HEAD}{ROWS}"));
    let patience = Instant::now();
    while files(folder, "receipts").is_empty() {
        assert!(patience.elapsed() < Duration::from_secs(30), "no receipt after half a minute");
        std::thread::sleep(Duration::from_millis(100));
    }
    assert_eq!(files(folder, "scored"), ["stops.csv"]);
    let drift = service.get_json("/models/programme/drift?from=2026-03-01&to=2026-03-02");
    assert_eq!(drift["scored"], 3.0);
    assert!(
        service.get("/metrics").1.contains("kilter_drop_files_total{model=\"programme\",state=\"scored\"} 1")
    );
}

/// A file that a killed worker left is finished by the next sweep, and counted once.
#[test]
fn a_file_left_in_working_is_finished() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    published(folder);
    drop_file(folder, "stops.csv", &format!("{HEAD}{ROWS}"));
    assert_eq!(kilter(folder, &["sweep"]).code, 0);
    // As after a power cut between claim and result: the file lies in `working`, half a result
    // lies aside, and some of the records are in the ledger already.
    fs::remove_file(folder.join("drop/scored/stops.csv")).expect("removed");
    write(&folder.join("drop/working/0190aaaa~more.csv"), &format!("{HEAD}{ROWS}q,2026-03-02,low,44,\n"));
    let run = kilter(folder, &["sweep"]);
    assert_eq!(run.code, 0, "{}", run.err);
    assert_eq!(files(folder, "working"), Vec::<String>::new());
    assert_eq!(files(folder, "scored"), ["more.csv"]);
    assert_eq!(scored_records(folder), 4.0, "three records came twice and count once");
}

/// A file that brings its workers down is not taken up for ever.
#[test]
fn a_file_that_was_begun_too_often_is_set_aside() {
    let folder = tempfile::tempdir().expect("a folder");
    let folder = folder.path();
    published(folder);
    write(&folder.join("drop/working/0190aaaa.3~again.csv"), &format!("{HEAD}{ROWS}"));
    write(&folder.join("drop/working/0190bbbb.2~once-more.csv"), &format!("{HEAD}z,2026-03-02,low,33,\n"));
    assert_eq!(kilter(folder, &["sweep"]).code, 1);
    let receipt = receipt(folder, "again.csv.json");
    assert_eq!(receipt["state"], "refused");
    assert!(receipt["reason"].as_str().unwrap_or_default().contains("never ended"), "{receipt}");
    assert_eq!(
        (files(folder, "refused"), files(folder, "scored")),
        (vec!["again.csv".to_owned()], vec!["once-more.csv".to_owned()])
    );
}
