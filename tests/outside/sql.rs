//! `kilter sql` on PostgreSQL: the data base must find what the test vectors say.

use std::path::{Path, PathBuf};

use kilter_test_postgres::Cluster;
use postgres::Client;
use postgres::types::ToSql;
use serde_json::Value;

use crate::support::{json_file, kilter_well, write};

/// Sums are rounded in another order than in the scorer.
const RELATIVE: f64 = 1e-12;
/// The expressions promise nothing below this.
const TINY: f64 = 1e-300;

fn vectors() -> Vec<PathBuf> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("../model-format/vectors");
    let mut paths: Vec<PathBuf> =
        std::fs::read_dir(folder).expect("vectors").map(|entry| entry.expect("an entry").path()).collect();
    paths.sort();
    paths
}

fn quoted(name: &str) -> String {
    format!("\"{}\"", name.replace('"', "\"\""))
}

/// A cell as a parameter, where it can stand in a table: what a JSON record may have besides, such
/// as a list where a number should be, cannot.
fn cell(kind: &str, value: &Value) -> Option<Box<dyn ToSql + Sync>> {
    match (kind, value) {
        ("number", Value::Null | Value::Number(_)) => Some(Box::new(value.as_f64())),
        ("levels", Value::Null | Value::String(_)) => Some(Box::new(value.as_str().map(str::to_owned))),
        ("flag", Value::Null | Value::Bool(_)) => Some(Box::new(value.as_bool())),
        _ => None,
    }
}

fn fields(model: &Value) -> Vec<(String, String)> {
    let text = |value: &Value| value.as_str().expect("a text").to_owned();
    let fields = model["fields"].as_array().expect("fields");
    fields.iter().map(|field| (text(&field["name"]), text(&field["kind"]))).collect()
}

/// Probabilities of one record as the data base computes them; `None` where they are NULL.
fn probabilities(
    client: &mut Client,
    query: &str,
    model: &Value,
    cells: &[Box<dyn ToSql + Sync>],
) -> Result<Option<Vec<f64>>, postgres::Error> {
    let mut transaction = client.transaction()?;
    let columns: Vec<String> = fields(model)
        .iter()
        .map(|(name, kind)| {
            let kind = match kind.as_str() {
                "number" => "double precision",
                "levels" => "text",
                _ => "boolean",
            };
            format!("{} {kind}", quoted(name))
        })
        .collect();
    transaction.batch_execute(&format!("CREATE TEMPORARY TABLE stops ({})", columns.join(", ")))?;
    let marks: Vec<String> = (1..=cells.len()).map(|place| format!("${place}")).collect();
    let cells: Vec<&(dyn ToSql + Sync)> = cells.iter().map(AsRef::as_ref).collect();
    transaction.execute(&format!("INSERT INTO stops VALUES ({})", marks.join(", ")), &cells)?;
    let row = transaction.query_one(query, &[])?;
    let categories = model["outcome"]["categories"].as_array().expect("categories");
    let found = categories
        .iter()
        .map(|name| row.get::<_, Option<f64>>(format!("p_{}", name.as_str().expect("a name")).as_str()));
    Ok(found.collect())
}

#[test]
fn postgresql_agrees_with_the_vectors() {
    let cluster = Cluster::start();
    let mut client = cluster.client("postgres");
    let folder = tempfile::tempdir().expect("a folder");
    let mut compared = 0;
    for path in vectors() {
        let name = path.file_stem().expect("a name").to_string_lossy().into_owned();
        let vector = json_file(&path);
        write(&folder.path().join("m.json"), &vector["model"].to_string());
        let list = kilter_well(folder.path(), &["sql", "m.json"]);
        let queries = [
            format!("SELECT {list} FROM stops"),
            kilter_well(folder.path(), &["sql", "m.json", "--from", "stops"]),
        ];
        for case in vector["cases"].as_array().expect("cases") {
            let record = &case["record"];
            let cells: Option<Vec<_>> =
                fields(&vector["model"]).iter().map(|(field, kind)| cell(kind, &record[field])).collect();
            let Some(cells) = cells else { continue };
            for query in &queries {
                let found = match probabilities(&mut client, query, &vector["model"], &cells) {
                    Ok(found) => found,
                    // PostgreSQL ends a statement whose products overflow; the scorer refuses the record.
                    Err(error) if name == "extremes" => {
                        let code = error.code().map(postgres::error::SqlState::code);
                        assert_eq!(code, Some("22003"), "{record}: {error}");
                        continue;
                    }
                    Err(error) => panic!("{name}, {record}: {error:?}"),
                };
                compared += 1;
                let Some(wanted) = case["probabilities"].as_array() else {
                    assert_eq!(found, None, "{name}, {record}: it is refused");
                    continue;
                };
                let found = found.unwrap_or_else(|| panic!("{name}, {record}: NULL"));
                for (found, wanted) in found.iter().zip(wanted) {
                    let wanted = wanted.as_f64().expect("a number");
                    let near = (found - wanted).abs() <= RELATIVE * wanted + TINY;
                    assert!(near, "{name}, {record}: {found:e} instead of {wanted:e}");
                }
            }
        }
    }
    assert!(compared > 120, "{compared} records could stand in a table");
}
