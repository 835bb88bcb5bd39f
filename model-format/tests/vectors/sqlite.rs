//! The expressions in SQL, run by SQLite, must find what the scorer finds.

use kilter_model::{Field, ModelFile, SqlError, sql, sql_query};
use rusqlite::functions::{Context, FunctionFlags};
use rusqlite::types::Value as Cell;
use rusqlite::{Connection, Error};
use serde_json::Value;

use crate::random::{self, Random};
use crate::{models, vector, vectors};

/// Differences of coefficients and sums are rounded in another order than in the scorer.
const RELATIVE: f64 = 1e-12;
/// The expressions promise nothing below this.
const TINY: f64 = 1e-300;

/// An engine whose EXP and LN are as strict as any: overflow, underflow and a logarithm of
/// zero are errors. SQLite is built with or without these functions, so they come from here.
fn engine() -> Connection {
    let engine = Connection::open_in_memory().unwrap();
    for (name, function) in [("EXP", f64::exp as fn(f64) -> f64), ("LN", f64::ln)] {
        let strict = move |context: &mut Context| match context.get::<Option<f64>>(0)? {
            None => Ok(None),
            Some(x) if function(x).is_normal() || function(x) == 0.0 && x == 1.0 => Ok(Some(function(x))),
            Some(x) => Err(Error::UserFunctionError(format!("{name} is out of range at {x}").into())),
        };
        let flags = FunctionFlags::SQLITE_UTF8 | FunctionFlags::SQLITE_DETERMINISTIC;
        engine.create_scalar_function(name, 1, flags, strict).unwrap();
    }
    engine
}

fn quoted(name: &str) -> String {
    format!("\"{}\"", name.replace('"', "\"\""))
}

/// The kinds of cells that a table's columns can hold; what a JSON record may have besides, such as
/// a list where a number should be, cannot get into a table.
fn cell(field: &Field, value: &Value) -> Option<Cell> {
    match (field, value) {
        (_, Value::Null) => Some(Cell::Null),
        (Field::Number(_), Value::Number(number)) => number.as_f64().map(Cell::Real),
        (Field::Levels(_), Value::Number(number)) => {
            number.as_i64().map(|whole| Cell::Text(whole.to_string()))
        }
        (Field::Levels(_), Value::String(text)) => Some(Cell::Text(text.clone())),
        (Field::Flag(_), Value::Bool(flag)) => Some(Cell::Integer((*flag).into())),
        (Field::Flag(_), Value::Number(number)) if number.is_i64() => number.as_i64().map(Cell::Integer),
        _ => None,
    }
}

fn cells(model: &ModelFile, record: &Value) -> Option<Vec<Cell>> {
    model.fields.iter().map(|field| cell(field, &record[field.name()])).collect()
}

/// Probabilities of each row, in model order; `None` where all of them are NULL.
fn scored_by_engine(model: &ModelFile, rows: &[Vec<Cell>]) -> Vec<Option<Vec<f64>>> {
    let engine = engine();
    let columns: Vec<String> = model
        .fields
        .iter()
        .map(|field| {
            let kind = match field {
                Field::Number(_) => "DOUBLE PRECISION",
                Field::Levels(_) => "VARCHAR(100)",
                Field::Flag(_) => "BOOLEAN",
            };
            format!("{} {kind}", quoted(field.name()))
        })
        .collect();
    engine.execute(&format!("CREATE TABLE stops ({})", columns.join(", ")), []).unwrap();
    let marks = vec!["?"; columns.len()].join(", ");
    for row in rows {
        let insert = format!("INSERT INTO stops VALUES ({marks})");
        engine.execute(&insert, rusqlite::params_from_iter(row)).unwrap();
    }
    let list = format!("SELECT {} FROM stops", sql(model).unwrap());
    let scored = probabilities(&engine, &list, model, 0);
    let two_levels = probabilities(&engine, &sql_query(model, "main.stops").unwrap(), model, columns.len());
    for (one, other) in scored.iter().zip(&two_levels) {
        let near = |(a, b): (&f64, &f64)| (a - b).abs() <= RELATIVE * b + TINY;
        let agree = match (one, other) {
            (Some(one), Some(other)) => one.iter().zip(other).all(near),
            _ => one == other,
        };
        assert!(agree, "{one:?} by the list, {other:?} by the query");
    }
    scored
}

/// The columns `p_…` of a query; before them stand `carried` columns of the table and, where there
/// are any, the log-odds.
fn probabilities(
    engine: &Connection,
    query: &str,
    model: &ModelFile,
    carried: usize,
) -> Vec<Option<Vec<f64>>> {
    let categories = &model.outcome.categories;
    let log_odds = if carried > 0 { categories.len() - 1 } else { 0 };
    let mut statement = engine.prepare(query).unwrap();
    let names: Vec<&str> = statement.column_names().skip(carried + log_odds).collect();
    let wanted: Vec<String> = categories.iter().map(|name| format!("p_{name}")).collect();
    assert_eq!(names, wanted);
    let read = |row: &rusqlite::Row| {
        let cell = |category: usize| row.get(carried + log_odds + category);
        let numbers: Vec<Option<f64>> = (0..categories.len()).map(cell).collect::<Result<_, _>>()?;
        assert!(numbers.iter().all(Option::is_some) || numbers.iter().all(Option::is_none), "{numbers:?}");
        Ok(numbers.into_iter().collect())
    };
    statement.query_map([], read).unwrap().collect::<Result<_, _>>().unwrap()
}

