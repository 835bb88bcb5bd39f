//! Which rows a fit uses, and what it says about the others; levels, categories, scales.

use kilter_fit::{FitError, FitSettings, Split, fit};
use kilter_model::{Field, MissingNumber};

use crate::support::{G, Table, X1, X2, assert_close, fitted, plan, try_fit, worked_plan};

fn attempts(fields: &str, data: &str) -> kilter_fit::Plan {
    plan(&format!(
        "name = \"attempt\"\n[data]\nfiles = [\"attempts.csv\"]\nid = \"stop\"\n{data}\n[outcome]\nfield = \"result\"\n\
         reference = \"handed-over\"\n{fields}"
    ))
}

const RAIN: &str = "[[field]]\nname = \"rain\"\nkind = \"number\"\n";
const DEPOT: &str = "[[field]]\nname = \"depot\"\nkind = \"levels\"\n";

/// Forty stops: results, depots and rain in fixed patterns.
fn stops() -> Table {
    let mut table = Table::parse("stop,result,depot,rain,day,n");
    for i in 0..40usize {
        let result = ["handed-over", "carded", "neighbour", "handed-over"][i * i % 7 % 4];
        let depot = ["north", "south", "east"][i % 3];
        let cells = [
            format!("S-{i}"),
            result.into(),
            depot.into(),
            format!("{}", i * 5 % 11),
            format!("2026-03-{:02}", 1 + i / 4),
            "1".into(),
        ];
        table.rows.push(cells.to_vec());
    }
    table
}

fn set(table: &mut Table, row: usize, column: &str, cell: &str) {
    let at = table.column(column);
    table.rows[row][at] = cell.into();
}

#[test]
fn rows_are_refused_with_their_reasons() {
    let mut table = stops();
    set(&mut table, 3, "result", "");
    set(&mut table, 5, "rain", "99");
    set(&mut table, 7, "n", "-1");
    set(&mut table, 9, "depot", "");
    set(&mut table, 11, "n", "0");
    set(&mut table, 13, "result", "crded");
    let plan = plan(&format!(
        "name = \"attempt\"\n[data]\nfiles = [\"x\"]\nid = \"stop\"\ncount = \"n\"\n[outcome]\nfield = \"result\"\n\
         categories = [\"handed-over\", \"neighbour\", \"carded\"]\n{RAIN}range = [0, 50]\n{DEPOT}"
    ));
    let fit = fitted(&plan, &table);
    let refused: Vec<_> = fit
        .refused
        .iter()
        .map(|r| (r.row, r.id.as_deref().unwrap(), r.field.as_str(), r.reason.as_str()))
        .collect();
    assert_eq!(
        refused,
        [
            (3, "S-3", "result", "is missing"),
            (5, "S-5", "rain", "99 is outside the valid range 0 to 50"),
            (7, "S-7", "n", "-1 is below 0"),
            (9, "S-9", "depot", "is missing"),
            (13, "S-13", "result", "'crded' is not among the categories of the plan; did you mean 'carded'?"),
        ]
    );
    let figures = fit.model.fit.unwrap();
    // The row that stands for no case is neither used nor refused.
    assert_eq!((fit.rows_read, fit.refused_rows, figures.rows), (40, 5, 34));
}

#[test]
fn levels_are_sorted_and_the_most_frequent_is_the_reference() {
    let mut table = stops();
    set(&mut table, 0, "depot", "south");
    let fit = fitted(&attempts(DEPOT, ""), &table);
    let Field::Levels(depot) = &fit.model.fields[0] else { panic!("levels") };
    assert_eq!((depot.levels.join(" "), depot.reference.as_str()), ("east north south".into(), "south"));
    assert_eq!(fit.model.terms, ["(intercept)", "depot=east", "depot=north"]);
    assert_eq!(fit.model.outcome.categories, ["carded", "handed-over", "neighbour"]);
}

#[test]
fn rare_levels_are_merged_and_the_map_is_kept() {
    let mut table = stops();
    for (row, depot) in [(0, "islet"), (4, "islet"), (8, "reef")] {
        set(&mut table, row, "depot", depot);
    }
    let plan = attempts(&format!("{DEPOT}rare = {{ below = 3, into = \"other\" }}\nunseen = \"other\""), "");
    let Field::Levels(depot) = fitted(&plan, &table).model.fields.remove(0) else { panic!("levels") };
    assert_eq!(depot.levels, ["east", "north", "south", "other"]);
    assert_eq!(depot.merged.keys().collect::<Vec<_>>(), ["islet", "reef"]);
    assert!(depot.merged.values().all(|into| into == "other"));
    assert_eq!(depot.unseen, "other");
    let without = fitted(&plan, &stops());
    let Field::Levels(depot) = &without.model.fields[0] else { panic!("levels") };
    assert_eq!(depot.unseen, "refuse", "no level was rare, so there is no level to go to");
    assert!(
        without.warnings.iter().any(|w| w.contains("`unseen` names level `other`")),
        "{:?}",
        without.warnings
    );
}

