//! The plan as it is written: the TOML document, key by key. What its values mean together is
//! checked when it becomes a [`Plan`](super::Plan).

use std::fmt;

use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use serde::de::{Deserializer, Error as _, Visitor};
use serde::{Deserialize, Serialize};

use kilter_model::StandardErrors;

use super::BiasReductionPlan;

/// A plan: what to fit, from which tables, and how.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
#[schemars(title = "kilter plan")]
pub(super) struct PlanDocument {
    /// Name of the model: up to 64 letters, digits, `-`, `_` and `.`.
    pub name: String,
    /// What the probabilities are for, in a sentence.
    #[serde(default)]
    pub purpose: String,
    /// What the probabilities must not be used for.
    #[serde(default)]
    pub cautions: Vec<String>,
    /// The tables and what their columns are.
    pub data: DataDocument,
    /// The outcome.
    pub outcome: OutcomeDocument,
    /// The inputs, in the order of their terms.
    #[serde(default)]
    pub field: Vec<FieldDocument>,
    /// Pairs of fields whose columns are multiplied.
    #[serde(default)]
    pub interaction: Vec<InteractionDocument>,
    /// How to fit.
    #[serde(default)]
    pub fit: FitDocument,
    /// What the monitor should know about the records.
    #[serde(default)]
    pub monitor: MonitorDocument,
}

/// The tables and what their columns are.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct DataDocument {
    /// Files, relative to the plan; may hold wildcards.
    pub files: Vec<String>,
    /// Column with the id of a record.
    pub id: Option<String>,
    /// Column with the time of a record: RFC 3339, or a date.
    pub time: Option<String>,
    /// Column that says how many equal records a row stands for.
    pub count: Option<String>,
    /// Column with the sampling weight of a row; only its relative size matters.
    pub weight: Option<String>,
    /// Column with the cluster of a row, for cluster-robust standard errors.
    pub cluster: Option<String>,
    /// Rows that are kept out of the fit to judge it.
    pub holdout: Option<HoldoutDocument>,
}

/// Rows kept out of the fit: either the latest share by time, or a random share by id.
#[derive(Debug, Clone, Copy, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct HoldoutDocument {
    /// The latest share of the rows by time, above 0 and below 1; needs `data.time`.
    pub latest: Option<f64>,
    /// A random share of the rows, above 0 and below 1, drawn by the id of a row, or by its
    /// number where the plan names no id.
    pub share: Option<f64>,
    /// Which of the random shares; only with `share`.
    pub seed: Option<u64>,
}

/// The outcome.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct OutcomeDocument {
    /// Column with the observed category.
    pub field: String,
    /// The category that the others are compared against; the first listed category, or else the
    /// most frequent one, if left out.
    pub reference: Option<String>,
    /// All categories in their order; all that the fit sees, sorted, if left out.
    pub categories: Option<Vec<String>>,
}

/// What a field is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub(super) enum FieldKind {
    /// A number.
    Number,
    /// One of several levels.
    Levels,
    /// True or false.
    Flag,
}

/// One input.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct FieldDocument {
    /// Name of the column.
    pub name: String,
    /// What the field is.
    pub kind: FieldKind,
    /// Unit of a number, for people.
    pub unit: Option<String>,
    /// How a number enters the terms.
    pub form: Option<FormDocument>,
    /// Smallest and largest number accepted; rows outside are refused.
    pub range: Option<[f64; 2]>,
    /// What happens to a row without the value.
    pub missing: Option<MissingDocument>,
    /// All levels in their order; all that the fit sees, sorted, if left out.
    pub levels: Option<Vec<String>>,
    /// The level without a term; the first listed level, or else the most frequent one, if left
    /// out.
    pub reference: Option<String>,
    /// Merges levels with few cases.
    pub rare: Option<RareDocument>,
    /// What happens to a level that the fit did not see: `refuse`, `reference`, or the name of a
    /// level.
    pub unseen: Option<String>,
}

/// How a number enters the terms.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub(super) enum FormDocument {
    /// The number itself.
    AsIs,
    /// Its natural logarithm.
    Log,
    /// The natural logarithm of one plus the number.
    Log1p,
    /// Powers 1 to this degree, 2 to 10.
    Polynomial(u32),
    /// A restricted cubic spline with this number of knots, 3 to 7.
    Spline(u32),
}

/// What happens to a row without the value. `refuse` for any field; `{ value = … }` for numbers
/// and flags; `mean-and-flag` for numbers; `reference` and `level` for levels.
#[derive(Debug, Clone, Copy, PartialEq, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub(super) enum MissingDocument {
    /// The row is refused.
    Refuse,
    /// Each column of the number takes its mean, and a flag term is set.
    MeanAndFlag,
    /// The reference level is used.
    Reference,
    /// Missing is a level of its own, named `(missing)`.
    Level,
    /// This value is used.
    Value(Scalar),
}

/// A number, or true or false.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Scalar {
    Number(f64),
    Flag(bool),
}

impl<'de> Deserialize<'de> for Scalar {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct ScalarVisitor;
        impl Visitor<'_> for ScalarVisitor {
            type Value = Scalar;

            fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
                f.write_str("a number, or true or false")
            }

            fn visit_bool<E>(self, value: bool) -> Result<Scalar, E> {
                Ok(Scalar::Flag(value))
            }

            fn visit_i64<E>(self, value: i64) -> Result<Scalar, E> {
                Ok(Scalar::Number(value as f64))
            }

            fn visit_f64<E>(self, value: f64) -> Result<Scalar, E> {
                Ok(Scalar::Number(value))
            }
        }
        deserializer.deserialize_any(ScalarVisitor)
    }
}

impl JsonSchema for Scalar {
    fn schema_name() -> std::borrow::Cow<'static, str> {
        "Scalar".into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        json_schema!({ "type": ["number", "boolean"] })
    }
}

/// Merges rare levels.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct RareDocument {
    /// Levels with fewer cases than this are merged.
    pub below: u64,
    /// The level that they are merged into; it need not occur by itself.
    pub into: String,
}

/// Two fields whose columns are multiplied.
#[derive(Debug, Clone, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct InteractionDocument {
    /// Names of the two fields.
    pub fields: [String; 2],
}

/// How to fit.
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct FitDocument {
    /// Ridge penalty, or `cross-validate`; 0, maximum likelihood, if left out.
    pub ridge: Option<RidgeDocument>,
    /// Whether to reduce the bias of the estimate (Firth 1993), which also makes one where the
    /// data separate the categories: `never`, `if-separated` or `always`; `never` if left out.
    pub bias_reduction: Option<BiasReductionPlan>,
    /// `model`, `robust` or `cluster`; `robust` if left out and the plan has sampling weights,
    /// else `model`.
    pub standard_errors: Option<StandardErrors>,
}

/// A penalty, or how it is chosen.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum RidgeDocument {
    Penalty(f64),
    CrossValidate,
}

const CROSS_VALIDATE: &str = "cross-validate";

impl<'de> Deserialize<'de> for RidgeDocument {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct RidgeVisitor;
        impl Visitor<'_> for RidgeVisitor {
            type Value = RidgeDocument;

            fn expecting(&self, f: &mut fmt::Formatter) -> fmt::Result {
                write!(f, "a number from 0 on, or `{CROSS_VALIDATE}`")
            }

            fn visit_str<E: serde::de::Error>(self, text: &str) -> Result<RidgeDocument, E> {
                if text == CROSS_VALIDATE {
                    Ok(RidgeDocument::CrossValidate)
                } else {
                    Err(E::unknown_variant(text, &[CROSS_VALIDATE]))
                }
            }

            fn visit_i64<E>(self, value: i64) -> Result<RidgeDocument, E> {
                Ok(RidgeDocument::Penalty(value as f64))
            }

            fn visit_f64<E>(self, value: f64) -> Result<RidgeDocument, E> {
                Ok(RidgeDocument::Penalty(value))
            }
        }
        deserializer.deserialize_any(RidgeVisitor)
    }
}

impl JsonSchema for RidgeDocument {
    fn schema_name() -> std::borrow::Cow<'static, str> {
        "Ridge".into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        json_schema!({ "oneOf": [{ "type": "number", "minimum": 0 }, { "const": CROSS_VALIDATE }] })
    }
}

/// What the monitor should know about the records.
#[derive(Debug, Clone, Default, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub(super) struct MonitorDocument {
    /// Fields of levels or flags whose values are watched one by one.
    #[serde(default)]
    pub segments: Vec<String>,
    /// Age at which the outcome of a record can be expected to be known, such as `5d`: a number
    /// of hours (`h`), days (`d`) or weeks (`w`).
    #[serde(default)]
    pub maturity: Option<Maturity>,
}

/// A duration in days, written as a number of hours, days or weeks.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub(super) struct Maturity {
    pub days: f64,
}

impl<'de> Deserialize<'de> for Maturity {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let text = String::deserialize(deserializer)?;
        parse_days(&text).map(|days| Self { days }).ok_or_else(|| {
            D::Error::custom(format!(
                "`{text}` is not a duration: expected a number and `h`, `d` or `w`, such as `5d`"
            ))
        })
    }
}

impl JsonSchema for Maturity {
    fn schema_name() -> std::borrow::Cow<'static, str> {
        "Maturity".into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        json_schema!({ "type": "string", "pattern": r"^[0-9]+(\.[0-9]+)?[hdw]$" })
    }
}

/// Days of a duration such as `36h`, `5d` or `2w`; `None` where the text is none.
fn parse_days(text: &str) -> Option<f64> {
    let (number, days_per_unit) = [("h", 1.0 / 24.0), ("d", 1.0), ("w", 7.0)]
        .into_iter()
        .find_map(|(unit, days)| text.strip_suffix(unit).map(|number| (number, days)))?;
    let plain = !number.is_empty() && number.chars().all(|c| c.is_ascii_digit() || c == '.');
    let amount: f64 = if plain { number.parse().ok()? } else { return None };
    amount.is_finite().then_some(amount * days_per_unit)
}

#[cfg(test)]
mod tests {
    use super::parse_days;

    #[test]
    fn durations() {
        for (text, want) in [("36h", Some(1.5)), ("5d", Some(5.0)), ("2w", Some(14.0)), ("0.5d", Some(0.5))] {
            assert_eq!(parse_days(text), want, "{text}");
        }
        for text in ["", "d", "5", "5m", "-1d", "1e3d", "5 d", "1.2.3d"] {
            assert_eq!(parse_days(text), None, "{text}");
        }
    }
}
