//! What a fit hands back.

use std::collections::BTreeMap;

use kilter_model::ModelFile;
use serde::Serialize;

use crate::cross_validation::CrossValidation;
use crate::split::Split;

/// A row that could not be used.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RefusedRow {
    /// Number of the row among all rows of the source, counted from 0.
    pub row: u64,
    /// Its id, where the plan names a column for it.
    pub id: Option<String>,
    /// Name of the column; empty where the whole row could not be read.
    pub field: String,
    /// What is wrong with it.
    pub reason: String,
}

/// Figures of a penalised fit.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct RidgeFigures {
    /// The penalty.
    pub ridge: f64,
    /// Effective number of coefficients, of the intercepts and then of each field, in order; the
    /// terms of an interaction count half for each of its fields.
    pub effective_parameters: Vec<f64>,
    /// Standard errors from the spread of the estimate over samples, by category as the
    /// coefficients of the model file. They ignore that the estimate is biased towards 0; the
    /// covariance in the model file does not.
    pub sampling_errors: BTreeMap<String, Vec<f64>>,
    /// How the penalty was chosen, where the plan asks for cross-validation.
    pub cross_validation: Option<CrossValidation>,
}

/// A fitted model and what happened on the way.
#[derive(Debug, Clone)]
pub struct Fitted {
    /// The model file, without holdout figures, baseline and fingerprint.
    pub model: ModelFile,
    /// Which rows were kept out of the fit.
    pub split: Split,
    /// Rows read, whatever became of them.
    pub rows_read: u64,
    /// Rows kept out of the fit.
    pub held_out_rows: u64,
    /// Rows that could not be used.
    pub refused_rows: u64,
    /// The first thousand of them, with their reasons.
    pub refused: Vec<RefusedRow>,
    /// Number of cases of equal weight that would say as much as the weighted ones:
    /// `(sum w)^2 / sum w^2` (Kish 1965); the number of cases where there are no sampling weights.
    pub effective_cases: f64,
    /// Figures of a penalised fit; `None` for maximum likelihood.
    pub ridge: Option<RidgeFigures>,
    /// What the owner should know about this fit.
    pub warnings: Vec<String>,
    /// Terms left out because others determine them, each with its combination.
    pub aliased: Vec<String>,
    /// Log-likelihood and Newton decrement before each step and at the end.
    pub trace: Vec<[f64; 2]>,
}
