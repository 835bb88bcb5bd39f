//! The model file as Rust types: one JSON document that describes a fitted model completely.
//!
//! Field by field this is what `FORMAT.md` describes. Reading and writing goes through
//! [`ModelFile::from_json`] and [`ModelFile::to_json`]; numbers read back bit for bit.

use std::collections::BTreeMap;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use serde_json::{Map, Value};

/// What stands under `format` in every model file.
pub const FORMAT: &str = "kilter-model";
/// The version of the format that this crate writes. It reads every `1.x`.
pub const FORMAT_VERSION: &str = "1.0";
/// Name of the first term, the constant.
pub const INTERCEPT: &str = "(intercept)";
/// Name of the level that stands for a missing value where the field keeps one.
pub const MISSING_LEVEL: &str = "(missing)";

/// A fitted category model, complete enough to score with a calculator.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct ModelFile {
    /// Always `kilter-model`.
    pub format: String,
    /// `major.minor`; minor versions add keys, major versions break.
    pub format_version: String,
    /// Name of the model, the one that routes and folders use.
    pub name: String,
    /// What the probabilities are for, in a sentence.
    #[serde(default)]
    pub purpose: String,
    /// What the probabilities must not be used for.
    #[serde(default)]
    pub cautions: Vec<String>,
    /// Names under which a record carries its id and its time.
    #[serde(default)]
    pub record: RecordNames,
    /// The outcome: its field, its categories and the reference category.
    pub outcome: Outcome,
    /// The inputs, in the order of their terms.
    pub fields: Vec<Field>,
    /// Pairs of fields whose columns are multiplied, in order.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub interactions: Vec<[String; 2]>,
    /// Names of the design columns, in the order of the coefficients.
    pub terms: Vec<String>,
    /// For each category but the reference: one coefficient per term, the log-odds of the
    /// category against the reference category. Terms are on the scale of the fields.
    pub coefficients: BTreeMap<String, Vec<f64>>,
    /// Joint covariance of all coefficients; absent where it is not known.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub covariance: Option<Covariance>,
    /// How the model was fitted.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub fit: Option<FitFigures>,
    /// How the model did on rows kept out of the fit.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub holdout: Option<Holdout>,
    /// What drift is measured against.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub baseline: Option<Baseline>,
    /// What the monitor should know about the owner's records.
    #[serde(default)]
    pub monitor: Monitor,
    /// Where this version comes from.
    #[serde(default)]
    pub lineage: Lineage,
    /// `sha256:` and 64 hexadecimal digits over the canonical JSON (RFC 8785) of this document
    /// without `fingerprint` and `signature`.
    pub fingerprint: String,
    /// Keys of a later minor version, kept as they came.
    #[serde(flatten)]
    pub extra: Map<String, Value>,
}

/// Names under which a record carries its id and its time.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct RecordNames {
    /// Name of the id.
    pub id: String,
    /// Name of the time (RFC 3339, or a date, which means its midnight in UTC).
    pub time: String,
}

impl Default for RecordNames {
    fn default() -> Self {
        Self { id: "id".into(), time: "time".into() }
    }
}

/// The outcome of a model.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct Outcome {
    /// Name of the field that holds the observed category in tables.
    pub field: String,
    /// All J categories, in the order in which probabilities are given.
    pub categories: Vec<String>,
    /// The category that the others are compared against.
    pub reference: String,
}

/// One input of a model.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(tag = "kind", rename_all = "kebab-case")]
pub enum Field {
    /// A number.
    Number(NumberField),
    /// One of several levels.
    Levels(LevelsField),
    /// True or false.
    Flag(FlagField),
}

impl Field {
    /// Name of the field in records and tables.
    pub fn name(&self) -> &str {
        match self {
            Self::Number(field) => &field.name,
            Self::Levels(field) => &field.name,
            Self::Flag(field) => &field.name,
        }
    }
}

/// A number field.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct NumberField {
    /// Name of the field in records and tables.
    pub name: String,
    /// Unit of the numbers, for people.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub unit: Option<String>,
    /// How the number enters the terms.
    #[serde(default)]
    pub form: Form,
    /// Smallest and largest value that is accepted; outside, a record is refused.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub range: Option<[f64; 2]>,
    /// What happens to a record without the value.
    #[serde(default)]
    pub missing: MissingNumber,
    /// Smallest and largest value in the fit; outside, a record is scored and noted.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub observed: Option<[f64; 2]>,
}

