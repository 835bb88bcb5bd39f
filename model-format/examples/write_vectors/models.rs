//! The models and records of the test vectors: invented stops of Quillhaven Parcels.

use std::collections::BTreeMap;

use kilter_model::{
    DenseColumn, Design, FORMAT, FORMAT_VERSION, Field, FlagField, Form, LevelsField, Lineage, Means,
    MissingFlag, MissingNumber, ModelFile, Monitor, NumberField, Outcome, RecordNames, Spline, Term, sign,
};
use serde_json::json;

use crate::vectors::Vector;

const FOUR: [&str; 4] = ["handed-over", "safe-place", "neighbour", "carded"];
const THREE: [&str; 3] = ["handed-over", "neighbour", "carded"];

/// All vectors.
pub(crate) fn all() -> Vec<Vector> {
    vec![
        worked(),
        forms(),
        interactions(),
        policies(),
        flags_and_levels(),
        two_categories(),
        eight_categories(),
        extremes(),
        names(),
        later_version(),
    ]
}

/// The example that FORMAT.md works through, with coefficients that a person can type.
fn worked() -> Vector {
    let means = MissingNumber::MeanAndFlag(Means { means: vec![3.5, 0.9, 0.4] });
    let fields = vec![
        number("weight_kg", Form::Log),
        missing_number(number("rain_mm", spline(&[0.0, 2.0, 6.0, 20.0])), means),
        levels("dwelling", &["house", "flat", "farm"], "house"),
    ];
    let mut model = model("worked", fields, &[["weight_kg", "dwelling"]], &THREE, "handed-over");
    let neighbour = vec![-1.1, 0.2, 0.05, -0.03, 0.08, 0.1, 0.4, -0.9, -0.15, 0.05];
    let carded = vec![-1.9, 0.06, 0.02, 0.04, -0.1, 0.3, 0.47, -0.15, 0.1, -0.2];
    model.coefficients =
        [("neighbour", neighbour), ("carded", carded)].map(|(c, row)| (c.into(), row)).into();
    model.seal().expect("finite numbers");
    Vector {
        name: "worked",
        about: "The record that FORMAT.md works through, the same without its rain, and far beyond the last knot.",
        model,
        records: vec![
            r#"{"weight_kg": 2.5, "rain_mm": 8, "dwelling": "flat"}"#,
            r#"{"weight_kg": 2.5, "dwelling": "flat"}"#,
            r#"{"weight_kg": 2.5, "rain_mm": 60, "dwelling": "farm"}"#,
        ],
    }
}

fn forms() -> Vector {
    let fields = vec![
        number("depot_km", Form::AsIs),
        number("weight_kg", Form::Log),
        number("rain_mm", Form::Log1p),
        number("hour", Form::Polynomial(3)),
        number("item_value", spline(&[5.0, 12.5, 20.0, 60.0, 180.0])),
    ];
    Vector {
        name: "forms",
        about: "Every form of a number, inside, at and far beyond the knots; ranges; cells of the wrong type.",
        model: model("forms", fields, &[], &FOUR, "handed-over"),
        records: vec![
            r#"{"depot_km": 3.5, "weight_kg": 1.25, "rain_mm": 0.4, "hour": 9.5, "item_value": 30}"#,
            r#"{"depot_km": 0, "weight_kg": 1, "rain_mm": 0, "hour": 0, "item_value": 0}"#,
            r#"{"depot_km": -2.5, "weight_kg": 0.001, "rain_mm": -0.999, "hour": -3, "item_value": 5}"#,
            r#"{"depot_km": 12, "weight_kg": 70, "rain_mm": 1e-12, "hour": 21.25, "item_value": 12.5}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": 20}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": 119.75}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": 180}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": 180.00000000000003}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": 900}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": 1e7}"#,
            r#"{"depot_km": 12, "weight_kg": 7, "rain_mm": 3, "hour": 2, "item_value": -1e7}"#,
            r#"{"depot_km": -0.0, "weight_kg": 5e-324, "rain_mm": 1e300, "hour": 1e-200, "item_value": 0.1}"#,
            r#"{"depot_km": 1, "weight_kg": 0, "rain_mm": 3, "hour": 2, "item_value": 1}"#,
            r#"{"depot_km": 1, "weight_kg": 1, "rain_mm": -1, "hour": 2, "item_value": 1}"#,
            r#"{"depot_km": 100.5, "weight_kg": 1, "rain_mm": 0, "hour": 2, "item_value": 1}"#,
            r#"{"depot_km": "3", "weight_kg": 1, "rain_mm": 0, "hour": 2, "item_value": 1}"#,
            r#"{"depot_km": 3, "weight_kg": true, "rain_mm": [0], "hour": 2, "item_value": 1}"#,
            r#"{"item_value": {}, "depot_km": "x", "weight_kg": 1, "rain_mm": 0, "hour": 2}"#,
            r#"{"depot_km": 3, "weight_kg": 1, "rain_mm": 0, "hour": null, "item_value": 1}"#,
            r#"{"depot_km": 3, "weight_kg": 1, "hour": 4}"#,
            r#"{"depot_km": 3, "weight_kg": 1, "rain_mm": 2, "hour": 4, "item_value": 1, "stop_id": {"a": [1]}}"#,
        ],
    }
}

