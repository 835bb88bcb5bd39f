//! What the plan alone says about the fields.

use std::collections::BTreeMap;

use kilter_model::{Field, Form, LevelsField, MISSING_LEVEL, Means, MissingNumber, NumberField};

use super::numbering::Interner;
use crate::plan::{FieldPlan, FormPlan, LevelsPlan, MissingLevelPlan, MissingNumberPlan, NumberPlan};

/// Levels known before any row was seen: those listed, the one that rare levels go to, and the one
/// for missing values.
pub(super) fn listed_levels(plan: &LevelsPlan) -> Vec<String> {
    let Some(listed) = &plan.levels else { return Vec::new() };
    let into = plan.rare.as_ref().map(|rare| rare.into.clone());
    let missing = MISSING_LEVEL.to_owned();
    listed.iter().cloned().chain(into).chain([missing]).collect()
}

/// A field as far as the plan alone says what it is. Missing levels are kept apart here whatever
/// becomes of them later.
pub(super) fn field_before_the_survey(plan: &FieldPlan) -> Field {
    match plan {
        FieldPlan::Number(number) => Field::Number(number_before_the_survey(number)),
        FieldPlan::Flag(flag) => Field::Flag(flag.clone()),
        FieldPlan::Levels(levels) => {
            let known = Interner::of(listed_levels(levels)).into_texts();
            let first = levels.levels.iter().flatten().next();
            let missing = match levels.missing {
                MissingLevelPlan::Refuse => "refuse".to_owned(),
                MissingLevelPlan::Reference | MissingLevelPlan::Level => MISSING_LEVEL.to_owned(),
            };
            Field::Levels(LevelsField {
                name: levels.name.clone(),
                reference: levels.reference.as_ref().or(first).cloned().unwrap_or_default(),
                levels: known,
                merged: BTreeMap::new(),
                unseen: levels.unseen.clone(),
                missing,
            })
        }
    }
}

fn number_before_the_survey(plan: &NumberPlan) -> NumberField {
    NumberField {
        name: plan.name.clone(),
        unit: plan.unit.clone(),
        form: match plan.form {
            FormPlan::Log => Form::Log,
            FormPlan::Log1p => Form::Log1p,
            // These accept any number, and the form plays no other part in coding.
            FormPlan::AsIs | FormPlan::Polynomial(_) | FormPlan::Spline(_) => Form::AsIs,
        },
        range: plan.range,
        missing: match plan.missing {
            MissingNumberPlan::Refuse => MissingNumber::Refuse,
            MissingNumberPlan::Value(value) => MissingNumber::Value(value),
            MissingNumberPlan::MeanAndFlag => MissingNumber::MeanAndFlag(Means { means: Vec::new() }),
        },
        observed: None,
    }
}
