//! Tests of reading and writing, format by format.

use std::fs;
use std::path::{Path, PathBuf};

use kilter_model::{CellKind, Column, ColumnSpec, MISSING_TIME};
use proptest::prelude::*;

use crate::{Appended, AppendedKind, Format, ReadOptions, TableBatch, TableError, TableReader, TableWriter};

const FORMATS: [&str; 6] = ["t.csv", "t.csv.gz", "t.csv.zst", "t.parquet", "t.ndjson", "t.arrow"];

fn spec(name: &str, kind: CellKind, required: bool) -> ColumnSpec {
    ColumnSpec { name: name.into(), kind, required }
}

fn stops() -> Vec<ColumnSpec> {
    vec![
        spec("weight", CellKind::Number, true),
        spec("dwelling", CellKind::Text, true),
        spec("fragile", CellKind::Flag, false),
        spec("planned_at", CellKind::Time, false),
    ]
}

fn options(columns: Vec<ColumnSpec>) -> ReadOptions {
    ReadOptions { columns, carry: true, ..ReadOptions::default() }
}

fn read(path: &Path, columns: Vec<ColumnSpec>) -> Result<Vec<TableBatch>, TableError> {
    TableReader::open(path, options(columns))?.collect()
}

fn file(folder: &tempfile::TempDir, name: &str, content: impl AsRef<[u8]>) -> PathBuf {
    let path = folder.path().join(name);
    fs::write(&path, content).unwrap();
    path
}

/// Copies a table into another format with one column appended.
fn copy(from: &Path, to: &Path, columns: Vec<ColumnSpec>) -> Result<(), TableError> {
    let reader = TableReader::open(from, options(columns))?;
    let mut writer = TableWriter::create(to, &reader, &[("score", AppendedKind::Number)])?;
    for batch in reader {
        let batch = batch?;
        let rows: Vec<usize> = (0..batch.batch.rows).collect();
        let scores = rows.iter().map(|row| *row as f64 / 3.0).collect();
        writer.write(&batch, &rows, &[Appended::Number(scores)])?;
    }
    writer.finish()
}

const STOPS: &str = "weight,dwelling,fragile,planned_at,remark\n\
    1.5,flat,yes,2026-03-01,\"one, two\"\n\
    ,house,,,\n\
    0.1,\"a \"\"b\"\"\",0,2026-03-01T08:30:00Z,x\n";

fn check_stops(batch: &TableBatch, from: &str) {
    let numbers = batch.batch.columns[0].numbers().unwrap();
    assert_eq!((numbers[0], numbers[2]), (1.5, 0.1), "{from}");
    assert!(numbers[1].is_nan(), "{from}");
    let texts = batch.batch.columns[1].texts().unwrap();
    assert_eq!(
        [texts.get(0), texts.get(1), texts.get(2)],
        [Some("flat"), Some("house"), Some("a \"b\"")],
        "{from}"
    );
    assert_eq!(batch.batch.columns[2], Column::Flag(vec![1, 2, 0]), "{from}");
    let start = 1_772_323_200_000_000;
    let times = batch.batch.columns[3].times().unwrap();
    assert_eq!(times, [start, MISSING_TIME, start + 30_600_000_000], "{from}");
    assert_eq!(batch.batch.bad_cells, [], "{from}");
}

#[test]
fn every_format_carries_a_table_into_every_other() {
    let folder = tempfile::tempdir().unwrap();
    let start = file(&folder, "start.csv", STOPS);
    check_stops(&read(&start, stops()).unwrap()[0], "start.csv");
    for first in FORMATS {
        let there = folder.path().join(format!("1-{first}"));
        // JSON has numbers and truth values of its own, where CSV has texts: a number column that
        // came as text stays one.
        copy(&start, &there, stops()).unwrap();
        for second in FORMATS {
            let text = [spec("remark", CellKind::Text, true), spec("score", CellKind::Number, true)];
            let path = folder.path().join(format!("2-{second}"));
            let reader = TableReader::open(&there, options(text.to_vec())).unwrap();
            let mut writer = TableWriter::create(&path, &reader, &[("more", AppendedKind::Count)]).unwrap();
            for batch in reader {
                let batch = batch.unwrap();
                writer.write(&batch, &[0, 2], &[Appended::Count(vec![7, 8])]).unwrap();
            }
            writer.finish().unwrap();
            let mut wanted = text.to_vec();
            wanted[1].kind = if first.contains("csv") && !second.contains("csv") {
                CellKind::Text
            } else {
                CellKind::Number
            };
            let batches = read(&path, wanted).unwrap();
            let remarks = batches[0].batch.columns[0].texts().unwrap();
            assert_eq!(
                (remarks.get(0), remarks.get(1)),
                (Some("one, two"), Some("x")),
                "{first} to {second}"
            );
            if let Some(scores) = batches[0].batch.columns[1].numbers() {
                assert_eq!(scores, [0.0, 2.0 / 3.0], "{first} to {second}");
            }
        }
    }
}

