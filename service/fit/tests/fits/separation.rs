//! Data that separate the categories have no estimate, and the fit says where it lies.

use kilter_fit::FitError;

use crate::support::{G, Table, X1, X2, try_fit, worked_plan};

fn report(fields: &str, table: &Table) -> kilter_fit::SeparationReport {
    match try_fit(&worked_plan("", fields), table) {
        Err(FitError::Separated(report)) => *report,
        other => panic!("{other:?}"),
    }
}

/// Without the rows of category b at level m: one empty cell, one coefficient that falls.
#[test]
fn an_empty_cell_is_named() {
    let mut table = Table::read("worked/tiny.csv");
    let (y, g) = (table.column("y"), table.column("g"));
    table.rows.retain(|row| row[y] != "b" || row[g] != "m");
    assert_eq!(table.rows.len(), 57);
    let report = report(&format!("{X1}{X2}{G}"), &table);
    assert_eq!(report.findings, ["category `b` never occurs with `g` = `m` (16 cases)"]);
    let drifts: Vec<_> =
        report.drifts.iter().map(|d| (d.category.as_str(), d.term.as_str(), d.upwards)).collect();
    assert_eq!(drifts, [("b", "g=m", false)]);
    assert!(report.to_string().contains("never occurs"), "{report}");
}

/// Nine numbers in three runs: complete separation.
#[test]
fn ranges_that_do_not_overlap_are_named() {
    let table = Table::parse("y,x1\na,1\na,2\na,3\nb,4\nb,5\nb,6\nc,7\nc,8\nc,9");
    let report = report(X1, &table);
    assert!(
        report.findings.iter().any(|f| f == "`x1` is at most 3 with category `a` and at least 4 with `b`"),
        "{report:?}"
    );
    assert!(report.drifts.iter().any(|d| d.category == "c" && d.term == "x1" && d.upwards), "{report:?}");
}