/// How a number enters the terms.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum Form {
    /// The number itself: one term.
    #[default]
    AsIs,
    /// Its natural logarithm: one term; numbers not above 0 are refused.
    Log,
    /// The natural logarithm of one plus the number: one term; numbers not above -1 are refused.
    Log1p,
    /// Powers 1 to the given degree: as many terms.
    Polynomial(u32),
    /// A restricted (natural) cubic spline: the number and one more term for each knot but two.
    Spline(Spline),
}

/// Knots of a restricted cubic spline.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Spline {
    /// At least three knots, ascending, in the unit of the field.
    pub knots: Vec<f64>,
}

/// What happens to a record in which a number is missing.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum MissingNumber {
    /// The record is refused.
    #[default]
    Refuse,
    /// The record is scored as if the number were this one, and noted.
    Value(f64),
    /// Each column of the field takes its mean, and a flag term is set.
    MeanAndFlag(Means),
}

/// Means of the columns of a field over the rows of the fit that had it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Means {
    /// One mean per column of the field's form.
    pub means: Vec<f64>,
}

/// A field of levels.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct LevelsField {
    /// Name of the field in records and tables.
    pub name: String,
    /// All levels, in the order of their terms.
    pub levels: Vec<String>,
    /// The level without a term.
    pub reference: String,
    /// Rare levels of the fit and the level that each was merged into.
    #[serde(default, skip_serializing_if = "BTreeMap::is_empty")]
    pub merged: BTreeMap<String, String>,
    /// What happens to a level that is not listed: `refuse`, `reference`, or the name of a level.
    #[serde(default = "refuse")]
    pub unseen: String,
    /// What happens to a missing value: `refuse`, `reference`, or the name of a level.
    #[serde(default = "refuse")]
    pub missing: String,
}

fn refuse() -> String {
    "refuse".into()
}

/// A flag field.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct FlagField {
    /// Name of the field in records and tables.
    pub name: String,
    /// What happens to a record without the value.
    #[serde(default)]
    pub missing: MissingFlag,
}

/// What happens to a record in which a flag is missing.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum MissingFlag {
    /// The record is refused.
    #[default]
    Refuse,
    /// The record is scored as if the flag were this one, and noted.
    Value(bool),
}

/// Joint covariance of all coefficients.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Covariance {
    /// Always `category, then term`: all terms of the first category that is not the reference,
    /// then all terms of the next.
    pub order: String,
    /// Rows of the lower triangle with the diagonal, one after another.
    pub lower: Vec<f64>,
}

/// The order of coefficients in a covariance.
pub const COVARIANCE_ORDER: &str = "category, then term";

/// Which standard errors the covariance holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum StandardErrors {
    /// Inverse of the observed information.
    #[default]
    Model,
    /// Sandwich over rows.
    Robust,
    /// Sandwich over clusters.
    Cluster,
}

/// How a model was fitted, and how well it fits the rows that it was fitted to.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct FitFigures {
    /// Rows of the table that the fit used.
    pub rows: u64,
    /// Sum of the weights: the number of cases.
    pub weight: f64,
    /// Rows that the fit refused.
    #[serde(default)]
    pub refused: u64,
    /// Log-likelihood at the optimum, natural logarithm, no multinomial constant.
    pub log_likelihood: f64,
    /// Log-likelihood with intercepts only.
    pub log_likelihood_null: f64,
    /// Number of coefficients that were estimated.
    pub parameters: u64,
    /// Euclidean norm of the gradient at the optimum, on standardised columns.
    pub gradient_norm: f64,
    /// Newton decrement at the optimum: distance to it in standard errors.
    pub newton_decrement: f64,
    /// Newton steps taken.
    pub iterations: u64,
    /// Certificate that the optimum exists, is finite and unique: below 1 it holds.
    pub certificate: f64,
    /// Which standard errors the covariance holds.
    pub standard_errors: StandardErrors,
    /// Number of clusters, where the standard errors are of that kind.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub clusters: Option<u64>,
    /// Effective number of coefficients of a penalised fit.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub effective_parameters: Option<f64>,
    /// Ridge penalty; 0 for maximum likelihood.
    pub ridge: f64,
    /// `-2 log_likelihood + 2 parameters`.
    pub aic: f64,
    /// `-2 log_likelihood + parameters ln(weight)`.
    pub bic: f64,
    /// `1 - log_likelihood / log_likelihood_null`.
    pub mcfadden_r2: f64,
    /// Observed cases of each category, in model order.
    pub category_weights: Vec<f64>,
    /// Terms left out because others determine them, each with its combination.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub aliased: Vec<String>,
    /// What the owner should know about this fit.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub warnings: Vec<String>,
    /// SHA-256 of the fitted files' bytes, one after another in the order of their names.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub data_fingerprint: Option<String>,
    /// Earliest and latest record time of the fit.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub period: Option<[String; 2]>,
    /// Program and version that fitted.
    pub program: String,
}

