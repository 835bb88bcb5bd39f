//! What a fit tells beside its coefficients: gathered while the rows are at hand, written as text
//! or JSON, and shown in the report.

mod text;

use std::collections::BTreeMap;

use kilter_fit::analysis::{
    Effect, FieldTest, FitStatistics, GoodnessOfFit, GroupedFit, IndependenceTest, SeparateFit,
    fit_statistics,
};
use kilter_fit::{Analysis, CrossValidation, FitError};
use serde::Serialize;

pub(crate) use text::{
    as_text, effect_in_words, remark, statistics_in_words, test_in_words, tested_in_words, tests_as_table,
};

/// What a fit tells beside its coefficients.
#[derive(Debug, Clone, Serialize)]
pub(crate) struct FitAnalysis {
    /// Measures of fit.
    pub(crate) statistics: Option<FitStatistics>,
    /// Tests of whole fields; empty for a penalised fit.
    pub(crate) field_tests: Vec<FieldTest>,
    /// Average marginal effects.
    pub(crate) effects: Vec<Effect>,
    /// The multinomial test of Hosmer and Lemeshow.
    pub(crate) goodness_of_fit: Option<GoodnessOfFit>,
    /// Deviance and Pearson's statistic, where the rows repeat.
    pub(crate) grouped_fit: Option<GroupedFit>,
    /// Figures of a penalised fit.
    pub(crate) ridge: Option<Ridge>,
    /// What takes many fits more, where it was asked for.
    pub(crate) diagnosis: Option<Diagnosis>,
}

/// Figures of a penalised fit.
#[derive(Debug, Clone, Serialize)]
pub(crate) struct Ridge {
    /// The penalty per case.
    pub(crate) penalty: f64,
    /// Effective number of coefficients: of the intercepts, under the name of the intercept, and
    /// of each field.
    pub(crate) effective_parameters: BTreeMap<String, f64>,
    /// How the penalty was chosen, where the plan left it to cross-validation.
    pub(crate) cross_validation: Option<CrossValidation>,
}

/// Checks of the model that take many fits.
#[derive(Debug, Clone, Serialize)]
pub(crate) struct Diagnosis {
    /// Tests of the independence of irrelevant alternatives, one per category left out.
    pub(crate) independence: Vec<IndependenceTest>,
    /// Each category fitted separately against the reference.
    pub(crate) separate_fits: Vec<SeparateFit>,
}

impl FitAnalysis {
    /// Gathers everything; with `diagnose` also what takes many fits.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read or a smaller model has no estimate.
    pub(crate) fn of(fit: &mut Analysis, diagnose: bool) -> Result<Self, FitError> {
        let diagnosis = if diagnose {
            Some(Diagnosis { independence: fit.independence()?, separate_fits: fit.separate_fits()? })
        } else {
            None
        };
        Ok(Self {
            field_tests: fit.field_tests()?,
            effects: fit.effects()?,
            goodness_of_fit: fit.goodness_of_fit()?,
            grouped_fit: fit.grouped_fit()?,
            statistics: fit.fitted.model.fit.as_ref().map(fit_statistics),
            ridge: ridge(fit),
            diagnosis,
        })
    }
}

fn ridge(fit: &Analysis) -> Option<Ridge> {
    let figures = fit.fitted.ridge.as_ref()?;
    let fields = fit.fitted.model.fields.iter().map(kilter_model::Field::name);
    let names = std::iter::once(kilter_model::INTERCEPT).chain(fields).map(str::to_owned);
    Some(Ridge {
        penalty: figures.ridge,
        effective_parameters: names.zip(figures.effective_parameters.iter().copied()).collect(),
        cross_validation: figures.cross_validation.clone(),
    })
}
