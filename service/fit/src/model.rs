//! The model file of a fit.

use std::collections::BTreeMap;

use faer::Mat;

use kilter_model::cells::format_time;
use kilter_model::{
    COVARIANCE_ORDER, Covariance, FORMAT, FORMAT_VERSION, FitFigures, Lineage, ModelFile, RecordNames,
};

use crate::estimate::{Method, Solution};
use crate::newton::largest_spread;
use crate::plan::Plan;
use crate::raw::BackTransform;
use crate::reader::ReadStatistics;
use crate::resolve::Resolved;
use crate::session::ErrorKind;
use crate::survey::Totals;

/// What goes into a model file beside the optimum.
pub(crate) struct Outcomes<'a> {
    pub(crate) plan: &'a Plan,
    pub(crate) resolved: &'a Resolved,
    pub(crate) statistics: &'a ReadStatistics,
    pub(crate) total: &'a Totals,
    pub(crate) aliased: &'a [String],
    pub(crate) warnings: &'a [String],
    pub(crate) covariance: &'a ErrorKind,
}

/// The model file: plain coefficients and their covariance, and the figures of the fit.
pub(crate) fn model_file(outcomes: &Outcomes, back: &BackTransform, solution: &Solution) -> ModelFile {
    let Outcomes { plan, resolved, .. } = outcomes;
    let others = resolved.category_names().into_iter().skip(1).map(String::from);
    let coefficients: BTreeMap<String, Vec<f64>> =
        others.zip(back.coefficients(&solution.optimum.point)).collect();
    let names = RecordNames::default();
    ModelFile {
        format: FORMAT.into(),
        format_version: FORMAT_VERSION.into(),
        name: plan.name.clone(),
        purpose: plan.purpose.clone(),
        cautions: plan.cautions.clone(),
        record: RecordNames {
            id: plan.data.id.clone().unwrap_or(names.id),
            time: plan.data.time.clone().unwrap_or(names.time),
        },
        outcome: resolved.outcome.clone(),
        fields: resolved.fields.clone(),
        interactions: plan.interactions.clone(),
        terms: resolved.design.term_names(),
        coefficients,
        covariance: Some(lower_triangle(&back.covariance(outcomes.covariance.matrix.as_ref()))),
        fit: Some(figures(outcomes, solution)),
        holdout: None,
        baseline: None,
        monitor: plan.monitor.clone(),
        lineage: Lineage { parent: None, origin: Some("fit".into()) },
        fingerprint: String::new(),
        extra: serde_json::Map::new(),
    }
}

fn lower_triangle(covariance: &Mat<f64>) -> Covariance {
    let lower =
        (0..covariance.nrows()).flat_map(|row| (0..=row).map(move |column| covariance[(row, column)]));
    Covariance { order: COVARIANCE_ORDER.into(), lower: lower.collect() }
}

fn figures(outcomes: &Outcomes, solution: &Solution) -> FitFigures {
    let optimum = &solution.optimum;
    let (ridge, effective) = match &solution.method {
        Method::MaximumLikelihood | Method::BiasReduced => (0.0, None),
        Method::Ridge { rho, effective, .. } => (*rho, Some(effective.iter().sum::<f64>())),
    };
    let Outcomes { plan, resolved, statistics, total, .. } = outcomes;
    let weight = total.count.value();
    let log_likelihood = solution.log_likelihood;
    let log_likelihood_null = log_likelihood_of_mix(&resolved.category_weights);
    let parameters = effective.unwrap_or(optimum.point.len() as f64);
    FitFigures {
        rows: total.rows,
        weight,
        refused: statistics.refused_rows,
        log_likelihood,
        log_likelihood_null,
        parameters: optimum.point.len() as u64,
        gradient_norm: optimum.at.gradient.iter().map(|g| g * g).sum::<f64>().sqrt(),
        newton_decrement: optimum.decrement,
        iterations: optimum.steps,
        certificate: optimum.decrement * largest_spread(optimum.covariance.as_ref(), optimum.at.longest_row),
        standard_errors: plan.fit.standard_errors,
        ridge,
        aic: -2.0 * log_likelihood + 2.0 * parameters,
        bic: -2.0 * log_likelihood + parameters * weight.ln(),
        mcfadden_r2: 1.0 - log_likelihood / log_likelihood_null,
        category_weights: in_model_order(resolved),
        aliased: outcomes.aliased.to_vec(),
        warnings: outcomes.warnings.to_vec(),
        clusters: outcomes.covariance.clusters,
        effective_parameters: effective,
        data_fingerprint: None,
        period: statistics.period.map(|period| period.map(format_time)),
        program: concat!("kilter ", env!("CARGO_PKG_VERSION")).into(),
    }
}

/// Log-likelihood of the model with intercepts only: `sum_j n_j ln(n_j / n)`.
pub(crate) fn log_likelihood_of_mix(category_weights: &[f64]) -> f64 {
    let total: f64 = category_weights.iter().sum();
    category_weights.iter().filter(|weight| **weight > 0.0).map(|weight| weight * (weight / total).ln()).sum()
}

fn in_model_order(resolved: &Resolved) -> Vec<f64> {
    let names = resolved.category_names();
    let weight = |category: &String| {
        let position = names.iter().position(|name| name == category);
        position.map_or(0.0, |position| resolved.category_weights[position])
    };
    resolved.outcome.categories.iter().map(weight).collect()
}