#[test]
fn csv_cells_are_kept_as_they_came() {
    let folder = tempfile::tempdir().unwrap();
    let start = file(&folder, "a.csv", "a,b\n1.50,\"x, y\"\n007,\"line\nbreak\"\n");
    let to = folder.path().join("b.csv");
    copy(&start, &to, vec![]).unwrap();
    let text = fs::read_to_string(&to).unwrap();
    assert_eq!(text, "a,b,score\n1.50,\"x, y\",0\n007,\"line\nbreak\",0.3333333333333333\n");
}

#[test]
fn json_objects_are_kept_as_they_came() {
    let folder = tempfile::tempdir().unwrap();
    let start = file(&folder, "a.ndjson", "{\"a\": 1.50, \"b\": [1, {\"c\": \"}\"}]}\n\n{}\n");
    let to = folder.path().join("b.ndjson");
    copy(&start, &to, vec![]).unwrap();
    let text = fs::read_to_string(&to).unwrap();
    assert_eq!(
        text,
        "{\"a\": 1.50, \"b\": [1, {\"c\": \"}\"}],\"score\":0.0}\n{\"score\":0.3333333333333333}\n"
    );
}

#[test]
fn bad_cells_and_ragged_rows_are_data_with_their_lines() {
    let folder = tempfile::tempdir().unwrap();
    let text = "\u{feff}weight;dwelling;note\r\nheavy;flat;\r\n2;\"two\nlines\";\r\n3;farm\r\n4;house;a;b\r\n5,5;flat;\r\n";
    let path = file(&folder, "a.csv", text);
    let batch =
        &read(&path, vec![spec("weight", CellKind::Number, true), spec("dwelling", CellKind::Text, true)])
            .unwrap()[0];
    let found: Vec<(u64, &str, &str)> = batch
        .batch
        .bad_cells
        .iter()
        .map(|cell| (batch.line(cell.row), cell.field.as_str(), cell.reason.as_str()))
        .collect();
    assert_eq!(
        found,
        [
            (2, "weight", "`heavy` is not a number"),
            (5, "", "has 2 cells, the head has 3"),
            (6, "", "has 4 cells, the head has 3; beyond it stands `b`"),
            (7, "weight", "`5,5` is not a number"),
        ]
    );
    assert_eq!(batch.batch.columns[1].texts().unwrap().get(1), Some("two\nlines"));
}

#[test]
fn a_bad_line_of_ndjson_leaves_its_neighbours() {
    let folder = tempfile::tempdir().unwrap();
    let path =
        file(&folder, "a.ndjson", "{\"weight\": 1}\nnonsense\n\n{\"weight\": \"x\"}\n[]\n{\"weight\": 2}\n");
    let batch = &read(&path, vec![spec("weight", CellKind::Number, true)]).unwrap()[0];
    assert_eq!(batch.batch.rows, 5);
    let lines: Vec<u64> = batch.batch.bad_cells.iter().map(|cell| batch.line(cell.row)).collect();
    assert_eq!(lines, [2, 4, 5]);
    assert_eq!(batch.batch.columns[0].numbers().unwrap()[4], 2.0);
}

