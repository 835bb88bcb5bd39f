//! Facts that hold for any correct fit.

use kilter_fit::inference::contrast;
use kilter_fit::{FitSettings, Fitted, Plan, fit};
use kilter_model::{ModelFile, Scorer};
use proptest::prelude::*;

use crate::support::{G, Table, X1, X2, assert_all_close, assert_close, fitted, plan, worked_plan};

/// Two fits of the same likelihood differ by the last Newton step's rounding only.
const SAME_OPTIMUM: f64 = 1e-11;

fn probabilities(model: &ModelFile, table: &Table) -> Vec<f64> {
    let scorer = Scorer::new(model).unwrap();
    scorer.score(&table.batch(&scorer.column_specs())).probabilities
}

fn log_likelihood(fit: &Fitted) -> f64 {
    fit.model.fit.as_ref().unwrap().log_likelihood
}

fn programme(reference: &str) -> Plan {
    plan(&format!(
        "name = \"programme\"\n[data]\nfiles = [\"hsb2.csv\"]\n[outcome]\nfield = \"prog\"\nreference = \"{reference}\"\n\
         [[field]]\nname = \"ses\"\nkind = \"levels\"\nreference = \"low\"\n[[field]]\nname = \"write\"\nkind = \"number\""
    ))
}

#[test]
fn the_reference_category_changes_neither_probabilities_nor_likelihood() {
    let table = Table::read("hsb2/hsb2.csv");
    let academic = fitted(&programme("academic"), &table);
    let vocational = fitted(&programme("vocational"), &table);
    assert_close("likelihood", log_likelihood(&vocational), log_likelihood(&academic), 0.0, 1e-14);
    let (here, there) = (probabilities(&academic.model, &table), probabilities(&vocational.model, &table));
    assert_all_close("probabilities", &there, &here, SAME_OPTIMUM, 0.0);
    let differences = contrast(&academic.model, "general", "vocational", 0.9).unwrap();
    let refitted = contrast(&vocational.model, "general", "vocational", 0.9).unwrap();
    for (difference, refitted) in differences.iter().zip(&refitted) {
        assert_close(&difference.term, difference.estimate, refitted.estimate, SAME_OPTIMUM, 0.0);
        let (found, wanted) = (difference.uncertainty.unwrap(), refitted.uncertainty.unwrap());
        assert_close(&difference.term, found.standard_error, wanted.standard_error, 0.0, 1e-10);
    }
}

#[test]
fn the_reference_level_changes_neither_probabilities_nor_likelihood() {
    let table = Table::read("worked/tiny.csv");
    let k = fitted(&worked_plan("", &format!("{X1}{G}")), &table);
    let m = fitted(&worked_plan("", &format!("{X1}{G}").replace("\"k\"", "\"m\"")), &table);
    assert_close("likelihood", log_likelihood(&m), log_likelihood(&k), 0.0, 1e-14);
    assert_all_close(
        "p",
        &probabilities(&m.model, &table),
        &probabilities(&k.model, &table),
        SAME_OPTIMUM,
        0.0,
    );
}

/// Fitted totals of each category equal the observed ones, over all rows and within each level.
#[test]
fn fitted_totals_equal_observed_ones() {
    let table = Table::read("womenlf/womenlf.csv");
    let plan = plan(
        "name = \"work\"\n[data]\nfiles = [\"womenlf.csv\"]\n[outcome]\nfield = \"partic\"\n[[field]]\nname = \"hincome\"\n\
         kind = \"number\"\n[[field]]\nname = \"region\"\nkind = \"levels\"",
    );
    let model = fitted(&plan, &table).model;
    let p = probabilities(&model, &table);
    let (outcome, region) = (table.column("partic"), table.column("region"));
    let mut regions: Vec<&str> = table.rows.iter().map(|row| row[region].as_str()).collect();
    regions.sort_unstable();
    regions.dedup();
    assert_eq!(regions.len(), 5);
    for level in regions {
        for (category, name) in model.outcome.categories.iter().enumerate() {
            let rows = || table.rows.iter().enumerate().filter(|(_, row)| row[region] == level);
            let observed = rows().filter(|(_, row)| row[outcome] == *name).count() as f64;
            let expected: f64 = rows().map(|(index, _)| p[index * 3 + category]).sum();
            assert_close(&format!("{level} {name}"), expected, observed, 1e-8, 0.0);
        }
    }
}

/// With all interactions of two fields of levels the probabilities are the shares of each cell.
#[test]
fn a_saturated_model_gives_the_shares_of_each_cell() {
    let table = Table::read("housing/housing_sat.csv");
    let field = |name: &str| format!("[[field]]\nname = \"{name}\"\nkind = \"levels\"\n");
    let model = fitted(
        &plan(&format!(
            "name = \"housing\"\n[data]\nfiles = [\"x\"]\ncount = \"Freq\"\n[outcome]\nfield = \"Sat\"\n{}{}[[interaction]]\nfields = [\"Infl\", \"Cont\"]",
            field("Infl"),
            field("Cont")
        )),
        &table,
    )
    .model;
    let p = probabilities(&model, &table);
    let [infl, cont, sat, freq] = ["Infl", "Cont", "Sat", "Freq"].map(|name| table.column(name));
    for (index, row) in table.rows.iter().enumerate() {
        let cases = |matching: &dyn Fn(&Vec<String>) -> bool| -> f64 {
            table.rows.iter().filter(|row| matching(row)).map(|row| row[freq].parse::<f64>().unwrap()).sum()
        };
        let same_cell = |other: &Vec<String>| other[infl] == row[infl] && other[cont] == row[cont];
        let of_category = cases(&|other| same_cell(other) && other[sat] == row[sat]);
        let category = model.outcome.categories.iter().position(|name| *name == row[sat]).unwrap();
        assert_close("share", p[index * 3 + category], of_category / cases(&same_cell), 1e-12, 0.0);
    }
}