fn interactions() -> Vector {
    let rain = number("rain_mm", Form::Polynomial(2));
    let fields = vec![
        number("weight_kg", Form::AsIs),
        missing_number(rain, MissingNumber::MeanAndFlag(Means { means: vec![1.75, 6.5] })),
        number("item_value", spline(&[5.0, 20.0, 60.0, 180.0])),
        missing_level(levels("dwelling", &["flat", "house", "farm"], "house"), "flat"),
        levels("depot", &["north", "south", "west", "island"], "north"),
        flag("fragile", MissingFlag::Value(true)),
        flag("evening", MissingFlag::Refuse),
    ];
    let pairs = [
        ["weight_kg", "rain_mm"],
        ["rain_mm", "dwelling"],
        ["dwelling", "weight_kg"],
        ["dwelling", "depot"],
        ["item_value", "depot"],
        ["fragile", "weight_kg"],
        ["depot", "fragile"],
        ["fragile", "evening"],
        ["rain_mm", "item_value"],
    ];
    Vector {
        name: "interactions",
        about: "Interactions of every two kinds of fields; columns for missing values take no part in them.",
        model: model("interactions", fields, &pairs, &THREE, "neighbour"),
        records: vec![
            r#"{"weight_kg": 1.5, "rain_mm": 2, "item_value": 33, "dwelling": "farm", "depot": "west", "fragile": true, "evening": false}"#,
            r#"{"weight_kg": 1.5, "rain_mm": 2, "item_value": 33, "dwelling": "house", "depot": "north", "fragile": false, "evening": false}"#,
            r#"{"weight_kg": 0.25, "rain_mm": 0, "item_value": 240, "dwelling": "flat", "depot": "island", "fragile": true, "evening": true}"#,
            r#"{"weight_kg": 4, "rain_mm": null, "item_value": 7, "dwelling": "farm", "depot": "south", "fragile": false, "evening": true}"#,
            r#"{"weight_kg": 4, "item_value": 1e4, "depot": "island", "evening": true}"#,
            r#"{"weight_kg": -1e3, "rain_mm": 1e3, "item_value": -50, "dwelling": "house", "depot": "south", "fragile": 1, "evening": 0}"#,
            r#"{"weight_kg": 4, "rain_mm": 1, "item_value": 7, "dwelling": "farm", "depot": "east", "fragile": false, "evening": true}"#,
            r#"{"weight_kg": 4, "rain_mm": 1, "item_value": 7, "dwelling": "farm", "depot": "south", "fragile": false}"#,
        ],
    }
}