/// Figures on rows that were kept out of the fit.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Holdout {
    /// Number of rows.
    pub rows: u64,
    /// Sum of their weights.
    pub weight: f64,
    /// Mean log-loss, nats per case.
    pub log_loss: f64,
    /// Variance of the log-loss.
    pub log_loss_variance: f64,
    /// Mean log-loss that the model itself expects on these rows (mean entropy).
    pub log_loss_expected: f64,
    /// Variance of log-loss minus entropy.
    pub excess_variance: f64,
    /// Mean log-loss of the fitted mix on these rows.
    pub log_loss_null: f64,
    /// Mean Brier score.
    pub brier: f64,
    /// Mean Brier score that the model itself expects.
    pub brier_expected: f64,
    /// Observed shares of the categories.
    pub observed_mix: Vec<f64>,
    /// Mean probabilities of the categories.
    pub predicted_mix: Vec<f64>,
}

/// What drift is measured against: figures over the rows of the fit.
///
/// Symbols as in the documentation of `kilter-drift`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Baseline {
    /// Number of cases N of the fit (for weighted fits `(sum w)^2 / sum w^2`).
    pub cases: f64,
    /// Observed shares of the categories.
    pub mix: Vec<f64>,
    /// Number of coefficients that are not intercepts.
    pub slopes: u64,
    /// Efficient information about a common slope, summed over the rows.
    pub slope_information: f64,
    /// Slope to be expected on new rows, because a fit is a little too extreme.
    pub expected_slope: f64,
    /// For each category the sum of `p (1 - p)`.
    pub variance: Vec<f64>,
    /// Mean probability of each category.
    pub mean_probability: Vec<f64>,
    /// Covariance of the probabilities over the rows, J x J, row by row, divisor N.
    pub probability_covariance: Vec<f64>,
    /// For each category the number of cases in each of the fixed probability bins.
    pub probability_histogram: Vec<Vec<f64>>,
    /// Nine inner deciles of one minus the probability of the reference category.
    pub decile_edges: Vec<f64>,
    /// Mean log-loss on the rows of the fit, nats per case.
    pub log_loss: f64,
    /// Bins and shares of each field, in field order.
    pub fields: Vec<FieldBaseline>,
    /// Mean of each term but the intercept.
    pub term_means: Vec<f64>,
    /// Covariance of the terms but the intercept: rows of the lower triangle, divisor N.
    pub term_covariance: Vec<f64>,
}

/// How one field was distributed over the rows of the fit.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize, JsonSchema)]
pub struct FieldBaseline {
    /// Name of the field.
    pub name: String,
    /// Inner edges of the bins of a number, ascending; empty for levels and flags, whose bins are
    /// the levels in their order (false, true for a flag).
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub edges: Vec<f64>,
    /// Cases in each bin.
    pub counts: Vec<f64>,
    /// Cases without the value.
    pub missing: f64,
    /// Levels seen once and levels seen twice in the fit.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub rare_levels: Option<[u64; 2]>,
    /// Smallest and largest number.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub observed: Option<[f64; 2]>,
}

/// What the monitor should know about the owner's records.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize, JsonSchema)]
pub struct Monitor {
    /// Fields whose values are watched one by one.
    #[serde(default)]
    pub segments: Vec<String>,
    /// Age in days at which a record's outcome can be expected to be known.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub maturity_days: Option<f64>,
}

/// Where a version comes from.
#[derive(Debug, Clone, PartialEq, Eq, Default, Serialize, Deserialize, JsonSchema)]
pub struct Lineage {
    /// Fingerprint of the version that this one replaces.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub parent: Option<String>,
    /// `fit`, `refit` or `recalibration`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub origin: Option<String>,
}

impl ModelFile {
    /// Index of the reference category.
    ///
    /// Returns 0 for a file that names a reference category which is no category; such a file
    /// does not pass [`crate::check()`].
    pub fn reference_index(&self) -> usize {
        self.outcome.categories.iter().position(|c| *c == self.outcome.reference).unwrap_or(0)
    }

    /// The categories but the reference, in model order: the order of the covariance.
    pub fn compared_categories(&self) -> impl Iterator<Item = &str> {
        let reference = &self.outcome.reference;
        self.outcome.categories.iter().filter(move |c| *c != reference).map(String::as_str)
    }
}

impl Covariance {
    /// Covariance of coefficients `row` and `column`, counted category by category.
    pub fn at(&self, row: usize, column: usize) -> f64 {
        let (row, column) = if row >= column { (row, column) } else { (column, row) };
        self.lower[row * (row + 1) / 2 + column]
    }
}
