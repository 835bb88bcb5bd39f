//! How well a model fits the rows that it was fitted to.

use kilter_model::FitFigures;
use serde::Serialize;

/// Measures of fit. For sampling weights all of them are of the pseudo-likelihood.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct FitStatistics {
    /// `-2 ll + 2 d` with d coefficients (Akaike 1974).
    pub aic: f64,
    /// `-2 ll + d ln n` with n cases (Schwarz 1978).
    pub bic: f64,
    /// `1 - ll / ll0` (McFadden 1974).
    pub mcfadden: f64,
    /// `1 - (ll - d) / ll0`; d counts the intercepts.
    pub mcfadden_adjusted: f64,
    /// `1 - exp(2 (ll0 - ll) / n)` (Cox and Snell 1989).
    pub cox_snell: f64,
    /// Cox and Snell's measure by its maximum, `1 - exp(2 ll0 / n)` (Nagelkerke 1991).
    pub nagelkerke: f64,
}

/// Measures of fit from the figures in a model file.
pub fn fit_statistics(fit: &FitFigures) -> FitStatistics {
    let (ll, ll0, n) = (fit.log_likelihood, fit.log_likelihood_null, fit.weight);
    let d = fit.effective_parameters.unwrap_or(fit.parameters as f64);
    let cox_snell = -(2.0 * (ll0 - ll) / n).exp_m1();
    FitStatistics {
        aic: -2.0 * ll + 2.0 * d,
        bic: -2.0 * ll + d * n.ln(),
        mcfadden: 1.0 - ll / ll0,
        mcfadden_adjusted: 1.0 - (ll - d) / ll0,
        cox_snell,
        nagelkerke: cox_snell / -(2.0 * ll0 / n).exp_m1(),
    }
}