fn policies() -> Vector {
    let means = |means: &[f64]| MissingNumber::MeanAndFlag(Means { means: means.to_vec() });
    let fields = vec![
        number("weight_kg", Form::Log),
        missing_number(number("rain_mm", Form::Log1p), MissingNumber::Value(0.0)),
        missing_number(number("depot_km", Form::AsIs), means(&[4.125])),
        missing_number(number("hour", Form::Polynomial(2)), means(&[12.5, 170.25])),
        missing_number(number("item_value", spline(&[10.0, 30.0, 90.0])), means(&[41.5, 6.0625])),
        levels("road", &["paved", "track"], "paved"),
        policy_level("depot", &["north", "south", "west"], "south", "reference", "reference"),
        policy_level("dwelling", &["flat", "house", "farm", "other"], "house", "other", "flat"),
        policy_level("parking", &["yes", "no", "(missing)"], "yes", "(missing)", "(missing)"),
        flag("fragile", MissingFlag::Refuse),
        flag("evening", MissingFlag::Value(true)),
        flag("lift", MissingFlag::Value(false)),
    ];
    let mut model = model("policies", fields, &[], &THREE, "carded");
    for field in &mut model.fields {
        if let Field::Levels(field) = field
            && field.name == "dwelling"
        {
            field.merged = [("mill", "farm"), ("boat", "other")].map(|(a, b)| (a.into(), b.into())).into();
        }
    }
    model.seal().expect("finite numbers");
    Vector {
        name: "policies",
        about: "What happens to missing values and unseen levels under every policy; merged levels.",
        model,
        records: vec![
            r#"{"weight_kg": 2, "rain_mm": 1, "depot_km": 3, "hour": 10, "item_value": 50, "road": "track", "depot": "north", "dwelling": "farm", "parking": "no", "fragile": true, "evening": false, "lift": true}"#,
            r#"{"weight_kg": 2, "road": "paved", "fragile": false}"#,
            r#"{"weight_kg": 2, "rain_mm": null, "depot_km": null, "hour": null, "item_value": null, "road": "paved", "depot": null, "dwelling": null, "parking": null, "fragile": false, "evening": null, "lift": null}"#,
            r#"{"weight_kg": 2, "road": "paved", "depot": "", "dwelling": "", "parking": "", "fragile": false}"#,
            r#"{"weight_kg": 2, "road": "track", "depot": "east", "dwelling": "tent", "parking": "maybe", "fragile": true}"#,
            r#"{"weight_kg": 2, "road": "track", "depot": "South", "dwelling": "mill", "parking": "yes", "fragile": true}"#,
            r#"{"weight_kg": 2, "road": "track", "dwelling": "boat", "fragile": true}"#,
            r#"{"weight_kg": 2, "depot_km": 1, "hour": 7.5, "road": "paved", "fragile": true}"#,
            r#"{"weight_kg": 2, "depot_km": 1, "item_value": 500, "road": "paved", "fragile": true}"#,
            r#"{"road": "paved", "fragile": true}"#,
            r#"{"weight_kg": 2, "road": "Paved", "fragile": true}"#,
            r#"{"weight_kg": 2, "road": "gravel", "fragile": true}"#,
            r#"{"weight_kg": 2, "road": null, "fragile": true}"#,
            r#"{"weight_kg": 2, "road": "paved", "fragile": null}"#,
            r#"{"weight_kg": 2, "road": "paved", "fragile": 2}"#,
            r#"{"weight_kg": 2, "road": "paved", "fragile": "true"}"#,
            r#"{"weight_kg": 2, "road": "paved", "fragile": true, "lift": 1.0}"#,
            r#"{"weight_kg": null, "road": null, "parking": 1.5, "fragile": true}"#,
            "{}",
        ],
    }
}

