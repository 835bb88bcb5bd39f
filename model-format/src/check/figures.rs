//! Faults of the figures about the fit, the rows kept out of it, and the baseline of drift.

use super::Faults;
use crate::cells::shorten;
use crate::file::{Baseline, Field, FieldBaseline, FitFigures, Holdout, ModelFile};

/// Figures are written with all digits; recomputing them changes the last few.
const RECOMPUTED: f64 = 1e-9;
/// Counts in bins are sums over up to thousands of millions of rows, each rounded.
const COUNTED: f64 = 1e-6;

pub(super) fn check_figures(model: &ModelFile, faults: &mut Faults) {
    let categories = model.outcome.categories.len();
    if let Some(fit) = &model.fit {
        check_fit(fit, categories, model.terms.len(), faults);
    }
    if let Some(holdout) = &model.holdout {
        check_holdout(holdout, categories, faults);
    }
    if let Some(baseline) = &model.baseline {
        check_baseline(baseline, model, faults);
    }
}

/// Whether two numbers differ by more than rounding; numbers that are none always do.
fn differs(found: f64, computed: f64, tolerance: f64) -> bool {
    let apart = (found - computed).abs();
    apart.is_nan() || apart > tolerance * (1.0 + found.abs().max(computed.abs()))
}

fn expect(faults: &mut Faults, place: &str, found: f64, computed: f64, from: &str) {
    faults.add_if(differs(found, computed, RECOMPUTED), place, format!("{found}, but {from} {computed}"));
}

fn check_fit(fit: &FitFigures, categories: usize, terms: usize, faults: &mut Faults) {
    let most = terms.saturating_mul(categories - 1);
    faults.add_if(
        fit.parameters > most as u64,
        "fit.parameters",
        format!("{}, but there are {most} coefficients", fit.parameters),
    );
    faults.add_if(fit.weight <= 0.0, "fit.weight", format!("{}, need a number above 0", fit.weight));
    let parameters = fit.effective_parameters.unwrap_or(fit.parameters as f64);
    let log_likelihood = fit.log_likelihood;
    let aic = -2.0 * log_likelihood + 2.0 * parameters;
    expect(faults, "fit.aic", fit.aic, aic, "log-likelihood and parameters give");
    let bic = -2.0 * log_likelihood + parameters * fit.weight.ln();
    expect(faults, "fit.bic", fit.bic, bic, "log-likelihood, parameters and weight give");
    if fit.log_likelihood_null != 0.0 {
        let mcfadden = 1.0 - log_likelihood / fit.log_likelihood_null;
        expect(faults, "fit.mcfadden_r2", fit.mcfadden_r2, mcfadden, "the log-likelihoods give");
    }
    if faults.expect_length("fit.category_weights", fit.category_weights.len(), categories) {
        check_category_weights(fit, faults);
    }
}

fn check_category_weights(fit: &FitFigures, faults: &mut Faults) {
    let weights = &fit.category_weights;
    let negative = weights.iter().find(|weight| **weight < 0.0);
    if let Some(weight) = negative {
        return faults.add("fit.category_weights", format!("{weight}, need numbers not below 0"));
    }
    let total: f64 = weights.iter().sum();
    expect(faults, "fit.category_weights", total, fit.weight, "their sum must be `fit.weight`,");
    let seen = weights.iter().filter(|weight| **weight > 0.0);
    let null: f64 = seen.map(|weight| weight * (weight / total).ln()).sum();
    expect(faults, "fit.log_likelihood_null", fit.log_likelihood_null, null, "the category weights give");
}

fn check_holdout(holdout: &Holdout, categories: usize, faults: &mut Faults) {
    for (place, mix) in
        [("holdout.observed_mix", &holdout.observed_mix), ("holdout.predicted_mix", &holdout.predicted_mix)]
    {
        check_mix(place, mix, categories, faults);
    }
}

/// Shares of the categories: one each, none below zero, one together.
fn check_mix(place: &str, mix: &[f64], categories: usize, faults: &mut Faults) {
    if !faults.expect_length(place, mix.len(), categories) {
        return;
    }
    let outside = mix.iter().find(|share| !(0.0..=1.0 + RECOMPUTED).contains(*share));
    if let Some(share) = outside {
        return faults.add(place, format!("{share} is no share"));
    }
    let total: f64 = mix.iter().sum();
    faults.add_if(differs(total, 1.0, RECOMPUTED), place, format!("the shares sum to {total}, need 1"));
}

