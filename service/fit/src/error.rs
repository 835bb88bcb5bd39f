//! Why a fit came to nothing.

use crate::separation::SeparationReport;

/// Why a fit came to nothing; no model is returned then.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum FitError {
    /// The source failed.
    #[error("could not read the rows")]
    Read(#[source] Box<dyn std::error::Error + Send + Sync>),
    /// The source gave other rows than before.
    #[error(
        "the rows changed while they were being fitted: {before} usable rows at first, now {now}; fit again when nothing writes to the tables"
    )]
    Changed {
        /// Usable rows of the first pass.
        before: u64,
        /// Usable rows of a later pass.
        now: u64,
    },
    /// No row was left.
    #[error("no row is left to fit: {refused} rows were refused, {held_out} were kept out as holdout{}", first_reason(.first.as_ref()))]
    NoRows {
        /// Rows refused.
        refused: u64,
        /// Rows kept out.
        held_out: u64,
        /// Field and reason of the first refused row.
        first: Option<(String, String)>,
    },
    /// A category of the plan, or the only other one, does not occur.
    #[error(
        "category `{category}` has no rows; leave it out of `outcome.categories`, or fit on rows that have it"
    )]
    EmptyCategory {
        /// The category.
        category: String,
    },
    /// The outcome does not vary.
    #[error("the outcome is always `{category}`; a fit needs at least two categories")]
    OneCategory {
        /// The only category.
        category: String,
    },
    /// The reference category is no category.
    #[error("reference category `{reference}` does not occur; the categories are {categories}")]
    UnknownReference {
        /// The reference category of the plan.
        reference: String,
        /// The categories seen.
        categories: String,
    },
    /// The reference level does not occur.
    #[error("field `{field}`: reference level `{level}` has no rows; choose one that has")]
    EmptyReferenceLevel {
        /// The field.
        field: String,
        /// Its reference level.
        level: String,
    },
    /// Far too many different texts.
    #[error("`{column}` has more than {most} different values; is it an id, or a number?")]
    TooManyLevels {
        /// The column.
        column: String,
        /// How many are accepted.
        most: usize,
    },
    /// The model is too large to be fitted.
    #[error(
        "{coefficients} coefficients ({terms} terms for each of {compared} categories) are more than {most}; merge rare levels, drop interactions or merge categories"
    )]
    TooLarge {
        /// Number of coefficients.
        coefficients: usize,
        /// Number of terms.
        terms: usize,
        /// Number of categories but the reference.
        compared: usize,
        /// How many coefficients are accepted.
        most: usize,
    },
    /// Fields and interactions make no design.
    #[error(transparent)]
    Design(#[from] kilter_model::DesignError),
    /// The maximum likelihood estimate does not exist.
    #[error("{0}")]
    Separated(Box<SeparationReport>),
    /// Neither the optimiser nor the linear programme found out whether there is an estimate.
    #[error(
        "could not decide whether the data separate the categories; look for numbers of extreme size and terms that nearly determine each other"
    )]
    Undecided,
    /// The optimiser did not get there.
    #[error(
        "the fit did not converge in {iterations} steps: the estimate is still {decrement:.1e} standard errors from the optimum; look for numbers of extreme size, or give `fit.ridge` a value"
    )]
    NotConverged {
        /// Newton steps taken.
        iterations: u64,
        /// Newton decrement.
        decrement: f64,
    },
    /// The information matrix cannot be inverted.
    #[error(
        "the fit is not unique: after {iterations} steps the data hardly determine {terms}; leave one of them out, or give `fit.ridge` a value"
    )]
    NotUnique {
        /// Newton steps taken.
        iterations: u64,
        /// The coefficients concerned.
        terms: String,
    },
    /// Too few clusters to say anything about the differences between them.
    #[error(
        "`{column}` has {found} clusters; cluster-robust standard errors need at least {least}, use `robust`"
    )]
    TooFewClusters {
        /// The column of the clusters.
        column: String,
        /// Number of clusters.
        found: u64,
        /// How many are needed.
        least: u64,
    },
    /// The estimate hangs on one cluster.
    #[error(
        "some coefficient is determined by a single cluster of `{column}`, so nothing is known of differences between clusters; leave the term out or use `robust`"
    )]
    LoneCluster {
        /// The column of the clusters.
        column: String,
    },
    /// Too few cases of a category to cross-validate.
    #[error(
        "category `{category}` has too few cases for {folds}-fold cross-validation; give `fit.ridge` a number"
    )]
    TooFewForFolds {
        /// The category.
        category: String,
        /// Number of folds.
        folds: usize,
    },
    /// A number is too large to compute with.
    #[error("the log-odds of {rows} rows are too large to compute; look for numbers of extreme size")]
    NotFinite {
        /// Number of rows.
        rows: u64,
    },
}

fn first_reason(first: Option<&(String, String)>) -> String {
    first.map_or_else(String::new, |(field, reason)| format!("; the first because `{field}` {reason}"))
}
