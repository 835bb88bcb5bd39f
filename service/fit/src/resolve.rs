//! What the survey decides: the final categories, levels, knots and scales.

use std::collections::BTreeMap;

use kilter_model::{
    Design, Field, FlagField, Form, INTERCEPT, LevelsField, MISSING_LEVEL, Means, MissingNumber, NumberField,
    Outcome, Spline, near_miss,
};

use crate::chunk::{Chunk, ChunkColumn};
use crate::error::FitError;
use crate::layout::Scaling;
use crate::plan::{
    FieldPlan, FormPlan, LevelsPlan, MissingLevelPlan, MissingNumberPlan, NumberPlan, OutcomePlan, Plan,
};
use crate::reader::Reader;
use crate::survey::{FieldSurvey, Moments, Sample, Sampled, Survey};

/// Probabilities of the knots of a restricted cubic spline, for 3 to 7 knots (Harrell 2001).
const KNOT_QUANTILES: [&[f64]; 5] = [
    &[0.10, 0.50, 0.90],
    &[0.05, 0.35, 0.65, 0.95],
    &[0.05, 0.275, 0.50, 0.725, 0.95],
    &[0.05, 0.23, 0.41, 0.59, 0.77, 0.95],
    &[0.025, 0.1833, 0.3417, 0.50, 0.6583, 0.8167, 0.975],
];

/// From first numbers to final ones.
#[derive(Debug, Clone)]
pub(crate) struct Relabel {
    /// Categories: the reference becomes 0, the others follow in the order of the model.
    categories: Vec<u32>,
    /// For each field of levels, level by level.
    levels: Vec<Vec<u32>>,
    /// Factor that makes the mean sampling weight of a case 1.
    weight_factor: f64,
}

impl Relabel {
    pub(crate) fn apply(&self, chunk: &mut Chunk) {
        for category in &mut chunk.category {
            *category = self.categories[*category as usize];
        }
        if self.weight_factor != 1.0 {
            for weight in &mut chunk.weight {
                *weight *= self.weight_factor;
            }
        }
        for (column, map) in chunk.fields.iter_mut().zip(&self.levels) {
            if let ChunkColumn::Levels(levels) = column {
                for level in levels {
                    *level = map[*level as usize];
                }
            }
        }
    }
}

/// What is decided before the optimiser starts.
#[derive(Debug, Clone)]
pub(crate) struct Resolved {
    pub(crate) outcome: Outcome,
    pub(crate) fields: Vec<Field>,
    pub(crate) design: Design,
    pub(crate) scaling: Scaling,
    pub(crate) relabel: Relabel,
    /// Weight of each category, the reference first; they add up to the number of cases.
    pub(crate) category_weights: Vec<f64>,
    /// Cases of each category, the reference first.
    pub(crate) category_cases: Vec<f64>,
    /// Cases by field, level (or false and true) and category, the reference category first;
    /// empty for numbers.
    pub(crate) level_cases: Vec<Vec<Vec<f64>>>,
    /// Ranges by field and category, the reference category first; empty for levels and flags.
    pub(crate) ranges: Vec<Vec<[f64; 2]>>,
    pub(crate) warnings: Vec<String>,
}

impl Resolved {
    /// Names of the categories, the reference first.
    pub(crate) fn category_names(&self) -> Vec<&str> {
        let reference = &self.outcome.reference;
        let others = self.outcome.categories.iter().filter(|category| *category != reference);
        std::iter::once(reference).chain(others).map(String::as_str).collect()
    }
}

/// Decides everything that the survey tells.
pub(crate) fn resolve(
    plan: &Plan,
    reader: &Reader,
    survey: &Survey,
    samples: &[Option<Sample>],
) -> Result<Resolved, FitError> {
    let mut warnings = Vec::new();
    let categories = Categories::new(&plan.outcome, reader, survey)?;
    let mut resolved = Resolving { survey, categories: &categories, warnings: &mut warnings };
    let mut fields = Vec::new();
    let (mut moments, mut levels, mut level_cases, mut ranges) = (vec![], vec![], vec![], vec![]);
    for (index, field) in plan.fields.iter().enumerate() {
        let found = match field {
            FieldPlan::Number(number) => resolved.number(index, number, samples[index].as_ref()),
            FieldPlan::Levels(levels) => resolved.levels(index, levels, reader.levels(index).texts())?,
            FieldPlan::Flag(flag) => resolved.flag(index, flag),
        };
        fields.push(found.field);
        moments.push(found.moments);
        levels.push(found.relabel);
        level_cases.push(found.cases);
        ranges.push(found.ranges);
    }
    let design = Design::new(&fields, &plan.interactions)?;
    let scaling = Scaling::new(&design, &moments);
    let reference_first = |pick: fn(&crate::survey::Totals) -> f64| -> Vec<f64> {
        categories.order.iter().map(|&category| pick(&survey.categories[category])).collect()
    };
    let category_cases = reference_first(|totals| totals.count.value());
    let category_weights = reference_first(|totals| totals.weight.value());
    // Without sampling weights both sums are the same number, and the factor is exactly 1.
    let weight_factor = survey.total.count.value() / survey.total.weight.value();
    warn_of_few_cases(&categories, &category_cases, design.terms().len(), &mut warnings);
    Ok(Resolved {
        outcome: categories.outcome.clone(),
        relabel: Relabel { categories: categories.relabel(), levels, weight_factor },
        category_weights: category_weights.iter().map(|weight| weight * weight_factor).collect(),
        category_cases,
        fields,
        design,
        scaling,
        level_cases,
        ranges,
        warnings,
    })
}

