//! The worked example for tests inside the crate: 60 generated rows (see `tests-data/worked`).

use kilter_model::{Batch, CellKind, Column, TextColumn};

use crate::{Batches, Plan};

const TABLE: &str = include_str!("../tests-data/worked/tiny.csv");

/// Fields of the worked example in TOML.
pub(crate) const X1: &str = "[[field]]\nname = \"x1\"\nkind = \"number\"\n";
pub(crate) const X2: &str = "[[field]]\nname = \"x2\"\nkind = \"number\"\n";
pub(crate) const G: &str = "[[field]]\nname = \"g\"\nkind = \"levels\"\nreference = \"k\"\n";

/// A plan with these fields.
pub(crate) fn plan(fields: &str) -> Plan {
    Plan::from_toml(&format!(
        "name = \"worked\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = \"y\"\nreference = \"a\"\n{fields}"
    ))
    .unwrap()
}

/// The rows for which a condition on their cells holds, as the plan asks for them. Cells are id, y,
/// x1, x2, x3, g, cl, w.
pub(crate) fn rows(plan: &Plan, keep: impl Fn(&[&str]) -> bool) -> Batches {
    let mut lines = TABLE.lines().map(|line| line.split(',').collect::<Vec<_>>());
    let header = lines.next().unwrap();
    let cells: Vec<Vec<&str>> = lines.filter(|row| keep(row)).collect();
    let columns = plan.column_specs().into_iter().map(|spec| {
        let at = header.iter().position(|name| *name == spec.name).unwrap();
        if spec.kind == CellKind::Number {
            return Column::Number(cells.iter().map(|row| row[at].parse().unwrap_or(f64::NAN)).collect());
        }
        let mut column = TextColumn::default();
        for row in &cells {
            column.codes.push(column.dictionary.len() as u32);
            column.dictionary.push(row[at].to_owned());
        }
        Column::Text(column)
    });
    Batches(vec![Batch { rows: cells.len(), columns: columns.collect(), bad_cells: vec![] }])
}

/// Fails where a number is further from another than a share of it.
#[track_caller]
pub(crate) fn close(what: &str, found: f64, wanted: f64, relative: f64) {
    assert!((found - wanted).abs() <= relative * wanted.abs(), "{what}: {found} instead of {wanted}");
}
