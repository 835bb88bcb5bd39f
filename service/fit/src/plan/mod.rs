//! Plans: what to fit, from which columns, and how.
//!
//! A plan is written in TOML. [`Plan::from_toml`] reads it, refuses what it does not know and
//! checks what its values mean together; a [`Plan`] has passed all of these checks.

mod check;
mod columns;
mod document;
mod error;
#[cfg(test)]
mod tests;

pub use columns::ColumnPlaces;
pub use error::PlanError;

use document::PlanDocument;
use error::Places;
use kilter_model::StandardErrors;

/// A checked plan.
#[derive(Debug, Clone, PartialEq)]
pub struct Plan {
    /// Name of the model.
    pub name: String,
    /// What the probabilities are for.
    pub purpose: String,
    /// What the probabilities must not be used for.
    pub cautions: Vec<String>,
    /// The tables and what their columns are.
    pub data: DataPlan,
    /// The outcome.
    pub outcome: OutcomePlan,
    /// The inputs, in the order of their terms.
    pub fields: Vec<FieldPlan>,
    /// Pairs of fields whose columns are multiplied.
    pub interactions: Vec<[String; 2]>,
    /// How to fit.
    pub fit: FitPlan,
    /// What the monitor should know about the records.
    pub monitor: kilter_model::Monitor,
}

/// The tables and what their columns are.
#[derive(Debug, Clone, PartialEq)]
pub struct DataPlan {
    /// Files, relative to the plan; may hold wildcards.
    pub files: Vec<String>,
    /// Column with the id of a record.
    pub id: Option<String>,
    /// Column with the time of a record.
    pub time: Option<String>,
    /// Column that says how many equal records a row stands for.
    pub count: Option<String>,
    /// Column with the sampling weight of a row.
    pub weight: Option<String>,
    /// Column with the cluster of a row.
    pub cluster: Option<String>,
    /// Rows that are kept out of the fit.
    pub holdout: Option<HoldoutPlan>,
}

/// Rows that are kept out of the fit to judge it.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum HoldoutPlan {
    /// The latest share of the rows by time.
    Latest(f64),
    /// A random share of the rows.
    Share {
        /// The share.
        share: f64,
        /// Which of the random shares.
        seed: u64,
    },
}

/// The outcome.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct OutcomePlan {
    /// Column with the observed category.
    pub field: String,
    /// The category that the others are compared against; `None`: the first listed category, or
    /// else the most frequent one (of equally frequent ones the first in order).
    pub reference: Option<String>,
    /// All categories in their order; `None`: all that the fit sees, sorted.
    pub categories: Option<Vec<String>>,
}

/// One input.
#[derive(Debug, Clone, PartialEq)]
pub enum FieldPlan {
    /// A number.
    Number(NumberPlan),
    /// One of several levels.
    Levels(LevelsPlan),
    /// True or false.
    Flag(kilter_model::FlagField),
}

impl FieldPlan {
    /// Name of the column.
    pub fn name(&self) -> &str {
        match self {
            Self::Number(field) => &field.name,
            Self::Levels(field) => &field.name,
            Self::Flag(field) => &field.name,
        }
    }
}

/// A number.
#[derive(Debug, Clone, PartialEq)]
pub struct NumberPlan {
    /// Name of the column.
    pub name: String,
    /// Unit, for people.
    pub unit: Option<String>,
    /// How the number enters the terms.
    pub form: FormPlan,
    /// Smallest and largest number accepted.
    pub range: Option<[f64; 2]>,
    /// What happens to a row without the number.
    pub missing: MissingNumberPlan,
}

/// How a number enters the terms.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FormPlan {
    /// The number itself.
    AsIs,
    /// Its natural logarithm.
    Log,
    /// The natural logarithm of one plus the number.
    Log1p,
    /// Powers 1 to this degree.
    Polynomial(u32),
    /// A restricted cubic spline with this number of knots.
    Spline(u32),
}

/// What happens to a row without the number.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum MissingNumberPlan {
    /// The row is refused.
    Refuse,
    /// This number is used.
    Value(f64),
    /// Each column of the number takes its mean, and a flag term is set.
    MeanAndFlag,
}

/// A field of levels.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct LevelsPlan {
    /// Name of the column.
    pub name: String,
    /// All levels in their order; `None`: all that the fit sees, sorted.
    pub levels: Option<Vec<String>>,
    /// The level without a term; `None`: the first listed level, or else the most frequent one
    /// (of equally frequent ones the first in order).
    pub reference: Option<String>,
    /// Merges rare levels.
    pub rare: Option<RarePlan>,
    /// What happens to a level that the fit did not see: `refuse`, `reference`, or a level.
    pub unseen: String,
    /// What happens to a row without a level.
    pub missing: MissingLevelPlan,
}

/// Merges rare levels.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RarePlan {
    /// Levels with fewer cases than this are merged.
    pub below: u64,
    /// The level that they are merged into.
    pub into: String,
}

/// What happens to a row without a level.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum MissingLevelPlan {
    /// The row is refused.
    Refuse,
    /// The reference level is used.
    Reference,
    /// Missing is a level of its own.
    Level,
}

/// How to fit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FitPlan {
    /// The penalty.
    pub ridge: RidgePlan,
    /// When the bias of the estimate is reduced.
    pub bias_reduction: BiasReductionPlan,
    /// Which standard errors the model file gets.
    pub standard_errors: StandardErrors,
}

/// When the bias of the estimate is reduced (Firth 1993).
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Deserialize, schemars::JsonSchema)]
#[serde(rename_all = "kebab-case")]
pub enum BiasReductionPlan {
    /// Never: the fit is one of maximum likelihood, or there is none.
    #[default]
    Never,
    /// Where the data separate the categories, so that there is no maximum likelihood estimate.
    IfSeparated,
    /// Always.
    Always,
}

/// The ridge penalty.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum RidgePlan {
    /// This penalty; 0 is maximum likelihood.
    Penalty(f64),
    /// The penalty that cross-validation chooses.
    CrossValidate,
}

impl Plan {
    /// Reads and checks a plan.
    ///
    /// # Errors
    /// [`PlanError`] names the first key that is wrong, its line, what was found, what is allowed
    /// and, where a name was probably misspelt, the right one.
    pub fn from_toml(text: &str) -> Result<Self, PlanError> {
        let places = Places::new(text);
        let document: PlanDocument = toml::from_str(text).map_err(|error| places.error_of(&error))?;
        check::plan(&document).map_err(|objection| places.error_at(objection))
    }
}

/// The JSON Schema (draft 2020-12) of plans.
pub fn plan_schema() -> serde_json::Value {
    schemars::schema_for!(PlanDocument).to_value()
}