/// Compares on the records that can stand in a table; returns how many there were.
fn assert_agree(model: &ModelFile, records: &[String]) -> usize {
    let fitting: Vec<(&String, Vec<Cell>)> = records
        .iter()
        .filter_map(|record| Some((record, cells(model, &serde_json::from_str(record).ok()?)?)))
        .collect();
    let rows: Vec<Vec<Cell>> = fitting.iter().map(|(_, row)| row.clone()).collect();
    for ((record, _), found) in fitting.iter().zip(scored_by_engine(model, &rows)) {
        match vectors::score(model, record) {
            ("refused", refusal) => assert_eq!(found, None, "{record}: refused with {refusal}"),
            (_, wanted) => {
                let found = found.unwrap_or_else(|| panic!("{record}: NULL instead of {wanted}"));
                for (found, wanted) in found.iter().zip(wanted.as_array().unwrap()) {
                    let wanted = wanted.as_f64().unwrap();
                    let near = (found - wanted).abs() <= RELATIVE * wanted + TINY;
                    assert!(near, "{record}: {found:e} instead of {wanted:e}");
                }
            }
        }
    }
    fitting.len()
}

#[test]
fn sqlite_agrees_on_all_vectors() {
    for vector in models::all() {
        let records: Vec<String> = vector.records.iter().map(|record| (*record).to_owned()).collect();
        let compared = assert_agree(&vector.model, &records);
        assert!(compared * 2 > records.len(), "{}: {compared} of {} records", vector.name, records.len());
    }
}

#[test]
fn sqlite_agrees_on_random_records_of_random_models() {
    let mut random = Random(20_260_302);
    let mut compared = 0;
    for _ in 0..40 {
        let model = random::model(&mut random);
        let records: Vec<String> = (0..50).map(|_| random::record(&mut random, &model).to_string()).collect();
        compared += assert_agree(&model, &records);
    }
    assert!(compared > 1000, "{compared} records could stand in a table");
}

/// A flag may be a boolean, a whole number or a text; a level may be a whole number.
#[test]
fn flags_and_levels_may_have_other_types() {
    let model = vector("flags-and-levels").model;
    let row = |zone: Cell, flag: Cell| vec![zone, Cell::Text("only".into()), flag];
    let text = |text: &str| Cell::Text(text.into());
    let same = [
        row(text("10"), Cell::Integer(1)),
        row(Cell::Integer(10), text("TRUE")),
        row(Cell::Integer(10), text("Yes")),
        row(Cell::Integer(10), text("1")),
    ];
    let scored = scored_by_engine(&model, &same);
    assert!(scored[0].is_some());
    assert!(scored.iter().all(|row| *row == scored[0]), "{scored:?}");
    let refused = [row(text("10"), Cell::Integer(2)), row(text("10"), text("falsehood"))];
    assert_eq!(scored_by_engine(&model, &refused), [None, None]);
}

/// Engines limit the depth of an expression and the size of a statement.
#[test]
fn wide_models_can_be_run() {
    let mut model = vector("two-categories").model;
    let first = model.fields[0].clone();
    let mut random = Random(7);
    model.fields = (0..1200)
        .map(|index| match first.clone() {
            Field::Number(mut number) => {
                number.name = format!("n{index}");
                Field::Number(number)
            }
            other => other,
        })
        .collect();
    model.terms = kilter_model::Design::of_model(&model).unwrap().term_names();
    for row in model.coefficients.values_mut() {
        *row = (0..1201).map(|_| random.uniform(-0.1, 0.1)).collect();
    }
    let engine = engine();
    let columns: Vec<String> =
        (0..1200).map(|index| format!("\"n{index}\" DOUBLE PRECISION DEFAULT 1.5")).collect();
    engine.execute(&format!("CREATE TABLE stops ({})", columns.join(", ")), []).unwrap();
    engine.execute("INSERT INTO stops DEFAULT VALUES", []).unwrap();
    let found: f64 = engine
        .query_row(&format!("SELECT {} FROM stops", sql(&model).unwrap()), [], |row| row.get(0))
        .unwrap();
    let record: serde_json::Map<String, Value> =
        (0..1200).map(|index| (format!("n{index}"), 1.5.into())).collect();
    let (_, wanted) = vectors::score(&model, &Value::Object(record).to_string());
    let wanted = wanted[0].as_f64().unwrap();
    assert!((found - wanted).abs() <= RELATIVE * wanted, "{found} instead of {wanted}");
}

#[test]
fn what_cannot_be_written_is_named() {
    let sound = vector("forms").model;
    let mut zero = sound.clone();
    zero.outcome.categories[1] = "safe\0place".into();
    let name = "p_safe\\0place".to_owned();
    assert_eq!(sql(&zero), Err(SqlError::ZeroCharacter { name }));
    let mut far = sound.clone();
    far.coefficients.insert("carded".into(), vec![f64::MAX; far.terms.len()]);
    far.coefficients.insert("neighbour".into(), vec![-f64::MAX; far.terms.len()]);
    assert_eq!(sql(&far), Err(SqlError::Coefficients { term: "(intercept)".into() }));
}