#[test]
fn missing_levels_follow_the_plan() {
    let mut table = stops();
    for row in [1, 3, 7, 10, 14, 20, 22, 28, 30] {
        set(&mut table, row, "depot", "");
    }
    for (policy, terms, kept) in [("level", 4, "(missing)"), ("reference", 3, "reference")] {
        let fit = fitted(&attempts(&format!("{DEPOT}missing = \"{policy}\""), ""), &table);
        let Field::Levels(depot) = &fit.model.fields[0] else { panic!("levels") };
        assert_eq!((fit.model.terms.len(), depot.missing.as_str()), (terms, kept), "{policy}");
        assert_eq!(fit.refused_rows, 0);
        assert_ne!(depot.reference, "(missing)");
    }
}

#[test]
fn listed_levels_without_rows_are_left_out_and_named() {
    let plan = attempts(
        &format!("{DEPOT}levels = [\"west\", \"south\", \"north\", \"east\"]\nreference = \"south\""),
        "",
    );
    let fit = fitted(&plan, &stops());
    assert_eq!(fit.model.terms, ["(intercept)", "depot=north", "depot=east"]);
    assert!(fit.warnings.iter().any(|w| w.contains("level `west` has no rows")), "{:?}", fit.warnings);
    let error = try_fit(&attempts(&format!("{DEPOT}reference = \"west\""), ""), &stops()).unwrap_err();
    assert_eq!(error.to_string(), "field `depot`: reference level `west` has no rows; choose one that has");
}

#[test]
fn a_category_without_rows_is_an_error_that_names_it() {
    let toml = "name = \"attempt\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = \"result\"\n\
                categories = [\"handed-over\", \"neighbour\", \"carded\", \"safe-place\"]\n";
    let error = try_fit(&plan(&format!("{toml}{RAIN}")), &stops()).unwrap_err();
    assert!(matches!(&error, FitError::EmptyCategory { category } if category == "safe-place"), "{error}");
    let only = stops().filtered("result", |result| result == "carded");
    let error = try_fit(
        &plan(&format!("name = \"a\"\n[data]\nfiles = [\"x\"]\n[outcome]\nfield = \"result\"\n{RAIN}")),
        &only,
    );
    assert!(matches!(error.unwrap_err(), FitError::OneCategory { category } if category == "carded"));
    let error = try_fit(&attempts(RAIN, ""), &only).unwrap_err();
    assert!(matches!(error, FitError::OneCategory { .. } | FitError::UnknownReference { .. }), "{error}");
}

#[test]
fn constants_and_combinations_are_left_out_and_named() {
    let mut table = Table::read("worked/tiny.csv");
    table.header.extend(["double", "same"].map(String::from));
    for row in &mut table.rows {
        let x1: f64 = row[2].parse().unwrap();
        row.push(format!("{}", 1.0 - 2.0 * x1));
        row.push("7.3".into());
    }
    let number = |name: &str| format!("[[field]]\nname = \"{name}\"\nkind = \"number\"\n");
    let with =
        fitted(&worked_plan("", &format!("{X1}{X2}{}{}{G}", number("double"), number("same"))), &table);
    let without = fitted(&worked_plan("", &format!("{X1}{X2}{G}")), &table);
    assert_eq!(with.aliased, ["double = 1 - 2 x1", "same = 7.3"]);
    assert!(with.warnings.iter().any(|w| w.contains("`same` is always 7.3")), "{:?}", with.warnings);
    let figures = with.model.fit.as_ref().unwrap();
    assert_eq!((figures.parameters, &figures.aliased), (10, &with.aliased));
    for (category, b) in &with.model.coefficients {
        assert_eq!((b[3], b[4]), (0.0, 0.0));
        let kept = [b[0], b[1], b[2], b[5], b[6]];
        for (found, wanted) in kept.iter().zip(&without.model.coefficients[category]) {
            assert_close(category, *found, *wanted, 0.0, 1e-9);
        }
    }
    let covariance = with.model.covariance.unwrap();
    assert!((0..14).all(|column| covariance.at(3, column) == 0.0 && covariance.at(11, column) == 0.0));
}