fn warn_of_few_cases(categories: &Categories, cases: &[f64], terms: usize, warnings: &mut Vec<String>) {
    for (&category, &cases) in categories.order.iter().zip(cases) {
        if cases < terms as f64 {
            let name = &categories.names[category];
            warnings.push(format!(
                "category `{name}` has {cases} cases for {terms} terms (`{INTERCEPT}` included): its coefficients will be unstable"
            ));
        }
    }
}

/// The categories and their order.
struct Categories {
    /// Names by first number.
    names: Vec<String>,
    /// First numbers, the reference first, then in the order of the model.
    order: Vec<usize>,
    outcome: Outcome,
}

impl Categories {
    fn new(plan: &OutcomePlan, reader: &Reader, survey: &Survey) -> Result<Self, FitError> {
        let names = reader.categories().texts().to_vec();
        let rows = |category: usize| survey.categories.get(category).map_or(0, |totals| totals.rows);
        if let Some(empty) = (0..names.len()).find(|&category| rows(category) == 0) {
            return Err(FitError::EmptyCategory { category: names[empty].clone() });
        }
        let mut model_order: Vec<usize> = (0..names.len()).collect();
        if plan.categories.is_none() {
            model_order.sort_by(|&a, &b| names[a].cmp(&names[b]));
        }
        if let [only] = model_order[..] {
            return Err(FitError::OneCategory { category: names[only].clone() });
        }
        let cases: Vec<f64> =
            model_order.iter().map(|&category| survey.categories[category].count.value()).collect();
        let reference = match (&plan.reference, &plan.categories) {
            (Some(reference), _) => names.iter().position(|name| name == reference).ok_or_else(|| {
                let listed: Vec<String> =
                    model_order.iter().map(|&category| format!("`{}`", names[category])).collect();
                FitError::UnknownReference { reference: reference.clone(), categories: listed.join(", ") }
            })?,
            (None, Some(_)) => model_order[0],
            (None, None) => model_order[first_largest(&cases)],
        };
        let others = model_order.iter().copied().filter(|&category| category != reference);
        let order = std::iter::once(reference).chain(others).collect();
        let outcome = Outcome {
            field: plan.field.clone(),
            categories: model_order.iter().map(|&category| names[category].clone()).collect(),
            reference: names[reference].clone(),
        };
        Ok(Self { names, order, outcome })
    }

    fn relabel(&self) -> Vec<u32> {
        let mut map = vec![0; self.names.len()];
        for (new, &old) in self.order.iter().enumerate() {
            map[old] = new as u32;
        }
        map
    }

    /// Reorders figures by category, the reference first; absent ones are `empty`.
    fn reordered<T: Copy>(&self, by_category: &[T], empty: T) -> Vec<T> {
        self.order.iter().map(|&category| by_category.get(category).copied().unwrap_or(empty)).collect()
    }
}

/// The first of the largest.
fn first_largest(values: &[f64]) -> usize {
    let mut best = 0;
    for (index, value) in values.iter().enumerate() {
        if *value > values[best] {
            best = index;
        }
    }
    best
}

/// What the survey decides about one field.
struct FieldFound {
    field: Field,
    /// Moments of each column of a number's form.
    moments: Vec<Moments>,
    relabel: Vec<u32>,
    cases: Vec<Vec<f64>>,
    ranges: Vec<[f64; 2]>,
}

struct Resolving<'a> {
    survey: &'a Survey,
    categories: &'a Categories,
    warnings: &'a mut Vec<String>,
}

