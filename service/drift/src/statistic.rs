//! What every statistic comes as.

use serde::Serialize;

use crate::tails::{chi_square_upper, normal_two_sided};

/// Whether a statistic can be relied on.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Status {
    /// It can.
    Valid,
    /// Too few records, or too little in them that could have come out otherwise. The numbers are
    /// given, and nothing may be concluded from them.
    TooFew,
    /// The number of training cases is not known, so there is no p-value.
    TrainingSizeUnknown,
    /// It needs the single records: take the likelihood-ratio fit instead.
    NeedsRecords,
    /// It does not exist for these records.
    NotAvailable,
}

/// A statistic with its p-value.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Statistic {
    /// The value, corrected for the training uncertainty of the model where that is known.
    pub statistic: Option<f64>,
    /// Degrees of freedom of a chi-square; absent for a standard normal.
    pub df: Option<usize>,
    /// P-value for this period, if looked at once.
    pub p: Option<f64>,
    /// P-value as if the model were known without error; never to be judged by.
    pub p_without_phi: Option<f64>,
    /// Number of records behind it.
    pub n: f64,
    /// Whether it can be relied on.
    pub status: Status,
}

impl Statistic {
    /// A statistic that does not exist for these records.
    pub fn unavailable(n: f64) -> Self {
        Self { statistic: None, df: None, p: None, p_without_phi: None, n, status: Status::NotAvailable }
    }

    /// A chi-square `value` that the model's training uncertainty inflates by `phi`.
    pub(crate) fn chi_square(value: f64, df: usize, phi: Option<f64>, n: f64, enough: bool) -> Self {
        if df == 0 || !value.is_finite() {
            return Self::unavailable(n);
        }
        Self {
            statistic: Some(value / phi.unwrap_or(1.0)),
            df: Some(df),
            p: phi.and_then(|phi| chi_square_upper(value / phi, df)),
            p_without_phi: phi.and_then(|_| chi_square_upper(value, df)),
            n,
            status: status(phi, enough),
        }
    }

    /// A standard normal `z`, two-sided, whose square the training uncertainty inflates by `phi`.
    pub(crate) fn normal(z: f64, phi: Option<f64>, n: f64, enough: bool) -> Self {
        if !z.is_finite() {
            return Self::unavailable(n);
        }
        let corrected = z / phi.unwrap_or(1.0).sqrt();
        Self {
            statistic: Some(corrected),
            df: None,
            p: phi.map(|_| normal_two_sided(corrected)),
            p_without_phi: phi.map(|_| normal_two_sided(z)),
            n,
            status: status(phi, enough),
        }
    }

    /// The p-value, if the statistic can be relied on.
    pub fn valid_p(&self) -> Option<f64> {
        self.p.filter(|_| self.status == Status::Valid)
    }

    /// The same numbers with another status.
    pub(crate) fn with_status(self, status: Status) -> Self {
        Self { status, ..self }
    }
}

fn status(phi: Option<f64>, enough: bool) -> Status {
    match (phi, enough) {
        (_, false) => Status::TooFew,
        (None, true) => Status::TrainingSizeUnknown,
        (Some(_), true) => Status::Valid,
    }
}