fn flags_and_levels() -> Vector {
    let fields = vec![
        levels("zone", &["1", "2", "10", "007"], "10"),
        levels("street", &["only"], "only"),
        flag("fragile", MissingFlag::Refuse),
    ];
    Vector {
        name: "flags-and-levels",
        about: "Levels that look like numbers, a field with one level (which has no term), flags as 0 and 1.",
        model: model(
            "flags-and-levels",
            fields,
            &[["zone", "street"], ["zone", "fragile"]],
            &THREE,
            "carded",
        ),
        records: vec![
            r#"{"zone": "1", "street": "only", "fragile": true}"#,
            r#"{"zone": 1, "street": "only", "fragile": 1}"#,
            r#"{"zone": 10, "street": "only", "fragile": 0}"#,
            r#"{"zone": "007", "street": "only", "fragile": false}"#,
            r#"{"zone": 7, "street": "only", "fragile": false}"#,
            r#"{"zone": 2.0, "street": "only", "fragile": false}"#,
            r#"{"zone": -1, "street": "only", "fragile": false}"#,
            r#"{"zone": 2, "street": "other", "fragile": false}"#,
            r#"{"zone": true, "street": "only", "fragile": -1}"#,
        ],
    }
}

fn two_categories() -> Vector {
    let fields = vec![number("hours_since_dispatch", Form::AsIs), flag("fragile", MissingFlag::Refuse)];
    Vector {
        name: "two-categories",
        about: "J = 2, the reference category last.",
        model: model("two-categories", fields, &[], &["carded", "handed-over"], "handed-over"),
        records: vec![
            r#"{"hours_since_dispatch": 0, "fragile": false}"#,
            r#"{"hours_since_dispatch": 6.5, "fragile": true}"#,
            r#"{"hours_since_dispatch": 400, "fragile": false}"#,
            r#"{"hours_since_dispatch": -400, "fragile": false}"#,
        ],
    }
}

fn eight_categories() -> Vector {
    let categories = [
        "handed-over",
        "safe-place",
        "neighbour",
        "parcel-box",
        "carded",
        "refused",
        "wrong-address",
        "no-access",
    ];
    let fields =
        vec![number("weight_kg", Form::Log1p), levels("dwelling", &["flat", "house", "farm"], "farm")];
    let pairs = [["weight_kg", "dwelling"]];
    Vector {
        name: "eight-categories",
        about: "J = 8, the reference category in the middle.",
        model: model("eight-categories", fields, &pairs, &categories, "carded"),
        records: vec![
            r#"{"weight_kg": 0, "dwelling": "farm"}"#,
            r#"{"weight_kg": 2.5, "dwelling": "flat"}"#,
            r#"{"weight_kg": 69.9, "dwelling": "house"}"#,
            r#"{"weight_kg": 1e15, "dwelling": "house"}"#,
        ],
    }
}

fn extremes() -> Vector {
    let fields = vec![number("a", Form::AsIs), number("b", Form::AsIs), levels("c", &["off", "on"], "off")];
    let mut model = model("extremes", fields, &[["a", "c"]], &["left", "middle", "right"], "middle");
    // Terms: intercept, a, b, c=on, a:c=on.
    model.coefficients.insert("left".into(), vec![0.0, 1.0, 0.5, 0.0, 1e300]);
    model.coefficients.insert("right".into(), vec![0.0, -1.0, 1.0, 0.0, -1e300]);
    model.seal().expect("finite numbers");
    Vector {
        name: "extremes",
        about: "Log-odds of hundreds and thousands, probabilities that underflow, log-odds that overflow.",
        model,
        records: vec![
            r#"{"a": 0, "b": 0, "c": "off"}"#,
            r#"{"a": 800, "b": 0, "c": "off"}"#,
            r#"{"a": -800, "b": 0, "c": "off"}"#,
            r#"{"a": 700, "b": 0, "c": "off"}"#,
            r#"{"a": 0, "b": 800, "c": "off"}"#,
            r#"{"a": 0, "b": -700, "c": "off"}"#,
            r#"{"a": 0, "b": -720, "c": "off"}"#,
            r#"{"a": 0, "b": -1400, "c": "off"}"#,
            r#"{"a": 1e4, "b": 1e4, "c": "off"}"#,
            r#"{"a": 5e3, "b": 1e4, "c": "off"}"#,
            r#"{"a": 1e300, "b": 0, "c": "off"}"#,
            r#"{"a": 1e300, "b": 0, "c": "on"}"#,
            r#"{"a": -1e300, "b": 1e300, "c": "on"}"#,
            r#"{"a": 1e-300, "b": 0.5, "c": "on"}"#,
            r#"{"a": 1.7976931348623157e308, "b": 1.7976931348623157e308, "c": "off"}"#,
            r#"{"a": 5e-324, "b": -5e-324, "c": "on"}"#,
        ],
    }
}