impl Resolving<'_> {
    fn number(&mut self, index: usize, plan: &NumberPlan, sample: Option<&Sample>) -> FieldFound {
        let FieldSurvey::Number { value, columns, missing_rows, by_category } = &self.survey.fields[index]
        else {
            unreachable!("a number field is surveyed as a number")
        };
        let name = &plan.name;
        let (form, moments) = match (plan.form, sample) {
            (FormPlan::Spline(knots), Some(sample)) => self.spline(name, knots, sample),
            (FormPlan::Log, _) => (Form::Log, columns.clone()),
            (FormPlan::Log1p, _) => (Form::Log1p, columns.clone()),
            (FormPlan::Polynomial(degree), _) => (Form::Polynomial(degree), columns.clone()),
            (FormPlan::AsIs | FormPlan::Spline(_), _) => (Form::AsIs, columns.clone()),
        };
        if value.least == value.most {
            self.warnings.push(format!("field `{name}` is always {}, so it has no coefficient", value.least));
        }
        let missing = match plan.missing {
            MissingNumberPlan::Value(value) => MissingNumber::Value(value),
            MissingNumberPlan::MeanAndFlag if *missing_rows > 0 => MissingNumber::MeanAndFlag(Means {
                means: moments.iter().map(|moments| moments.mean).collect(),
            }),
            MissingNumberPlan::MeanAndFlag => {
                self.warnings.push(format!(
                    "field `{name}` is never missing in the fit, so it has no flag and records without it will be refused"
                ));
                MissingNumber::Refuse
            }
            MissingNumberPlan::Refuse => MissingNumber::Refuse,
        };
        let field = Field::Number(NumberField {
            name: name.clone(),
            unit: plan.unit.clone(),
            form,
            range: plan.range,
            missing,
            observed: (value.weight > 0.0).then_some([value.least, value.most]),
        });
        let ranges = self.categories.reordered(by_category, [f64::INFINITY, f64::NEG_INFINITY]);
        FieldFound { field, moments, relabel: vec![], cases: vec![], ranges }
    }

    fn spline(&mut self, name: &str, knots: u32, sample: &Sample) -> (Form, Vec<Moments>) {
        let values = sample.values();
        let knots = spline_knots(&values, knots, sample.partial);
        let form = if knots.len() < 3 {
            self.warnings.push(format!(
                "field `{name}` has too few different values for a spline; it enters as it is"
            ));
            Form::AsIs
        } else {
            Form::Spline(Spline { knots })
        };
        let moments = (0..form.columns()).map(|basis| {
            Moments::of(values.iter().map(|sampled| (form.column(basis, sampled.value), sampled.weight)))
        });
        let moments = moments.collect();
        (form, moments)
    }

    fn flag(&mut self, index: usize, plan: &FlagField) -> FieldFound {
        let cases = self.cases(index, 2);
        FieldFound {
            field: Field::Flag(plan.clone()),
            moments: vec![],
            relabel: vec![],
            cases,
            ranges: vec![],
        }
    }

    /// Cases by level and category, the reference category first.
    fn cases(&self, index: usize, levels: usize) -> Vec<Vec<f64>> {
        let FieldSurvey::Levels { cases } = &self.survey.fields[index] else { return Vec::new() };
        let row =
            |level: usize| self.categories.reordered(cases.get(level).map_or(&[][..], Vec::as_slice), 0.0);
        (0..levels).map(row).collect()
    }

    fn levels(&mut self, index: usize, plan: &LevelsPlan, texts: &[String]) -> Result<FieldFound, FitError> {
        let cases = self.cases(index, texts.len());
        let found = LevelSet::new(plan, texts, &cases)?;
        self.warnings.extend(found.warnings.iter().cloned());
        let mut merged_cases = vec![vec![0.0; self.categories.order.len()]; found.field.levels.len()];
        for (level, by_category) in cases.iter().enumerate() {
            let total: f64 = by_category.iter().sum();
            if total > 0.0 {
                crate::reduce::add_all(&mut merged_cases[found.relabel[level] as usize], by_category);
            }
        }
        Ok(FieldFound {
            field: Field::Levels(found.field),
            moments: vec![],
            relabel: found.relabel,
            cases: merged_cases,
            ranges: vec![],
        })
    }
}

/// The levels of a field, decided.
struct LevelSet {
    field: LevelsField,
    relabel: Vec<u32>,
    warnings: Vec<String>,
}

