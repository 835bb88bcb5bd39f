//! Tests of plans.

use kilter_model::{CellKind, MissingFlag, StandardErrors};

use super::*;

/// A plan with every key.
const WHOLE: &str = r#"name = "attempt"
purpose = "Chance of each result of a first delivery attempt"
cautions = ["Not for decisions about people."]

[data]
files = ["attempts-*.csv"]
id = "stop_id"
time = "planned_at"
count = "n"
cluster = "route"
holdout = { latest = 0.2 }

[outcome]
field = "result"
reference = "handed-over"
categories = ["handed-over", "safe-place", "neighbour", "carded"]

[[field]]
name = "weight_kg"
kind = "number"
unit = "kg"
form = "log"
range = [0, 70]
missing = { value = 1 }

[[field]]
name = "rain_mm"
kind = "number"
form = { spline = 4 }
missing = "mean-and-flag"

[[field]]
name = "dwelling"
kind = "levels"
levels = ["house", "flat", "farm", "business"]
reference = "house"
rare = { below = 50, into = "other" }
unseen = "reference"
missing = "level"

[[field]]
name = "fragile"
kind = "flag"
missing = { value = false }

[[interaction]]
fields = ["rain_mm", "dwelling"]

[fit]
ridge = 0.0
standard_errors = "cluster"

[monitor]
segments = ["dwelling"]
maturity = "5d"
"#;

#[test]
fn every_key_is_understood() {
    let plan = Plan::from_toml(WHOLE).unwrap();
    assert_eq!(plan.data.holdout, Some(HoldoutPlan::Latest(0.2)));
    assert_eq!(plan.monitor.maturity_days, Some(5.0));
    assert_eq!(
        plan.fit,
        FitPlan {
            ridge: RidgePlan::Penalty(0.0),
            bias_reduction: BiasReductionPlan::Never,
            standard_errors: StandardErrors::Cluster
        }
    );
    assert_eq!(plan.interactions, [["rain_mm".to_owned(), "dwelling".to_owned()]]);
    let [
        FieldPlan::Number(weight),
        FieldPlan::Number(rain),
        FieldPlan::Levels(dwelling),
        FieldPlan::Flag(fragile),
    ] = plan.fields.as_slice()
    else {
        panic!("{:?}", plan.fields)
    };
    assert_eq!((weight.form, weight.range), (FormPlan::Log, Some([0.0, 70.0])));
    assert_eq!(weight.missing, MissingNumberPlan::Value(1.0));
    assert_eq!((rain.form, rain.missing), (FormPlan::Spline(4), MissingNumberPlan::MeanAndFlag));
    assert_eq!(dwelling.rare, Some(RarePlan { below: 50, into: "other".into() }));
    assert_eq!((dwelling.unseen.as_str(), dwelling.missing), ("reference", MissingLevelPlan::Level));
    assert_eq!(fragile.missing, MissingFlag::Value(false));
}

#[test]
fn columns_stand_in_their_order() {
    let plan = Plan::from_toml(WHOLE).unwrap();
    let specs = plan.column_specs();
    let found: Vec<_> = specs.iter().map(|spec| (spec.name.as_str(), spec.kind, spec.required)).collect();
    assert_eq!(
        found,
        [
            ("weight_kg", CellKind::Number, false),
            ("rain_mm", CellKind::Number, false),
            ("dwelling", CellKind::Text, false),
            ("fragile", CellKind::Flag, false),
            ("result", CellKind::Text, true),
            ("n", CellKind::Number, true),
            ("route", CellKind::Text, true),
            ("stop_id", CellKind::Text, true),
            ("planned_at", CellKind::Time, true),
        ]
    );
    let places = plan.column_places();
    let at = |place: Option<usize>| place.map(|place| specs[place].name.as_str());
    assert_eq!(specs[places.outcome].name, "result");
    assert_eq!(
        [at(places.count), at(places.weight), at(places.cluster), at(places.id), at(places.time)],
        [Some("n"), None, Some("route"), Some("stop_id"), Some("planned_at")]
    );
}

#[test]
fn weights_ask_for_robust_errors() {
    let weighted = WHOLE.replace("count = \"n\"", "weight = \"w\"");
    let left_out = weighted.replace("standard_errors = \"cluster\"\n", "");
    assert_eq!(Plan::from_toml(&left_out).unwrap().fit.standard_errors, StandardErrors::Robust);
    let error = Plan::from_toml(&weighted.replace("\"cluster\"", "\"model\"")).unwrap_err();
    assert_eq!(error.key, "fit.standard_errors");
}