fn names() -> Vector {
    let fields = vec![
        number("weight \"net\" (kg)", Form::Log),
        levels("it's <b>&amp;</b>", &["O'Brien", "a\"b", "new\nline", "", "Straße 東京 🚲", "x:y=z"], "a\"b"),
        flag("SELECT * FROM t; --", MissingFlag::Value(false)),
    ];
    let pairs = [["weight \"net\" (kg)", "it's <b>&amp;</b>"]];
    Vector {
        name: "names",
        about: "Names with quotes, markup, a line break and letters of other scripts. An empty text is a missing \
                value, also where an empty level is listed.",
        model: model("names", fields, &pairs, &["it's", "a \"card\"", "naïve"], "a \"card\""),
        records: vec![
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": "O'Brien", "SELECT * FROM t; --": true}"#,
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": "a\"b"}"#,
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": "new\nline"}"#,
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": "Stra\u00dfe \u6771\u4eac \ud83d\udeb2"}"#,
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": "x:y=z"}"#,
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": ""}"#,
            r#"{"weight \"net\" (kg)": 2, "it's <b>&amp;</b>": "o'brien"}"#,
        ],
    }
}

/// The secret key of TEST 1 in RFC 8032, which everybody knows.
const WELL_KNOWN_SECRET: [u8; 32] = [
    0x9d, 0x61, 0xb1, 0x9d, 0xef, 0xfd, 0x5a, 0x60, 0xba, 0x84, 0x4a, 0xf4, 0x92, 0xec, 0x2c, 0xc4, 0x44,
    0x49, 0xc5, 0x69, 0x7b, 0x32, 0x69, 0x19, 0x70, 0x3b, 0xac, 0x03, 0x1c, 0xae, 0x7f, 0x60,
];