fn check_baseline(baseline: &Baseline, model: &ModelFile, faults: &mut Faults) {
    let categories = model.outcome.categories.len();
    let cases = baseline.cases;
    faults.add_if(cases <= 0.0, "baseline.cases", format!("{cases}, need a number above 0"));
    check_mix("baseline.mix", &baseline.mix, categories, faults);
    check_mix("baseline.mean_probability", &baseline.mean_probability, categories, faults);
    if let Some(fit) = &model.fit {
        let pairs = baseline.mix.iter().zip(&fit.category_weights).enumerate();
        for (index, (share, weight)) in pairs {
            let place = format!("baseline.mix[{index}]");
            expect(faults, &place, *share, weight / fit.weight, "`fit.category_weights` give");
        }
    }
    faults.expect_length("baseline.variance", baseline.variance.len(), categories);
    check_probability_covariance(&baseline.probability_covariance, categories, faults);
    check_histogram(&baseline.probability_histogram, categories, cases, faults);
    let descending = baseline.decile_edges.windows(2).any(|pair| pair[0] > pair[1]);
    faults.add_if(descending, "baseline.decile_edges", "need to ascend");
    check_field_bins(&baseline.fields, &model.fields, cases, faults);
    if !(baseline.term_means.is_empty() && baseline.term_covariance.is_empty()) {
        let slopes = model.terms.len() - 1;
        faults.expect_length("baseline.term_means", baseline.term_means.len(), slopes);
        let triangle = slopes * (slopes + 1) / 2;
        faults.expect_length("baseline.term_covariance", baseline.term_covariance.len(), triangle);
    }
}

fn check_probability_covariance(covariance: &[f64], categories: usize, faults: &mut Faults) {
    let place = "baseline.probability_covariance";
    if !faults.expect_length(place, covariance.len(), categories.saturating_mul(categories)) {
        return;
    }
    let at = |row: usize, column: usize| covariance[row * categories + column];
    let unequal = (0..categories)
        .flat_map(|row| (0..row).map(move |column| (row, column)))
        .find(|&(row, column)| differs(at(row, column), at(column, row), RECOMPUTED));
    if let Some((row, column)) = unequal {
        faults.add(place, format!("row {row}, column {column} differs from row {column}, column {row}"));
    }
}

fn check_histogram(histogram: &[Vec<f64>], categories: usize, cases: f64, faults: &mut Faults) {
    let place = "baseline.probability_histogram";
    if histogram.len() != categories {
        return faults.add(place, format!("{} lists, need {categories}", histogram.len()));
    }
    let bins = histogram[0].len();
    for (index, counts) in histogram.iter().enumerate() {
        let place = format!("{place}[{index}]");
        if faults.expect_length(&place, counts.len(), bins) {
            let total = counts.iter().sum();
            let unequal = differs(total, cases, COUNTED);
            faults.add_if(unequal, place, format!("the counts sum to {total}, `cases` is {cases}"));
        }
    }
}

fn check_field_bins(bins: &[FieldBaseline], fields: &[Field], cases: f64, faults: &mut Faults) {
    if bins.len() != fields.len() {
        return faults.add("baseline.fields", format!("{} fields, need {}", bins.len(), fields.len()));
    }
    for (index, (bins, field)) in bins.iter().zip(fields).enumerate() {
        let place = format!("baseline.fields[{index}]");
        let (found, needed) = (shorten(&bins.name), shorten(field.name()));
        faults.add_if(
            bins.name != field.name(),
            format!("{place}.name"),
            format!("`{found}`, but the field there is `{needed}`"),
        );
        let needed = match field {
            Field::Number(_) => bins.edges.len() + 1,
            Field::Levels(levels) => levels.levels.len(),
            Field::Flag(_) => 2,
        };
        let descending = bins.edges.windows(2).any(|pair| pair[0] >= pair[1]);
        faults.add_if(descending, format!("{place}.edges"), "need to ascend");
        faults.expect_length(format!("{place}.counts"), bins.counts.len(), needed);
        let negative = bins.counts.iter().chain([&bins.missing]).any(|count| *count < 0.0);
        faults.add_if(negative, format!("{place}.counts"), "a count is below 0");
        // Rows with a level outside the list are in no bin, so there may be fewer.
        let total = bins.counts.iter().sum::<f64>() + bins.missing;
        faults.add_if(
            total > cases * (1.0 + COUNTED),
            format!("{place}.counts"),
            format!("the counts and the missing sum to {total}, `cases` is {cases}"),
        );
    }
}
