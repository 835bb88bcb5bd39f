//! The levels of a field: which stay, which are merged, which is the reference.

use std::collections::BTreeMap;

use kilter_model::{LevelsField, MISSING_LEVEL, near_miss};

use super::first_largest;
use crate::error::FitError;
use crate::plan::{LevelsPlan, MissingLevelPlan};

/// The levels of a field, decided.
pub(super) struct LevelSet {
    pub(super) field: LevelsField,
    /// For each text its level.
    pub(super) relabel: Vec<u32>,
    pub(super) warnings: Vec<String>,
}

impl LevelSet {
    /// Decides by the plan and the cases of each text by category.
    pub(super) fn new(plan: &LevelsPlan, texts: &[String], cases: &[Vec<f64>]) -> Result<Self, FitError> {
        let name = &plan.name;
        let mut warnings = Vec::new();
        let total = |level: usize| cases[level].iter().sum::<f64>();
        let stands_for_reference =
            |text: &str| text == MISSING_LEVEL && plan.missing == MissingLevelPlan::Reference;
        let seen =
            (0..texts.len()).filter(|&level| total(level) > 0.0 && !stands_for_reference(&texts[level]));
        let mut order: Vec<usize> = seen.collect();
        if plan.levels.is_none() {
            order.sort_by_key(|&level| (texts[level] == MISSING_LEVEL, &texts[level]));
        }
        for listed in plan.levels.iter().flatten() {
            if !order.iter().any(|&level| texts[level] == *listed) {
                warnings.push(format!(
                    "field `{name}`: level `{listed}` has no rows and is left out of the model"
                ));
            }
        }
        let reference = reference_level(plan, texts, &order, &total)?;
        let (levels, merged) = merge_rare(plan, texts, &order, &total, &reference);
        if levels.len() == 1 {
            warnings.push(format!("field `{name}` is always `{reference}`, so it has no coefficient"));
        }
        let place = |text: &String| {
            let text = if stands_for_reference(text) { &reference } else { merged.get(text).unwrap_or(text) };
            levels.iter().position(|level| level == text).unwrap_or(0) as u32
        };
        let relabel = texts.iter().map(place).collect();
        let unseen = unseen_policy(plan, &levels, &mut warnings);
        let missing = missing_policy(plan, &levels, &mut warnings);
        let field = LevelsField { name: name.clone(), levels, reference, merged, unseen, missing };
        Ok(Self { field, relabel, warnings })
    }
}

fn unseen_policy(plan: &LevelsPlan, levels: &[String], warnings: &mut Vec<String>) -> String {
    let policy = &plan.unseen;
    if ["refuse", "reference"].contains(&policy.as_str()) || levels.contains(policy) {
        return policy.clone();
    }
    let hint =
        near_miss(policy, levels).map_or_else(String::new, |near| format!(" (did you mean `{near}`?)"));
    warnings.push(format!(
        "field `{}`: `unseen` names level `{policy}`, which has no rows{hint}; unseen levels will be refused",
        plan.name
    ));
    "refuse".to_owned()
}

fn missing_policy(plan: &LevelsPlan, levels: &[String], warnings: &mut Vec<String>) -> String {
    match plan.missing {
        MissingLevelPlan::Refuse => "refuse".to_owned(),
        MissingLevelPlan::Reference => "reference".to_owned(),
        MissingLevelPlan::Level if levels.iter().any(|level| level == MISSING_LEVEL) => {
            MISSING_LEVEL.to_owned()
        }
        MissingLevelPlan::Level => {
            warnings.push(format!(
                "field `{}` is never missing in the fit, so records without it will be refused",
                plan.name
            ));
            "refuse".to_owned()
        }
    }
}

/// The level of the plan; else the first listed one; else the most frequent one.
fn reference_level(
    plan: &LevelsPlan,
    texts: &[String],
    order: &[usize],
    total: &dyn Fn(usize) -> f64,
) -> Result<String, FitError> {
    let named = plan.reference.as_ref().or(plan.levels.iter().flatten().next());
    let empty =
        |level: &str| FitError::EmptyReferenceLevel { field: plan.name.clone(), level: level.to_owned() };
    if let Some(named) = named {
        // Rare levels may be merged into a reference that does not occur by itself.
        let is_target = plan.rare.as_ref().is_some_and(|rare| {
            rare.into == *named && order.iter().any(|&level| total(level) < rare.below as f64)
        });
        let occurs = order.iter().any(|&level| texts[level] == *named);
        return if occurs || is_target { Ok(named.clone()) } else { Err(empty(named)) };
    }
    let sensible: Vec<usize> = order.iter().copied().filter(|&level| texts[level] != MISSING_LEVEL).collect();
    let totals: Vec<f64> = sensible.iter().map(|&level| total(level)).collect();
    match sensible.get(first_largest(&totals)) {
        Some(&level) => Ok(texts[level].clone()),
        None => Err(empty(MISSING_LEVEL)),
    }
}

/// The levels that stay, in order, and where each rare one goes. The reference and the level for
/// missing values always stay.
fn merge_rare(
    plan: &LevelsPlan,
    texts: &[String],
    order: &[usize],
    total: &dyn Fn(usize) -> f64,
    reference: &str,
) -> (Vec<String>, BTreeMap<String, String>) {
    let mut levels = Vec::new();
    let mut merged = BTreeMap::new();
    for &level in order {
        let text = &texts[level];
        let into = plan.rare.as_ref().filter(|rare| {
            total(level) < rare.below as f64
                && rare.into != *text
                && text != reference
                && text != MISSING_LEVEL
        });
        match into {
            Some(rare) => {
                merged.insert(text.clone(), rare.into.clone());
            }
            None => levels.push(text.clone()),
        }
    }
    if let Some(rare) = plan.rare.as_ref().filter(|rare| !merged.is_empty() && !levels.contains(&rare.into)) {
        // The level for missing values stays the last one.
        let end = levels.len() - usize::from(levels.last().is_some_and(|last| last == MISSING_LEVEL));
        levels.insert(end, rare.into.clone());
    }
    (levels, merged)
}