/// Each change of the whole plan, with the key, the line, part of the reason and the hint.
const MISTAKES: [(&str, &str, &str, usize, &str, &str); 24] = [
    ("purpose =", "purpse =", "purpse", 2, "unknown field `purpse`, expected one of `name`", "`purpose`"),
    ("name = \"attempt\"", "name = \"at/tempt\"", "name", 1, "cannot name a model", ""),
    ("[\"attempts-*.csv\"]", "[]", "data.files", 6, "names no file", ""),
    ("latest = 0.2", "latest = 1.2", "data.holdout.latest", 11, "1.2, need above 0", ""),
    ("latest = 0.2", "lates = 0.2", "data.holdout.lates", 11, "unknown field `lates`", "`latest`"),
    ("latest = 0.2", "latest = 0.2, share = 0.1", "data.holdout", 11, "either `latest`", ""),
    ("time = \"planned_at\"\n", "", "data.holdout", 10, "add `data.time`", ""),
    (
        "reference = \"handed-over\"",
        "reference = \"handed over\"",
        "outcome.reference",
        15,
        "not among",
        "`handed-over`",
    ),
    ("\"neighbour\", \"carded\"]", "\"carded\", \"carded\"]", "outcome.categories", 16, "stands twice", ""),
    (
        "kind = \"number\"\nunit",
        "kind = \"numbr\"\nunit",
        "field.weight_kg.kind",
        20,
        "unknown variant `numbr`",
        "`number`",
    ),
    (
        "form = \"log\"",
        "form = \"logarithm\"",
        "field.weight_kg.form",
        22,
        "unknown variant `logarithm`, expected one of `as-is`",
        "",
    ),
    ("range = [0, 70]", "range = [70, 0]", "field.weight_kg.range", 23, "the first is above the second", ""),
    (
        "range = [0, 70]",
        "range = [0, \"70\"]",
        "field.weight_kg.range[2]",
        23,
        "invalid type: string \"70\", expected a number",
        "",
    ),
    ("{ value = 1 }", "{ value = 0 }", "field.weight_kg.missing", 24, "0 has no logarithm", ""),
    ("{ spline = 4 }", "{ spline = 9 }", "field.rain_mm.form", 29, "9 knots, need 3 to 7", ""),
    (
        "missing = \"level\"",
        "missing = \"mean-and-flag\"",
        "field.dwelling.missing",
        39,
        "`reference` or `level`",
        "",
    ),
    (
        "unseen = \"reference\"",
        "unseen = \"fram\"",
        "field.dwelling.unseen",
        38,
        "`fram` is neither",
        "`farm`",
    ),
    ("{ value = false }", "{ value = 0 }", "field.fragile.missing", 44, "`{ value = false }`", ""),
    ("name = \"fragile\"", "name = \"rain_mm\"", "field.rain_mm.name", 42, "stands twice", ""),
    ("name = \"fragile\"", "name = \"result\"", "field.result.name", 42, "is the outcome", ""),
    (
        "fields = [\"rain_mm\", \"dwelling\"]",
        "fields = [\"rain\", \"dwelling\"]",
        "interaction[1].fields",
        47,
        "`rain` is no field",
        "",
    ),
    (
        "ridge = 0.0",
        "ridge = \"crossvalidate\"",
        "fit.ridge",
        50,
        "unknown variant `crossvalidate`",
        "`cross-validate`",
    ),
    ("segments = [\"dwelling\"]", "segments = [\"rain_mm\"]", "monitor.segments[1]", 54, "is a number", ""),
    ("maturity = \"5d\"", "maturity = \"5 days\"", "monitor.maturity", 55, "`5 days` is not a duration", ""),
];

#[test]
fn mistakes_are_named_with_key_line_and_hint() {
    for (from, to, key, line, reason, hint) in MISTAKES {
        assert!(WHOLE.contains(from), "{from}");
        let error = Plan::from_toml(&WHOLE.replacen(from, to, 1)).unwrap_err();
        assert_eq!((error.key.as_str(), error.line), (key, Some(line)), "{to}: {error}");
        assert!(error.reason.contains(reason), "{to}: {error}");
        let found = error.hint.as_deref().unwrap_or_default();
        assert!(found.contains(hint) && hint.is_empty() == found.is_empty(), "{to}: hint {found:?}");
    }
}

#[test]
fn broken_toml_and_missing_tables_are_named() {
    let error = Plan::from_toml("name = \"a\"\n[data\nfiles = []").unwrap_err();
    assert_eq!((error.key.as_str(), error.line), ("", Some(2)));
    let error = Plan::from_toml("name = \"a\"\n[data]\nfiles = [\"a.csv\"]\n").unwrap_err();
    assert_eq!(error.reason, "missing field `outcome`");
    let error = Plan::from_toml(&WHOLE.replace("name = \"fragile\"\n", "")).unwrap_err();
    assert_eq!((error.reason.as_str(), error.line), ("missing field `name`", Some(41)));
}

#[test]
fn keys_of_another_kind_are_refused() {
    let error =
        Plan::from_toml(&WHOLE.replace("kind = \"flag\"", "kind = \"flag\"\nunit = \"kg\"")).unwrap_err();
    assert_eq!(error.to_string(), "`field.fragile.unit` (line 44): belongs to fields of kind `number` only");
}

#[test]
fn the_schema_is_one_of_2020_12_and_refuses_unknown_keys() {
    let schema = plan_schema();
    assert_eq!(schema["$schema"], "https://json-schema.org/draft/2020-12/schema");
    assert_eq!(schema["additionalProperties"], false);
    for key in ["name", "data", "outcome"] {
        assert!(schema["required"].as_array().unwrap().iter().any(|required| required == key), "{key}");
    }
}