/// A level of one field that is another field's level: the interaction that stays must not give
/// the term that is left out a coefficient.
#[test]
fn left_out_terms_get_no_coefficient_from_interactions() {
    let mut table = Table::read("worked/tiny.csv");
    table.header.push("copy".into());
    for row in &mut table.rows {
        let g = row[5].clone();
        row.push(if g == "m" { "yes".into() } else { "no".into() });
    }
    let copy = "[[field]]\nname = \"copy\"\nkind = \"levels\"\nreference = \"no\"\n";
    let fields = format!("{X1}{G}{copy}[[interaction]]\nfields = [\"x1\", \"copy\"]");
    let fit = fitted(&worked_plan("", &fields), &table);
    assert_eq!(fit.aliased, ["copy=yes = g=m"]);
    let at = fit.model.terms.iter().position(|term| term == "copy=yes").unwrap();
    assert!(fit.model.coefficients.values().all(|b| b[at] == 0.0));
    // The same model written with the other name of the level.
    let same = fitted(
        &worked_plan("", &format!("{X1}{copy}{G}[[interaction]]\nfields = [\"x1\", \"copy\"]")),
        &table,
    );
    let [here, there] = [&fit, &same].map(|fit| fit.model.fit.as_ref().unwrap().log_likelihood);
    assert_close("likelihood", here, there, 0.0, 1e-13);
}

#[test]
fn the_latest_rows_are_held_out() {
    let fit = fitted(&attempts(RAIN, "time = \"day\"\nholdout = { latest = 0.25 }"), &stops());
    // Ten days of four stops each: the last two days are at most a quarter.
    assert_eq!((fit.rows_read, fit.held_out_rows, fit.model.fit.as_ref().unwrap().rows), (40, 8, 32));
    assert_eq!(fit.model.fit.unwrap().period.unwrap(), ["2026-03-01T00:00:00Z", "2026-03-08T00:00:00Z"]);
    let day = |day: i64| (20_513 + day) * 86_400_000_000;
    assert_eq!(fit.split, Split::Latest { last_fitted: day(7) });
    assert!(fit.split.holds_out(0, None, Some(day(8))) && !fit.split.holds_out(0, None, Some(day(7))));
}

#[test]
fn a_share_is_held_out_by_id() {
    let plan = attempts(RAIN, "holdout = { share = 0.3, seed = 5 }");
    let fit = fitted(&plan, &stops());
    let chosen = (0..40).filter(|i| fit.split.holds_out(*i, Some(&format!("S-{i}")), None)).count() as u64;
    assert!(chosen > 0);
    assert_eq!((fit.held_out_rows, fit.model.fit.unwrap().rows), (chosen, 40 - chosen));
}

#[test]
fn no_rows_left_says_why() {
    let mut table = stops();
    for row in 0..40 {
        set(&mut table, row, "rain", "");
    }
    let error = try_fit(&attempts(RAIN, ""), &table).unwrap_err();
    assert_eq!(
        error.to_string(),
        "no row is left to fit: 40 rows were refused, 0 were kept out as holdout; the first because `rain` is missing"
    );
}

#[test]
fn too_few_cases_are_a_warning() {
    let mut table = stops();
    let (stop, result) = (table.column("stop"), table.column("result"));
    // Three of the carded stops stay.
    table.rows.retain(|row| row[result] != "carded" || ["S-1", "S-6", "S-8"].contains(&row[stop].as_str()));
    let fit = fitted(&attempts(&format!("{RAIN}{DEPOT}"), ""), &table);
    assert!(
        fit.warnings.iter().any(|w| w.contains("category `carded` has 3 cases for 4 terms")),
        "{:?}",
        fit.warnings
    );
}

#[test]
fn a_missing_number_can_have_a_stand_in() {
    let mut table = stops();
    set(&mut table, 3, "rain", "");
    let fit = fitted(&attempts(&format!("{RAIN}missing = {{ value = 2 }}"), ""), &table);
    let Field::Number(rain) = &fit.model.fields[0] else { panic!("number") };
    assert_eq!((&rain.missing, rain.observed), (&MissingNumber::Value(2.0), Some([0.0, 10.0])));
    set(&mut table, 3, "rain", "2");
    let filled = fitted(&attempts(RAIN, ""), &table);
    assert_eq!(fit.model.coefficients, filled.model.coefficients);
}

#[test]
fn rows_that_change_between_passes_are_noticed() {
    struct Shrinking(kilter_fit::Batches, usize);
    impl kilter_fit::RowSource for Shrinking {
        type Error = std::convert::Infallible;
        fn pass(
            &mut self,
            visit: &mut dyn FnMut(kilter_model::Batch) -> std::ops::ControlFlow<()>,
        ) -> Result<(), Self::Error> {
            self.1 += 1;
            self.0.pass(visit)?;
            if self.1 == 2 {
                self.0.0.pop();
            }
            Ok(())
        }
    }
    let plan = attempts(RAIN, "");
    let mut source = Shrinking(stops().batches(&plan, 10), 0);
    let settings = FitSettings { threads: 1, keep_bytes: 0 };
    let error = fit(&plan, &mut source, settings, &mut |_| {}).unwrap_err();
    assert!(matches!(error, FitError::Changed { before: 40, now: 30 }), "{error}");
}

#[test]
fn x2_alone_is_a_year_and_fits_without_centring_by_hand() {
    let fit = fitted(&worked_plan("", X2), &Table::read("worked/tiny.csv"));
    assert!(fit.model.fit.unwrap().iterations <= 6);
}
