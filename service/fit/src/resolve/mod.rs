//! What the survey decides: the final categories, levels, knots and scales.

mod knots;
mod levels;

use kilter_model::{
    Design, Field, FlagField, Form, INTERCEPT, Means, MissingNumber, NumberField, Outcome, Spline,
};

use crate::chunk::{Chunk, ChunkColumn};
use crate::error::FitError;
use crate::layout::Scaling;
use crate::moments::Moments;
use crate::plan::{FieldPlan, FormPlan, LevelsPlan, MissingNumberPlan, NumberPlan, OutcomePlan, Plan};
use crate::reader::Reader;
use crate::survey::{FieldSurvey, NumberSurvey, Sample, Survey};

use knots::spline_knots;
use levels::LevelSet;

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
        let NumberSurvey { value, columns, missing_rows, by_category } = self.survey.number(index);
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
            MissingNumberPlan::MeanAndFlag if missing_rows > 0 => MissingNumber::MeanAndFlag(Means {
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
        let ranges = self.categories.reordered(&by_category, [f64::INFINITY, f64::NEG_INFINITY]);
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