/// Refused lines are kept, as NDJSON that reads back, whatever they were.
#[test]
fn lines_that_are_no_objects_are_kept_as_texts() {
    let folder = tempfile::tempdir().unwrap();
    let lines = ["{\"a\": 1,}", "nonsense", "[1, 2]", "{}"];
    let start = file(&folder, "a.ndjson", lines.join("\n"));
    let to = folder.path().join("b.ndjson");
    let reader = TableReader::open(&start, options(vec![])).unwrap();
    let mut writer = TableWriter::create(&to, &reader, &[]).unwrap();
    for batch in reader {
        writer.write(&batch.unwrap(), &[0, 1, 2, 3], &[]).unwrap();
    }
    writer.finish().unwrap();
    let text = fs::read_to_string(&to).unwrap();
    let kept: Vec<serde_json::Value> = text.lines().map(|line| serde_json::from_str(line).unwrap()).collect();
    for (line, object) in lines.iter().zip(&kept).take(3) {
        assert_eq!(object["line_text"], *line);
    }
    assert_eq!(kept[3], serde_json::json!({}));
}

#[test]
fn a_key_of_a_later_object_clashes_too() {
    let folder = tempfile::tempdir().unwrap();
    let text = "{\"a\": \"score\"}\n{\"a\": {\"score\": 1}}\n{\"score\": 2}\n";
    let start = file(&folder, "a.ndjson", text);
    let error = copy(&start, &folder.path().join("b.ndjson"), vec![]).unwrap_err().to_string();
    assert!(error.contains("a.ndjson") && error.contains("`score` already"), "{error}");
    assert!(!folder.path().join("b.ndjson").exists());
}

#[test]
fn files_that_cannot_be_read_are_named() {
    let folder = tempfile::tempdir().unwrap();
    let good = file(&folder, "good.csv", STOPS);
    let parquet = folder.path().join("good.parquet");
    copy(&good, &parquet, stops()).unwrap();
    let bytes = fs::read(&parquet).unwrap();
    for (name, content, part) in [
        ("empty.csv", vec![], "`{}` is empty"),
        ("empty.parquet", vec![], "`{}` is empty"),
        ("empty.ndjson", vec![], "`{}` is empty"),
        ("cut.parquet", bytes[..bytes.len() / 2].to_vec(), "`{}` is no readable Parquet file"),
        ("other.parquet", b"weight,dwelling\n".to_vec(), "`{}` is no readable Parquet file"),
        ("other.arrow", b"ARROW1 and no more".to_vec(), "`{}` is no readable Arrow file"),
        ("broken.csv.gz", b"no gzip".to_vec(), "`{}` is no readable CSV file"),
        ("twice.csv", b"weight,weight\n".to_vec(), "column `weight` stands twice in `{}`"),
        ("lacks.csv", b"wieght,dwelling\n".to_vec(), "no column `weight` in `{}`; did you mean `wieght`?"),
        ("latin.csv", b"weight,dwelling\n1,flat\n2,caf\xe9\n".to_vec(), "`{}` is not UTF-8: see byte 28"),
    ] {
        let path = file(&folder, name, content);
        let error = read(&path, stops()).unwrap_err();
        let wanted = part.replace("{}", &path.display().to_string());
        assert!(error.to_string().contains(&wanted), "{name}: {error}");
        assert!(error.is_about_input(), "{name}");
    }
    let absent = read(&folder.path().join("absent.csv"), stops()).unwrap_err();
    assert!(absent.to_string().contains("absent.csv") && !absent.is_about_input(), "{absent}");
    let path = folder.path().join("folder.csv");
    fs::create_dir(&path).unwrap();
    assert!(read(&path, stops()).unwrap_err().to_string().contains("folder.csv"));
}

/// A file cut short at any place gives an error, never a panic.
#[test]
fn parquet_cut_short_never_panics() {
    let folder = tempfile::tempdir().unwrap();
    let good = file(&folder, "good.csv", STOPS);
    let parquet = folder.path().join("good.parquet");
    copy(&good, &parquet, stops()).unwrap();
    let bytes = fs::read(&parquet).unwrap();
    for length in (1..bytes.len()).step_by(7) {
        let path = file(&folder, "cut.parquet", &bytes[..length]);
        let error = read(&path, stops()).unwrap_err().to_string();
        assert!(error.contains("cut.parquet"), "{length} bytes: {error}");
    }
}

