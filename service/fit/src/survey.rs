//! The first pass: totals, tables, means, ranges.

use std::collections::{BinaryHeap, HashSet};

use kilter_model::Form;

use crate::chunk::{Chunk, ChunkColumn};
use crate::moments::Moments;
use crate::plan::{FieldPlan, FormPlan, Plan};
use crate::reduce::{BinaryCounter, Compensated, Merge, add_all};
use crate::split::draw;
use crate::table::sum_window;

/// How many values of a spline field are kept to place its knots. Up to this many rows the knots
/// are exact quantiles; of more rows a random sample is taken.
const SAMPLE_ROWS: usize = 100_000;

/// Rows, cases and weight.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub(crate) struct Totals {
    pub(crate) rows: u64,
    pub(crate) count: Compensated,
    pub(crate) weight: Compensated,
    /// Sum over cases of the square of the sampling weight.
    pub(crate) squares: Compensated,
}

impl Totals {
    fn add(&mut self, count: f64, weight: f64) {
        self.rows += 1;
        self.squares.add(weight * weight / count);
        self.count.add(count);
        self.weight.add(weight);
    }
}

impl Merge for Totals {
    fn merge(&mut self, later: Self) {
        self.rows += later.rows;
        self.count.merge(later.count);
        self.weight.merge(later.weight);
        self.squares.merge(later.squares);
    }
}

/// What is known of a number.
#[derive(Debug, Clone, PartialEq, Default)]
pub(crate) struct NumberSurvey {
    /// The number itself.
    pub(crate) value: Moments,
    /// The columns of its form; for a spline of the number only.
    pub(crate) columns: Vec<Moments>,
    pub(crate) missing_rows: u64,
    /// Smallest and largest number with each category.
    pub(crate) by_category: Vec<[f64; 2]>,
}

/// What is known of one field.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum FieldSurvey {
    Number(NumberSurvey),
    /// Levels, or false and true of a flag: cases by level and category.
    Levels {
        cases: Vec<Vec<f64>>,
    },
}

/// What is known of all rows of the fit. Categories and levels go by their first numbers.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Survey {
    pub(crate) total: Totals,
    pub(crate) categories: Vec<Totals>,
    pub(crate) fields: Vec<FieldSurvey>,
}

impl Survey {
    fn of(chunk: &Chunk, forms: &[Option<Form>]) -> Self {
        let mut total = Totals::default();
        let mut categories: Vec<Totals> = Vec::new();
        for row in 0..chunk.rows() {
            total.add(chunk.count[row], chunk.weight[row]);
            slot(&mut categories, chunk.category[row]).add(chunk.count[row], chunk.weight[row]);
        }
        let fields = chunk.fields.iter().zip(forms).map(|(column, form)| match (column, form) {
            (ChunkColumn::Numbers(numbers), Some(form)) => survey_number(chunk, numbers, form),
            (ChunkColumn::Numbers(flags), None) => {
                survey_levels(chunk, flags.iter().map(|&flag| flag as u32))
            }
            (ChunkColumn::Levels(levels), _) => survey_levels(chunk, levels.iter().copied()),
        });
        Self { total, fields: fields.collect(), categories }
    }

    /// What is known of a number; nothing of a field that is none.
    pub(crate) fn number(&self, field: usize) -> NumberSurvey {
        match &self.fields[field] {
            FieldSurvey::Number(number) => number.clone(),
            FieldSurvey::Levels { .. } => NumberSurvey::default(),
        }
    }
}

impl Merge for Survey {
    fn merge(&mut self, later: Self) {
        self.total.merge(later.total);
        for (category, totals) in later.categories.into_iter().enumerate() {
            slot(&mut self.categories, category as u32).merge(totals);
        }
        for (field, other) in self.fields.iter_mut().zip(later.fields) {
            field.merge(other);
        }
    }
}

impl Merge for NumberSurvey {
    fn merge(&mut self, later: Self) {
        self.value.merge(later.value);
        for (column, later) in self.columns.iter_mut().zip(later.columns) {
            column.merge(later);
        }
        self.missing_rows += later.missing_rows;
        for (category, [low, high]) in later.by_category.into_iter().enumerate() {
            extend(range_slot(&mut self.by_category, category as u32), low, high);
        }
    }
}

impl Merge for FieldSurvey {
    fn merge(&mut self, later: Self) {
        match (self, later) {
            (Self::Number(number), Self::Number(later)) => number.merge(later),
            (Self::Levels { cases }, Self::Levels { cases: later }) => {
                for (level, by_category) in later.into_iter().enumerate() {
                    let sums = slot(cases, level as u32);
                    sums.resize(sums.len().max(by_category.len()), 0.0);
                    add_all(sums, &by_category);
                }
            }
            _ => {}
        }
    }
}

fn slot<T: Default + Clone>(slots: &mut Vec<T>, index: u32) -> &mut T {
    let index = index as usize;
    if slots.len() <= index {
        slots.resize(index + 1, T::default());
    }
    &mut slots[index]
}

fn range_slot(slots: &mut Vec<[f64; 2]>, index: u32) -> &mut [f64; 2] {
    let index = index as usize;
    if slots.len() <= index {
        slots.resize(index + 1, [f64::INFINITY, f64::NEG_INFINITY]);
    }
    &mut slots[index]
}

