//! What the tests of fits share: tables read into batches, plans, closeness.

use std::path::PathBuf;

use kilter_fit::{Analysis, Batches, FitError, FitSettings, Fitted, Plan, Session, fit};
use kilter_model::cells::{parse_flag, parse_number, parse_time};
use kilter_model::{
    Batch, CellKind, Column, ColumnSpec, MISSING_CODE, MISSING_FLAG, MISSING_TIME, ModelFile, TextColumn,
};
use serde_json::Value;

/// A table of plain comma-separated text without quotes.
#[derive(Debug, Clone)]
pub(crate) struct Table {
    pub(crate) header: Vec<String>,
    pub(crate) rows: Vec<Vec<String>>,
}

/// The text of a file of reference data.
pub(crate) fn text(path: &str) -> String {
    let path = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("tests-data").join(path);
    std::fs::read_to_string(&path).unwrap_or_else(|error| panic!("{}: {error}", path.display()))
}

/// A JSON file of expected values.
pub(crate) fn json(path: &str) -> Value {
    serde_json::from_str(&text(path)).unwrap()
}

impl Table {
    pub(crate) fn read(path: &str) -> Self {
        Self::parse(&text(path))
    }

    pub(crate) fn parse(text: &str) -> Self {
        let mut lines = text.lines().map(|line| line.split(',').map(String::from).collect::<Vec<_>>());
        Self { header: lines.next().unwrap(), rows: lines.collect() }
    }

    pub(crate) fn column(&self, name: &str) -> usize {
        self.header.iter().position(|column| column == name).unwrap_or_else(|| panic!("no column {name}"))
    }

    /// The rows for which a condition on the cell of a column holds.
    pub(crate) fn filtered(&self, column: &str, keep: impl Fn(&str) -> bool) -> Self {
        let at = self.column(column);
        let rows = self.rows.iter().filter(|row| keep(&row[at])).cloned().collect();
        Self { header: self.header.clone(), rows }
    }

    pub(crate) fn batch(&self, specs: &[ColumnSpec]) -> Batch {
        let columns = specs.iter().map(|spec| {
            let at = self.column(&spec.name);
            let cells = self.rows.iter().map(|row| row[at].as_str());
            match spec.kind {
                CellKind::Number => Column::Number(
                    cells.map(|cell| parse_number(cell).unwrap().unwrap_or(f64::NAN)).collect(),
                ),
                CellKind::Text => Column::Text(texts(cells)),
                CellKind::Flag => {
                    let flag = |cell| parse_flag(cell).unwrap().map_or(MISSING_FLAG, u8::from);
                    Column::Flag(cells.map(flag).collect())
                }
                CellKind::Time => Column::Time(
                    cells.map(|cell| parse_time(cell).unwrap().unwrap_or(MISSING_TIME)).collect(),
                ),
            }
        });
        Batch { rows: self.rows.len(), columns: columns.collect(), bad_cells: vec![] }
    }

    /// The table in batches of a size.
    pub(crate) fn batches(&self, plan: &Plan, size: usize) -> Batches {
        let part = |rows: &[Vec<String>]| Self { header: self.header.clone(), rows: rows.to_vec() };
        Batches(self.rows.chunks(size).map(|rows| part(rows).batch(&plan.column_specs())).collect())
    }
}

fn texts<'a>(cells: impl Iterator<Item = &'a str>) -> TextColumn {
    let mut column = TextColumn::default();
    for cell in cells {
        let code = if cell.is_empty() {
            MISSING_CODE
        } else {
            let known = column.dictionary.iter().position(|text| text == cell);
            known.unwrap_or_else(|| {
                column.dictionary.push(cell.to_owned());
                column.dictionary.len() - 1
            }) as u32
        };
        column.codes.push(code);
    }
    column
}

pub(crate) fn plan(toml: &str) -> Plan {
    Plan::from_toml(toml).unwrap_or_else(|error| panic!("{error}\n{toml}"))
}

pub(crate) fn try_fit(plan: &Plan, table: &Table) -> Result<Fitted, FitError> {
    fit(plan, &mut table.batches(plan, 1000), FitSettings::default(), &mut |_| {})
}

pub(crate) fn fitted(plan: &Plan, table: &Table) -> Fitted {
    try_fit(plan, table).unwrap_or_else(|error| panic!("{error}"))
}

/// Fits and hands the fit with its rows on.
pub(crate) fn analysed<T>(plan: &Plan, table: &Table, analyse: impl FnOnce(Analysis) -> T) -> T {
    let mut rows = table.batches(plan, 1000);
    let session = Session::open(plan, &mut rows, FitSettings::default(), &mut |_| {});
    let session = session.unwrap_or_else(|error| panic!("{error}"));
    analyse(session.fit(&mut |_| {}).unwrap_or_else(|error| panic!("{error}")))
}

/// A plan for the worked example: `fields` and `data` are further lines of TOML.
pub(crate) fn worked_plan(data: &str, fields: &str) -> Plan {
    plan(&format!(
        "name = \"worked\"\n[data]\nfiles = [\"tiny.csv\"]\n{data}\n[outcome]\nfield = \"y\"\nreference = \"a\"\n{fields}"
    ))
}

pub(crate) const X1: &str = "[[field]]\nname = \"x1\"\nkind = \"number\"\n";
pub(crate) const X2: &str = "[[field]]\nname = \"x2\"\nkind = \"number\"\n";
pub(crate) const G: &str = "[[field]]\nname = \"g\"\nkind = \"levels\"\nreference = \"k\"\n";

/// Numbers of a JSON array.
pub(crate) fn numbers(value: &Value) -> Vec<f64> {
    value.as_array().unwrap().iter().map(|number| number.as_f64().unwrap()).collect()
}

/// Fails where a number is further from another than the larger of two tolerances.
#[track_caller]
pub(crate) fn assert_close(what: &str, found: f64, wanted: f64, absolute: f64, relative: f64) {
    let tolerance = absolute.max(relative * wanted.abs());
    assert!(
        (found - wanted).abs() <= tolerance,
        "{what}: {found} instead of {wanted} (tolerance {tolerance:e})"
    );
}

#[track_caller]
pub(crate) fn assert_all_close(what: &str, found: &[f64], wanted: &[f64], absolute: f64, relative: f64) {
    assert_eq!(found.len(), wanted.len(), "{what}");
    for (index, (found, wanted)) in found.iter().zip(wanted).enumerate() {
        assert_close(&format!("{what}[{index}]"), *found, *wanted, absolute, relative);
    }
}

/// All coefficients, category by category.
pub(crate) fn coefficients(model: &ModelFile) -> Vec<f64> {
    model.compared_categories().flat_map(|category| model.coefficients[category].clone()).collect()
}

/// Standard errors of all coefficients, category by category.
pub(crate) fn standard_errors(model: &ModelFile) -> Vec<f64> {
    let covariance = model.covariance.as_ref().unwrap();
    let size = model.terms.len() * (model.outcome.categories.len() - 1);
    (0..size).map(|index| covariance.at(index, index).sqrt()).collect()
}