#[test]
fn a_table_with_a_head_only_has_no_batches_and_is_written_as_one() {
    let folder = tempfile::tempdir().unwrap();
    let path = file(&folder, "a.csv", "weight,dwelling\n");
    assert!(read(&path, stops()).unwrap().is_empty());
    for name in FORMATS {
        let to = folder.path().join(name);
        copy(&path, &to, stops()).unwrap();
        if !name.contains("ndjson") {
            let again = read(&to, vec![spec("score", CellKind::Number, true)]).unwrap();
            assert!(again.is_empty(), "{name}");
        }
    }
}

#[test]
fn an_appended_column_that_is_there_already_is_an_error() {
    let folder = tempfile::tempdir().unwrap();
    let path = file(&folder, "a.csv", "weight,score\n1,2\n");
    let error = copy(&path, &folder.path().join("b.csv"), vec![]).unwrap_err();
    assert!(error.to_string().contains("`score` already"), "{error}");
    assert!(!folder.path().join("b.csv").exists());
}

#[test]
fn a_file_appears_whole_or_not_at_all() {
    let folder = tempfile::tempdir().unwrap();
    let start = file(&folder, "a.csv", STOPS);
    let to = folder.path().join("b.csv");
    let reader = TableReader::open(&start, options(stops())).unwrap();
    let mut writer = TableWriter::create(&to, &reader, &[("line", AppendedKind::Count)]).unwrap();
    for batch in reader {
        let batch = batch.unwrap();
        writer.write(&batch, &[0], &[Appended::Count(vec![batch.line(0)])]).unwrap();
    }
    assert!(!to.exists(), "not before it is finished");
    drop(writer);
    assert_eq!(fs::read_dir(folder.path()).unwrap().count(), 1, "nothing is left aside");
}

#[test]
fn batches_are_bounded_and_count_on() {
    let folder = tempfile::tempdir().unwrap();
    let rows: String = (0..1000).map(|row| format!("{row}\n")).collect();
    let start = file(&folder, "a.csv", format!("weight\n{rows}"));
    let parquet = folder.path().join("a.parquet");
    copy(&start, &parquet, vec![]).unwrap();
    for path in [&start, &parquet] {
        let columns = vec![spec("weight", CellKind::Number, true)];
        let options = ReadOptions { columns, carry: false, batch_rows: 300, separator: None };
        let mut next = 0;
        for batch in TableReader::open(path, options).unwrap() {
            let batch = batch.unwrap();
            assert!(batch.batch.rows <= 300);
            assert_eq!(batch.first_row, next, "{}", path.display());
            assert_eq!(batch.batch.columns[0].numbers().unwrap()[0], next as f64);
            next += batch.batch.rows as u64;
        }
        assert_eq!(next, 1000, "{}", path.display());
    }
}

#[test]
fn a_stream_is_read_as_a_file_is() {
    let stream = Box::new(std::io::Cursor::new(STOPS));
    let reader = TableReader::from_stream(stream, Format::Csv, options(stops())).unwrap();
    let batches: Vec<TableBatch> = reader.collect::<Result<_, _>>().unwrap();
    check_stops(&batches[0], "a stream");
    let empty = Box::new(std::io::Cursor::new(""));
    assert!(matches!(
        TableReader::from_stream(empty, Format::Csv, options(stops())),
        Err(TableError::Empty { .. })
    ));
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    #[test]
    fn numbers_read_back_bit_for_bit(numbers in prop::collection::vec(any::<f64>().prop_filter("finite", |x| x.is_finite()), 1..40)) {
        let folder = tempfile::tempdir().unwrap();
        for name in FORMATS {
            let path = folder.path().join(name);
            let mut writer = TableWriter::create_new(&path, &[("x", AppendedKind::Number)]).unwrap();
            writer.write_new(numbers.len(), &[Appended::Number(numbers.clone())]).unwrap();
            writer.finish().unwrap();
            let batches = read(&path, vec![spec("x", CellKind::Number, true)]).unwrap();
            let again = batches[0].batch.columns[0].numbers().unwrap();
            let bits = |values: &[f64]| values.iter().map(|x| x.to_bits()).collect::<Vec<_>>();
            prop_assert_eq!(bits(again), bits(&numbers), "{}", name);
        }
    }
}