/// A row that stands for n cases is the same as n rows.
#[test]
fn counts_equal_repeated_rows() {
    let table = Table::read("worked/tiny.csv");
    let w = table.column("w");
    let repeated = Table {
        header: table.header.clone(),
        rows: table.rows.iter().flat_map(|row| vec![row.clone(); row[w].parse().unwrap()]).collect(),
    };
    let fields = format!("{X1}{X2}{G}");
    let counted = fitted(&worked_plan("count = \"w\"", &fields), &table);
    let expanded = fitted(&worked_plan("", &fields), &repeated);
    assert_close("likelihood", log_likelihood(&counted), log_likelihood(&expanded), 0.0, 1e-14);
    for category in ["b", "c"] {
        let (counted, expanded) =
            (&counted.model.coefficients[category], &expanded.model.coefficients[category]);
        assert_all_close(category, counted, expanded, 0.0, 1e-10);
    }
    let (a, b) = (counted.model.covariance.unwrap(), expanded.model.covariance.unwrap());
    assert_all_close("covariance", &a.lower, &b.lower, 0.0, 1e-9);
}

/// A larger table made of the worked one, so that there are several chunks.
fn long_table() -> Table {
    let tiny = Table::read("worked/tiny.csv");
    let x2 = tiny.column("x2");
    let rows = (0..700).flat_map(|copy| {
        tiny.rows.iter().enumerate().map(move |(index, row)| {
            let mut row = row.clone();
            let year: f64 = row[x2].parse().unwrap();
            row[x2] = (year + f64::from((copy * 31 + index as i32 * 17) % 100) / 100.0).to_string();
            row
        })
    });
    Table { header: tiny.header.clone(), rows: rows.collect() }
}

#[test]
fn batches_threads_and_memory_change_no_bit() {
    let table = long_table();
    let plan = worked_plan("count = \"w\"", &format!("{X1}{X2}{G}[[interaction]]\nfields = [\"x1\", \"g\"]"));
    let with = |size: usize, threads: usize, keep_bytes: usize| {
        let settings = FitSettings { threads, keep_bytes };
        fit(&plan, &mut table.batches(&plan, size), settings, &mut |_| {}).unwrap().model
    };
    let whole = with(table.rows.len(), 1, usize::MAX);
    assert_eq!(whole.fit.as_ref().unwrap().rows, 42_000);
    for (size, threads, keep_bytes) in
        [(999, 1, usize::MAX), (50_000, 3, usize::MAX), (7_000, 2, 0), (16_385, 1, 1 << 20)]
    {
        assert_eq!(
            with(size, threads, keep_bytes),
            whole,
            "batches of {size}, {threads} threads, {keep_bytes} bytes"
        );
    }
}

#[test]
fn the_order_of_rows_changes_rounding_only() {
    let table = Table::read("worked/tiny.csv");
    let backwards = Table { header: table.header.clone(), rows: table.rows.iter().rev().cloned().collect() };
    let plan = worked_plan("", &format!("{X1}{X2}{G}"));
    let (here, there) = (fitted(&plan, &table), fitted(&plan, &backwards));
    assert_close("likelihood", log_likelihood(&here), log_likelihood(&there), 0.0, 1e-14);
    for (category, coefficients) in &here.model.coefficients {
        assert_all_close(category, coefficients, &there.model.coefficients[category], 0.0, 1e-9);
    }
}

/// Columns in other units: coefficients scale, the fit does not change.
#[test]
fn units_change_coefficients_only() {
    let table = Table::read("worked/tiny.csv");
    let mut metres = table.clone();
    let x1 = table.column("x1");
    for row in &mut metres.rows {
        row[x1] = (row[x1].parse::<f64>().unwrap() * 1024.0).to_string();
    }
    let plan = worked_plan("", X1);
    let (here, there) = (fitted(&plan, &table), fitted(&plan, &metres));
    for (category, b) in &here.model.coefficients {
        assert_close(category, there.model.coefficients[category][1] * 1024.0, b[1], 0.0, 1e-12);
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    /// With intercepts only, and with one field of levels, probabilities are shares.
    #[test]
    fn one_field_of_levels_gives_the_shares_within_each_level(counts in prop::collection::vec(1u32..30, 9)) {
        let cells = || ["a", "b", "c"].into_iter().flat_map(|y| ["k", "l", "m"].map(|g| (y, g)));
        let lines: Vec<String> = cells().zip(&counts).map(|((y, g), n)| format!("{y},{g},{n}")).collect();
        let table = Table::parse(&format!("y,g,n\n{}", lines.join("\n")));
        let model = fitted(&worked_plan("count = \"n\"", G), &table).model;
        let p = probabilities(&model, &table);
        for (row, (_, g)) in cells().enumerate() {
            let in_level: u32 = cells().zip(&counts).filter(|((_, level), _)| *level == g).map(|(_, n)| n).sum();
            let category = row / 3;
            let share = f64::from(counts[row]) / f64::from(in_level);
            prop_assert!((p[row * 3 + category] - share).abs() < 1e-9);
        }
    }
}