impl LevelSet {
    fn new(plan: &LevelsPlan, texts: &[String], cases: &[Vec<f64>]) -> Result<Self, FitError> {
        let name = &plan.name;
        let mut warnings = Vec::new();
        let total = |level: usize| cases[level].iter().sum::<f64>();
        let missing_policy =
            |level: usize| texts[level] == MISSING_LEVEL && plan.missing == MissingLevelPlan::Reference;
        let seen: Vec<usize> = (0..texts.len()).filter(|&level| total(level) > 0.0).collect();
        let mut order: Vec<usize> = seen.iter().copied().filter(|&level| !missing_policy(level)).collect();
        if plan.levels.is_none() {
            order.sort_by(|&a, &b| {
                (texts[a] == MISSING_LEVEL, &texts[a]).cmp(&(texts[b] == MISSING_LEVEL, &texts[b]))
            });
        }
        for listed in plan.levels.iter().flatten() {
            if !order.iter().any(|&level| texts[level] == *listed) {
                warnings.push(format!(
                    "field `{name}`: level `{listed}` has no rows and is left out of the model"
                ));
            }
        }
        let reference = reference_level(plan, texts, &order, &total)?;
        let (mut levels, merged) = merge_rare(plan, texts, &order, &total, &reference);
        if let Some(MISSING_LEVEL) = levels.iter().rev().nth(1).map(String::as_str) {
            // The level that rare ones were merged into stands before the one for missing values.
            let last = levels.len() - 1;
            levels.swap(last - 1, last);
        }
        if levels.len() == 1 {
            warnings.push(format!("field `{name}` is always `{reference}`, so it has no coefficient"));
        }
        let position = |text: &str| levels.iter().position(|level| level == text);
        let relabel = texts.iter().enumerate().map(|(level, text)| {
            let text = if missing_policy(level) { &reference } else { merged.get(text).unwrap_or(text) };
            position(text).unwrap_or(0) as u32
        });
        let relabel = relabel.collect();
        let unseen = match plan.unseen.as_str() {
            policy @ ("refuse" | "reference") => policy.to_owned(),
            level if position(level).is_some() => level.to_owned(),
            level => {
                let hint = near_miss(level, &levels)
                    .map_or_else(String::new, |near| format!(" (did you mean `{near}`?)"));
                warnings.push(format!(
                    "field `{name}`: `unseen` names level `{level}`, which has no rows{hint}; unseen levels will be refused"
                ));
                "refuse".to_owned()
            }
        };
        let missing = match plan.missing {
            MissingLevelPlan::Refuse => "refuse".to_owned(),
            MissingLevelPlan::Reference => "reference".to_owned(),
            MissingLevelPlan::Level if position(MISSING_LEVEL).is_some() => MISSING_LEVEL.to_owned(),
            MissingLevelPlan::Level => {
                warnings.push(format!(
                    "field `{name}` is never missing in the fit, so records without it will be refused"
                ));
                "refuse".to_owned()
            }
        };
        let field = LevelsField { name: name.clone(), levels, reference, merged, unseen, missing };
        Ok(Self { field, relabel, warnings })
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
        levels.push(rare.into.clone());
    }
    (levels, merged)
}

/// Knots at the usual quantiles of the cases; fewer where quantiles coincide.
///
/// A quantile lies at position `(N - 1) q` among the N cases in order, between its neighbours by
/// linear interpolation. Knots of a sample are rounded to four significant digits.
fn spline_knots(sample: &[Sampled], knots: u32, partial: bool) -> Vec<f64> {
    let mut cases: Vec<(f64, f64)> = sample.iter().map(|sampled| (sampled.value, sampled.count)).collect();
    cases.sort_by(|a, b| a.0.total_cmp(&b.0));
    let total: f64 = cases.iter().map(|(_, count)| count).sum();
    let mut chosen: Vec<f64> = KNOT_QUANTILES[knots as usize - 3]
        .iter()
        .map(|probability| quantile(&cases, total, *probability))
        .map(|knot| if partial { rounded(knot) } else { knot })
        .collect();
    chosen.dedup();
    chosen
}

fn quantile(cases: &[(f64, f64)], total: f64, probability: f64) -> f64 {
    let position = ((total - 1.0) * probability).max(0.0);
    let below = value_at(cases, position.floor());
    below + (value_at(cases, position.floor() + 1.0) - below) * position.fract()
}

/// The value of the case with this number, counted from 0 in ascending order.
fn value_at(cases: &[(f64, f64)], number: f64) -> f64 {
    let mut before = 0.0;
    for &(value, count) in cases {
        before += count;
        if before > number {
            return value;
        }
    }
    cases.last().map_or(f64::NAN, |&(value, _)| value)
}

fn rounded(value: f64) -> f64 {
    format!("{value:.3e}").parse().unwrap_or(value)
}
