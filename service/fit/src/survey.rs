//! The first pass: totals, tables, means, ranges.

use std::collections::{BinaryHeap, HashSet};

use kilter_model::Form;

use crate::chunk::{Chunk, ChunkColumn};
use crate::plan::{FieldPlan, FormPlan, Plan};
use crate::reduce::{BinaryCounter, Compensated, Merge, add_all};
use crate::split::draw;

/// How many values of a spline field are kept to place its knots. Up to this many rows the knots
/// are exact quantiles; of more rows a random sample is taken.
const SAMPLE_ROWS: usize = 100_000;

/// Weighted mean and squared deviations of numbers, with their range. Missing numbers are left
/// out.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Moments {
    pub(crate) weight: f64,
    pub(crate) mean: f64,
    /// Weighted sum of squared deviations from the mean.
    pub(crate) squares: f64,
    pub(crate) least: f64,
    pub(crate) most: f64,
}

impl Default for Moments {
    fn default() -> Self {
        Self { weight: 0.0, mean: 0.0, squares: 0.0, least: f64::INFINITY, most: f64::NEG_INFINITY }
    }
}

impl Moments {
    /// In two passes: first the mean, then the deviations from it.
    pub(crate) fn of(values: impl Iterator<Item = (f64, f64)> + Clone) -> Self {
        let present = values.filter(|(value, _)| !value.is_nan());
        let mut moments = Self::default();
        let mut sum = 0.0;
        for (value, weight) in present.clone() {
            moments.weight += weight;
            sum += weight * value;
            moments.least = moments.least.min(value);
            moments.most = moments.most.max(value);
        }
        if moments.weight > 0.0 {
            moments.mean = sum / moments.weight;
            moments.squares = present.map(|(value, weight)| weight * (value - moments.mean).powi(2)).sum();
        }
        moments
    }

    /// Standard deviation with the sum of weights as divisor; 0 for a constant, exactly.
    pub(crate) fn deviation(&self) -> f64 {
        if self.least < self.most { (self.squares / self.weight).sqrt() } else { 0.0 }
    }
}

impl Merge for Moments {
    /// Chan, Golub and LeVeque (1983).
    fn merge(&mut self, later: Self) {
        self.least = self.least.min(later.least);
        self.most = self.most.max(later.most);
        if later.weight == 0.0 {
            return;
        }
        let weight = self.weight + later.weight;
        let gap = later.mean - self.mean;
        self.mean += gap * (later.weight / weight);
        self.squares += later.squares + gap * gap * (self.weight * later.weight / weight);
        self.weight = weight;
    }
}

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

/// What is known of one field.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum FieldSurvey {
    /// A number: its own moments, those of each column of its form (for a spline of the number
    /// only), and its range in each category.
    Number { value: Moments, columns: Vec<Moments>, missing_rows: u64, by_category: Vec<[f64; 2]> },
    /// Levels, or false and true of a flag: cases by level and category.
    Levels { cases: Vec<Vec<f64>> },
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

impl Merge for FieldSurvey {
    fn merge(&mut self, later: Self) {
        match (self, later) {
            (
                Self::Number { value, columns, missing_rows, by_category },
                Self::Number { value: value_, columns: columns_, missing_rows: missing_, by_category: by_ },
            ) => {
                value.merge(value_);
                for (column, other) in columns.iter_mut().zip(columns_) {
                    column.merge(other);
                }
                *missing_rows += missing_;
                for (category, [low, high]) in by_.into_iter().enumerate() {
                    extend(range_slot(by_category, category as u32), low, high);
                }
            }
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
    let columns = (0..form.columns()).map(|basis| {
        Moments::of(weighted.clone().map(move |(number, weight)| (form.column(basis, number), weight)))
    });
    let mut by_category = Vec::new();
    for (&number, &category) in numbers.iter().zip(&chunk.category) {
        if !number.is_nan() {
            extend(range_slot(&mut by_category, category), number, number);
        }
    }
    FieldSurvey::Number {
        columns: columns.collect(),
        value: Moments::of(weighted),
        missing_rows: numbers.iter().filter(|number| number.is_nan()).count() as u64,
        by_category,
    }
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

    pub(crate) fn add(&mut self, chunk: &Chunk) {
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
        self.sums.push(Survey::of(chunk, &self.forms));
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

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn moments_of_large_numbers_keep_their_digits() {
        let value = |row: usize| 1e9 + if row.is_multiple_of(2) { 1.0 } else { -1.0 };
        let mut counter = BinaryCounter::new();
        for chunk in 0..25 {
            counter.push(Moments::of((0..4000).map(move |row| (value(chunk * 4000 + row), 1.0))));
        }
        let moments = counter.finish().unwrap();
        assert_eq!((moments.mean, moments.deviation()), (1e9, 1.0));
    }

    #[test]
    fn a_constant_has_no_deviation_whatever_the_rounding() {
        assert_eq!(Moments::of([(0.1, 1.0); 10].into_iter()).deviation(), 0.0);
    }

    proptest! {
        #[test]
        fn merged_moments_are_those_of_the_whole(
            values in prop::collection::vec((-1e3..1e3f64, 0.1..5.0f64), 2..60),
            cut in 0usize..60,
        ) {
            let (left, right) = values.split_at(cut.min(values.len()));
            let whole = Moments::of(values.iter().copied());
            let mut merged = Moments::of(left.iter().copied());
            merged.merge(Moments::of(right.iter().copied()));
            prop_assert!((merged.mean - whole.mean).abs() < 1e-10);
            prop_assert!((merged.squares - whole.squares).abs() < 1e-10 * (1.0 + whole.squares));
            prop_assert_eq!((merged.least, merged.most), (whole.least, whole.most));
        }
    }
}
