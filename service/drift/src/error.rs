//! What can go wrong with summaries and the statistics on them.

/// Why something could not be summed or computed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum DriftError {
    /// A model has fewer than two categories.
    #[error("a model needs at least two categories, found {found}")]
    TooFewCategories {
        /// Number of categories found.
        found: usize,
    },
    /// The reference category is not among the categories.
    #[error("reference category {reference} is not among the {categories} categories")]
    Reference {
        /// Index given for the reference category.
        reference: usize,
        /// Number of categories.
        categories: usize,
    },
    /// A list has the wrong length.
    #[error("`{what}`: found {found} values, need {needed}")]
    Length {
        /// What the list is.
        what: &'static str,
        /// Values found.
        found: usize,
        /// Values needed.
        needed: usize,
    },
    /// A list that must ascend does not, or holds a value that is no number.
    #[error("`{what}` of `{owner}` must be finite and ascending")]
    NotAscending {
        /// What the list is.
        what: &'static str,
        /// Field or part that it belongs to.
        owner: String,
    },
    /// A number is not usable where it stands.
    #[error("`{what}` is {value}, {needed}")]
    Number {
        /// What the number is.
        what: &'static str,
        /// The number found.
        value: f64,
        /// What it must be.
        needed: &'static str,
    },
    /// An outcome outside the categories.
    #[error("category {found} is not among the {categories} categories of the model")]
    UnknownCategory {
        /// Index found.
        found: usize,
        /// Number of categories.
        categories: usize,
    },
    /// Two summaries of different shapes, or a summary and a frame that do not belong together.
    #[error(
        "summaries of different shapes do not combine: `{part}` differs; summarise both with one model version"
    )]
    Shape {
        /// The part that differs.
        part: &'static str,
    },
    /// A summary written by a later version of this crate.
    #[error("summary version {found} is not supported; this build reads {supported}")]
    SummaryVersion {
        /// Version found.
        found: u32,
        /// Version that this build reads and writes.
        supported: u32,
    },
    /// Something was to be removed that had never been added.
    #[error("`{part}` would become negative: what is to be removed was never added; rebuild this summary")]
    Negative {
        /// The part that would become negative.
        part: &'static str,
    },
    /// A statistic needs a part that the summary does not hold.
    #[error("`{what}` needs {needed}")]
    Missing {
        /// The statistic.
        what: &'static str,
        /// What it needs.
        needed: &'static str,
    },
    /// A recalibration whose coefficients the records do not determine.
    #[error("the records do not determine the recalibration: {reason}")]
    NotIdentified {
        /// Why.
        reason: &'static str,
    },
    /// A fit that did not converge.
    #[error(
        "the recalibration did not converge in {steps} steps; the outcomes may be separated by the scores"
    )]
    NoConvergence {
        /// Steps taken.
        steps: usize,
    },
}