fn later_version() -> Vector {
    let mut model = model("later-version", vec![number("depot_km", Form::AsIs)], &[], &THREE, "handed-over");
    model.format_version = "1.9".into();
    // The digits that RFC 8785 asks for, and the order of keys by UTF-16 units, which for the last
    // two is not that of code points.
    model.extra.insert(
        "of_a_later_version".into(),
        json!({
            "numbers": [
                1e21, 1e20, 123_456_789_012_345_680_000.0, 1e16, 1e-6, 1e-7, 1.5e-7, 0.1, -0.0, 5e-324,
                1.797_693_134_862_315_7e308, 333_333_333.333_333_3, 9_007_199_254_740_993_i64,
                u64::MAX, i64::MIN, -1.25, 100, 1e23
            ],
            "texts": ["\u{8}\t\n\u{c}\r\"\\/\u{1f}\u{7f}", "\u{2028}é"],
            "words": [null, true, false, {}, []],
            "b": 1, "a": 2, "B": 3, "10": 4, "9": 5, "": 6,
            "\u{e000}": 7, "\u{1f6b2}": 8
        }),
    );
    sign(&mut model, &WELL_KNOWN_SECRET).expect("finite numbers");
    Vector {
        name: "later-version",
        about: "A file of a later minor version, signed with the key of TEST 1 in RFC 8032: unknown keys count \
                for the fingerprint and mean nothing to the scorer.",
        model,
        records: vec![r#"{"depot_km": 2}"#, r#"{"depot_km": 2.5}"#],
    }
}

fn number(name: &str, form: Form) -> Field {
    let range = if name == "depot_km" { Some([-10.0, 100.0]) } else { None };
    let unit = name.rsplit_once('_').map(|(_, unit)| unit.to_owned()).filter(|unit| unit.len() == 2);
    Field::Number(NumberField {
        name: name.into(),
        unit,
        form,
        range,
        missing: MissingNumber::Refuse,
        observed: None,
    })
}

fn missing_number(field: Field, missing: MissingNumber) -> Field {
    match field {
        Field::Number(number) => Field::Number(NumberField { missing, ..number }),
        other => other,
    }
}

fn levels(name: &str, levels: &[&str], reference: &str) -> Field {
    policy_level(name, levels, reference, "refuse", "refuse")
}

fn missing_level(field: Field, missing: &str) -> Field {
    match field {
        Field::Levels(levels) => Field::Levels(LevelsField { missing: missing.into(), ..levels }),
        other => other,
    }
}

fn policy_level(name: &str, levels: &[&str], reference: &str, unseen: &str, missing: &str) -> Field {
    Field::Levels(LevelsField {
        name: name.into(),
        levels: levels.iter().map(|level| (*level).to_owned()).collect(),
        reference: reference.into(),
        merged: BTreeMap::new(),
        unseen: unseen.into(),
        missing: missing.into(),
    })
}

fn flag(name: &str, missing: MissingFlag) -> Field {
    Field::Flag(FlagField { name: name.into(), missing })
}

fn spline(knots: &[f64]) -> Form {
    Form::Spline(Spline { knots: knots.to_vec() })
}

/// About how large a term is: its columns at 10 or at the last knot, so that no term drowns the others.
fn scale(design: &Design, term: &Term) -> f64 {
    let column = |column: &usize| match design.dense()[*column] {
        DenseColumn::Basis { field, basis } => match &design.fields()[field] {
            Field::Number(number) => {
                let typical = match &number.form {
                    Form::Spline(spline) => spline.knots[spline.knots.len() - 1],
                    _ => 10.0,
                };
                1.0 + number.form.column(basis, typical).abs()
            }
            Field::Levels(_) | Field::Flag(_) => 1.0,
        },
        DenseColumn::MissingFlag { .. } | DenseColumn::Flag { .. } => 1.0,
    };
    term.dense.iter().map(column).product()
}

/// A sealed model with coefficients that look like fitted ones.
fn model(
    name: &str,
    fields: Vec<Field>,
    interactions: &[[&str; 2]],
    categories: &[&str],
    reference: &str,
) -> ModelFile {
    let interactions: Vec<[String; 2]> = interactions.iter().map(|pair| pair.map(str::to_owned)).collect();
    let design = Design::new(&fields, &interactions).expect("a sound design");
    let scales: Vec<f64> = design.terms().iter().map(|term| scale(&design, term)).collect();
    let unit = |row: usize, term: usize| ((term * 379 + row * 587 + 211) % 1009) as f64 / 1009.0 - 0.5;
    let coefficients = categories
        .iter()
        .filter(|category| **category != reference)
        .enumerate()
        .map(|(row, category)| {
            let scaled = scales.iter().enumerate().map(|(term, scale)| unit(row, term) * 3.0 / scale);
            ((*category).to_owned(), scaled.collect())
        })
        .collect();
    let mut model = ModelFile {
        format: FORMAT.into(),
        format_version: FORMAT_VERSION.into(),
        name: name.into(),
        purpose: "A test of readers of the format.".into(),
        cautions: vec!["Invented: no model of anything.".into()],
        record: RecordNames { id: "stop_id".into(), time: "planned_at".into() },
        outcome: Outcome {
            field: "result".into(),
            categories: categories.iter().map(|category| (*category).to_owned()).collect(),
            reference: reference.into(),
        },
        terms: design.term_names(),
        fields,
        interactions,
        coefficients,
        covariance: None,
        fit: None,
        holdout: None,
        baseline: None,
        monitor: Monitor::default(),
        lineage: Lineage::default(),
        fingerprint: String::new(),
        extra: serde_json::Map::new(),
    };
    model.seal().expect("finite numbers");
    model
}