fn extend(range: &mut [f64; 2], low: f64, high: f64) {
    *range = [range[0].min(low), range[1].max(high)];
}

fn survey_number(chunk: &Chunk, numbers: &[f64], form: &Form) -> FieldSurvey {
    let weighted = numbers.iter().copied().zip(chunk.weight.iter().copied());
    let value = Moments::of(weighted.clone());
    let column = |basis| match form {
        Form::AsIs => value,
        _ => Moments::of(weighted.clone().map(move |(number, weight)| (form.column(basis, number), weight))),
    };
    let categories = chunk.category.iter().max().map_or(0, |last| *last as usize + 1);
    let mut by_category = vec![[f64::INFINITY, f64::NEG_INFINITY]; categories];
    for (&number, &category) in numbers.iter().zip(&chunk.category) {
        if !number.is_nan() {
            extend(&mut by_category[category as usize], number, number);
        }
    }
    FieldSurvey::Number(NumberSurvey {
        columns: (0..form.columns()).map(column).collect(),
        value,
        missing_rows: numbers.iter().filter(|number| number.is_nan()).count() as u64,
        by_category,
    })
}

fn survey_levels(chunk: &Chunk, levels: impl Iterator<Item = u32>) -> FieldSurvey {
    let mut cases: Vec<Vec<f64>> = Vec::new();
    for ((level, &category), &count) in levels.zip(&chunk.category).zip(&chunk.count) {
        *slot(slot(&mut cases, level), category) += count;
    }
    FieldSurvey::Levels { cases }
}

/// A value of a spline field in the sample.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Sampled {
    draw: u64,
    pub(crate) value: f64,
    pub(crate) count: f64,
    pub(crate) weight: f64,
}

impl Eq for Sampled {}

impl PartialOrd for Sampled {
    fn partial_cmp(&self, other: &Self) -> Option<std::cmp::Ordering> {
        Some(self.cmp(other))
    }
}

impl Ord for Sampled {
    fn cmp(&self, other: &Self) -> std::cmp::Ordering {
        self.draw.cmp(&other.draw)
    }
}

/// The values of the rows with the smallest draws.
#[derive(Debug, Clone, Default)]
pub(crate) struct Sample {
    heap: BinaryHeap<Sampled>,
    /// Whether rows were left out.
    pub(crate) partial: bool,
}

impl Sample {
    fn add(&mut self, sampled: Sampled) {
        self.heap.push(sampled);
        if self.heap.len() > SAMPLE_ROWS {
            self.heap.pop();
            self.partial = true;
        }
    }

    /// The sample in the order of its draws, which is a fixed one.
    pub(crate) fn values(&self) -> Vec<Sampled> {
        let mut values: Vec<Sampled> = self.heap.iter().copied().collect();
        values.sort();
        values
    }
}

/// Surveys chunk after chunk.
#[derive(Debug)]
pub(crate) struct Surveyor {
    /// For each number field its form; a spline has no knots yet and counts as the plain number.
    forms: Vec<Option<Form>>,
    /// For each spline field a sample.
    samples: Vec<Option<Sample>>,
    sums: BinaryCounter<Survey>,
    rows: u64,
    clusters: HashSet<u64>,
}

impl Surveyor {
    pub(crate) fn new(plan: &Plan) -> Self {
        let form = |field: &FieldPlan| match field {
            FieldPlan::Number(number) => Some(match number.form {
                FormPlan::AsIs | FormPlan::Spline(_) => Form::AsIs,
                FormPlan::Log => Form::Log,
                FormPlan::Log1p => Form::Log1p,
                FormPlan::Polynomial(degree) => Form::Polynomial(degree),
            }),
            FieldPlan::Levels(_) | FieldPlan::Flag(_) => None,
        };
        let sample = |field: &FieldPlan| match field {
            FieldPlan::Number(number) if matches!(number.form, FormPlan::Spline(_)) => {
                Some(Sample::default())
            }
            _ => None,
        };
        Self {
            forms: plan.fields.iter().map(form).collect(),
            samples: plan.fields.iter().map(sample).collect(),
            sums: BinaryCounter::new(),
            rows: 0,
            clusters: HashSet::new(),
        }
    }

    /// Surveys the next chunks, each on its own thread.
    pub(crate) fn add(&mut self, chunks: &[Chunk]) {
        for chunk in chunks {
            self.sample(chunk);
        }
        let forms = &self.forms;
        sum_window(chunks, &|chunk: &Chunk| Survey::of(chunk, forms), &mut self.sums);
    }

    fn sample(&mut self, chunk: &Chunk) {
        for (field, sample) in self.samples.iter_mut().enumerate() {
            let Some(sample) = sample else { continue };
            for (row, &value) in chunk.numbers(field).iter().enumerate().filter(|(_, value)| !value.is_nan())
            {
                let draw = draw(self.rows + row as u64, 0);
                sample.add(Sampled { draw, value, count: chunk.count[row], weight: chunk.weight[row] });
            }
        }
        self.rows += chunk.rows() as u64;
        self.clusters.extend(&chunk.cluster);
    }

    /// Number of clusters so far.
    pub(crate) fn clusters(&self) -> u64 {
        self.clusters.len() as u64
    }

    /// The survey, `None` where there was no row, and the samples of spline fields.
    pub(crate) fn finish(self) -> (Option<Survey>, Vec<Option<Sample>>) {
        (self.sums.finish(), self.samples)
    }
}
