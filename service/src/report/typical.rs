//! Effect curves: the probability of each category along one field, all others at typical values.

use kilter_fit::inference::{IntervalError, ProbabilityIntervals};
use kilter_model::{Field, FieldBaseline, ModelFile};

use crate::pages::plots::{CategoryCurve, Estimated};

/// Points of a curve along a number.
const POINTS: usize = 61;
/// Levels of a field that are shown, the most frequent ones.
const MOST_LEVELS: usize = 12;
/// Categories that are shown, the most frequent ones.
const MOST_CATEGORIES: usize = 8;
/// Level of the intervals.
const LEVEL: f64 = 0.95;

/// How the probabilities go along one field.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct EffectCurve {
    /// Name of the field, with its unit.
    pub(crate) title: String,
    /// What the points stand for.
    pub(crate) axis: Axis,
    /// One curve per category, the most frequent ones.
    pub(crate) curves: Vec<CategoryCurve>,
}

/// The values along a field.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum Axis {
    /// Numbers; with the inner deciles of the fitted rows.
    Number {
        /// Deciles.
        deciles: Vec<f64>,
    },
    /// Levels, the most frequent ones in the order of the model.
    Levels(Vec<String>),
}

/// A field held at a value typical of the fitted rows.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Typical {
    /// Name of the field.
    pub(crate) field: String,
    /// The value in words.
    pub(crate) words: String,
    /// The value as it is used.
    value: f64,
}

/// The typical value of each field: the median of a number, the most frequent level.
pub(crate) fn typical_values(model: &ModelFile) -> Vec<Typical> {
    let baselines = model.baseline.as_ref().map_or(&[][..], |baseline| &baseline.fields);
    let of = |(position, field): (usize, &Field)| typical(field, baselines.get(position));
    model.fields.iter().enumerate().map(of).collect()
}

fn typical(field: &Field, baseline: Option<&FieldBaseline>) -> Typical {
    let most_frequent = || {
        let counts = baseline.map_or(&[][..], |baseline| &baseline.counts);
        (0..counts.len()).max_by(|a, b| counts[*a].total_cmp(&counts[*b])).unwrap_or(0)
    };
    let (value, words) = match field {
        Field::Number(number) => {
            let edges = baseline.map_or(&[][..], |baseline| &baseline.edges);
            let middle = edges.get(edges.len() / 2).copied();
            let value = middle.or(number.observed.map(|[low, high]| f64::midpoint(low, high))).unwrap_or(0.0);
            (value, with_unit(&crate::numbers::significant(value), number.unit.as_deref()))
        }
        Field::Levels(levels) => {
            let place = most_frequent();
            (place as f64, levels.levels.get(place).cloned().unwrap_or_default())
        }
        Field::Flag(_) => {
            let place = most_frequent().min(1);
            (place as f64, ["no", "yes"][place].to_owned())
        }
    };
    Typical { field: field.name().to_owned(), words, value }
}

fn with_unit(text: &str, unit: Option<&str>) -> String {
    unit.map_or_else(|| text.to_owned(), |unit| format!("{text} {unit}"))
}

/// The curves of all fields, in order. A number that was the same in all rows has none.
///
/// # Errors
/// [`IntervalError`] where the model file has no covariance.
pub(crate) fn effect_curves(model: &ModelFile) -> Result<Vec<EffectCurve>, IntervalError> {
    let intervals = ProbabilityIntervals::new(model, LEVEL)?;
    let values: Vec<f64> = typical_values(model).iter().map(|typical| typical.value).collect();
    let shown = shown_categories(model);
    let baselines = model.baseline.as_ref().map_or(&[][..], |baseline| &baseline.fields);
    let mut found = Vec::new();
    for (position, field) in model.fields.iter().enumerate() {
        let Some((title, axis, places)) = axis_of(field, baselines.get(position)) else { continue };
        let mut curves: Vec<CategoryCurve> = shown
            .iter()
            .map(|&category| CategoryCurve {
                category: model.outcome.categories[category].clone(),
                points: Vec::with_capacity(places.len()),
            })
            .collect();
        let mut record = values.clone();
        for (number, place) in places.into_iter().enumerate() {
            record[position] = place;
            let found = intervals.of_record(&record);
            let at = if matches!(axis, Axis::Number { .. }) { place } else { number as f64 };
            for (curve, &category) in curves.iter_mut().zip(&shown) {
                let probability = &found[category];
                let (probability, interval) = (probability.probability, probability.interval);
                curve.points.push(Estimated { at, probability, interval });
            }
        }
        found.push(EffectCurve { title, axis, curves });
    }
    Ok(found)
}

/// The span of a number without its long tails: from the first to the last decile, and as far again
/// to both sides.
fn without_tails([lowest, highest]: [f64; 2], deciles: &[f64]) -> [f64; 2] {
    match deciles {
        [first, .., last] => [lowest.max(2.0 * first - last), highest.min(2.0 * last - first)],
        _ => [lowest, highest],
    }
}

/// The most frequent categories, in model order.
fn shown_categories(model: &ModelFile) -> Vec<usize> {
    let weights = model.fit.as_ref().map_or(&[][..], |fit| &fit.category_weights);
    most_frequent(model.outcome.categories.len(), weights, MOST_CATEGORIES)
}

/// The places of the largest counts, in order of place.
fn most_frequent(size: usize, counts: &[f64], most: usize) -> Vec<usize> {
    let count = |place: usize| counts.get(place).copied().unwrap_or(0.0);
    let mut places: Vec<usize> = (0..size).collect();
    places.sort_by(|a, b| count(*b).total_cmp(&count(*a)));
    places.truncate(most);
    places.sort_unstable();
    places
}

/// Title, axis, and the values as they are used.
fn axis_of(field: &Field, baseline: Option<&FieldBaseline>) -> Option<(String, Axis, Vec<f64>)> {
    match field {
        Field::Number(number) => {
            let deciles = baseline.map_or_else(Vec::new, |baseline| baseline.edges.clone());
            let [low, high] =
                Some(without_tails(number.observed?, &deciles)).filter(|[low, high]| low < high)?;
            let title = match &number.unit {
                Some(unit) => format!("{} ({unit})", number.name),
                None => number.name.clone(),
            };
            let step = (high - low) / (POINTS - 1) as f64;
            let places =
                (0..POINTS).map(|point| if point + 1 == POINTS { high } else { low + point as f64 * step });
            Some((title, Axis::Number { deciles }, places.collect()))
        }
        Field::Levels(levels) => {
            let counts = baseline.map_or(&[][..], |baseline| &baseline.counts);
            let shown = most_frequent(levels.levels.len(), counts, MOST_LEVELS);
            let names = shown.iter().map(|&place| levels.levels[place].clone()).collect();
            Some((
                levels.name.clone(),
                Axis::Levels(names),
                shown.iter().map(|&place| place as f64).collect(),
            ))
        }
        Field::Flag(flag) => {
            Some((flag.name.clone(), Axis::Levels(vec!["no".into(), "yes".into()]), vec![0.0, 1.0]))
        }
    }
}
