//! Fields: whether their values fall where they fell in the fit, and whether the feed delivers
//! them at all.

#[cfg(test)]
mod tests;

use kilter_model::FieldBaseline;
use serde::Serialize;

use crate::frame::{FieldBins, FieldLayout, Frame, PROBABILITY_BINS};
use crate::statistic::Statistic;
use crate::summary::{FieldPart, Summary};
use crate::tails::{beta_binomial_upper, hypergeometric_upper_mid_p, normal_upper};

/// Debiased index from which a field has moved, and from which it has moved strongly.
const MOVED: f64 = 0.1;
const STRONGLY_MOVED: f64 = 0.25;
/// P-value that a shift or a rate must fall below to be flagged: pages are watched all the time.
const FLAG_P: f64 = 1e-5;
/// Records per bin below which a shift is not judged.
const FEWEST_PER_BIN: f64 = 5.0;
/// Bins with less than this share of the fit are put together.
const RARE: f64 = 0.005;
/// Records below which a rate is not flagged, and the share that it must reach.
const FEWEST_FOR_RATE: f64 = 20.0;
const SMALLEST_FLAGGED_SHARE: f64 = 0.01;
/// Marked records up to which the exact hypergeometric is computed.
const LARGEST_EXACT: f64 = 1000.0;

/// What the shift of a distribution amounts to.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Movement {
    /// As in the fit, as far as chance allows to say.
    Steady,
    /// Surely another distribution, but too little to matter.
    SmallButReal,
    /// Moved.
    Moved,
    /// Moved strongly.
    StronglyMoved,
    /// Too few records to judge.
    TooFew,
    /// Nothing is known about the fit to compare with.
    Unknown,
}

/// Shift of a distribution over bins.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Shift {
    /// The index `sum (a - e) ln(a / e)` over the shares a now and e in the fit, half a record
    /// added to every bin.
    pub index: Option<f64>,
    /// The index that no shift at all would show: `(bins - 1)(1/n + 1/N)`.
    pub expected: Option<f64>,
    /// The difference of the two: what the bands 0.1 and 0.25 are applied to.
    pub excess: Option<f64>,
    /// `index / (1/n + 1/N)`, chi-square without shift (Yurdakul and Naranjo 2020).
    pub test: Statistic,
    /// What it amounts to.
    pub movement: Movement,
}

/// One bin now and in the fit.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ShiftBin {
    /// The bin in words.
    pub bin: String,
    /// Share of the records now.
    pub share: Option<f64>,
    /// Share in the fit.
    pub training_share: Option<f64>,
}

/// How often something was wrong with a field.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Rate {
    /// Records concerned.
    pub count: f64,
    /// Records looked at.
    pub n: f64,
    /// Share of the records concerned.
    pub share: Option<f64>,
    /// Share in the fit.
    pub training_share: Option<f64>,
    /// Probability of so many or more if nothing had changed.
    pub p: Option<f64>,
    /// Whether it deserves attention: surely more than in the fit, at least twice as often, and in
    /// at least 1 % of the records.
    pub flagged: bool,
}

/// One field of a period.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct FieldShift {
    /// Name of the field.
    pub field: String,
    /// Shift of its distribution.
    pub shift: Shift,
    /// The bins, now and in the fit.
    pub bins: Vec<ShiftBin>,
    /// Records without the value.
    pub missing: Rate,
    /// Records with a level that the fit did not know; for levels only.
    pub unseen: Option<Rate>,
    /// Records with a number outside the range of the fit; for numbers only.
    pub outside: Option<Rate>,
}

/// Shift of the predicted probability of one category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct PredictionShift {
    /// The category.
    pub category: String,
    /// Shift of the distribution of its probability.
    pub shift: Shift,
}

/// Every field of the scored records.
pub fn field_shifts(frame: &Frame, summary: &Summary) -> Vec<FieldShift> {
    let parts = summary.fields.iter().zip(&frame.fields).enumerate();
    parts
        .map(|(index, (part, layout))| {
            let known = frame.baseline.as_ref().map(|baseline| &baseline.fields[index]);
            field_shift(layout, part, known)
        })
        .collect()
}

/// The distributions of the predicted probabilities of the scored records.
pub fn prediction_shifts(frame: &Frame, summary: &Summary) -> Vec<PredictionShift> {
    let of_category = |(category, name): (usize, &String)| {
        let live = &summary.scored.histogram[category * PROBABILITY_BINS..][..PROBABILITY_BINS];
        let known = frame.baseline.as_ref().map(|baseline| &baseline.probability_histogram[category]);
        let shift = known.map_or_else(
            || Shift::unknown(live.iter().sum()),
            |known| {
                let (live, known) = neighbours_merged(live, known);
                shift(&live, &known)
            },
        );
        PredictionShift { category: name.clone(), shift }
    };
    frame.categories.iter().enumerate().map(of_category).collect()
}

fn field_shift(layout: &FieldLayout, part: &FieldPart, known: Option<&FieldBaseline>) -> FieldShift {
    let training: Option<f64> = known.map(|known| known.counts.iter().sum());
    let labels = labels(&layout.bins);
    let share = |count: f64, n: f64| (n > 0.0).then(|| count / n);
    let bins = labels
        .into_iter()
        .enumerate()
        .map(|(bin, label)| ShiftBin {
            bin: label,
            share: share(part.bins[bin], part.binned()),
            training_share: known.zip(training).and_then(|(known, n)| share(known.counts[bin], n)),
        })
        .collect();
    let movement = known.map_or_else(
        || Shift::unknown(part.binned()),
        |known| {
            if matches!(layout.bins, FieldBins::Levels { .. }) {
                let (live, known) = rare_merged(&part.bins, &known.counts);
                shift(&live, &known)
            } else {
                shift(&part.bins, &known.counts)
            }
        },
    );
    let is_number = matches!(layout.bins, FieldBins::Number { .. });
    FieldShift {
        field: layout.name.clone(),
        shift: movement,
        bins,
        missing: missing_rate(part, known),
        unseen: (!is_number).then(|| unseen_rate(part, known)),
        outside: is_number.then(|| outside_rate(part, known)),
    }
}

/// Shift of counts over bins against the counts of the fit over the same bins.
///
/// # Shapes
/// `live` and `training`: one count per bin.
pub fn shift(live: &[f64], training: &[f64]) -> Shift {
    let n: f64 = live.iter().sum();
    let known: f64 = training.iter().sum();
    let bins = live.len() as f64;
    if n <= 0.0 || known <= 0.0 || live.len() < 2 {
        return Shift::unknown(n);
    }
    let index: f64 = live
        .iter()
        .zip(training)
        .map(|(count, before)| {
            let now = (count + 0.5) / (n + 0.5 * bins);
            let then = (before + 0.5) / (known + 0.5 * bins);
            (now - then) * (now / then).ln()
        })
        .sum();
    let scale = 1.0 / n + 1.0 / known;
    let expected = (bins - 1.0) * scale;
    let excess = index - expected;
    let enough = n >= FEWEST_PER_BIN * bins;
    // Both sides are counts, so the training uncertainty of the model does not enter.
    let test = Statistic::chi_square(index / scale, live.len() - 1, Some(1.0), n, enough);
    let sure = test.valid_p().is_some_and(|p| p < FLAG_P);
    let movement = match (enough, sure) {
        (false, _) => Movement::TooFew,
        (true, false) => Movement::Steady,
        (true, true) if excess >= STRONGLY_MOVED => Movement::StronglyMoved,
        (true, true) if excess >= MOVED => Movement::Moved,
        (true, true) => Movement::SmallButReal,
    };
    Shift { index: Some(index), expected: Some(expected), excess: Some(excess), test, movement }
}

impl Shift {
    fn unknown(n: f64) -> Self {
        let movement = Movement::Unknown;
        Self { index: None, expected: None, excess: None, test: Statistic::unavailable(n), movement }
    }
}

/// Levels rare in the fit put into one bin.
fn rare_merged(live: &[f64], training: &[f64]) -> (Vec<f64>, Vec<f64>) {
    let smallest = RARE * training.iter().sum::<f64>();
    let mut merged = (Vec::new(), Vec::new());
    let mut rest = (0.0, 0.0);
    let mut rare = false;
    for (count, known) in live.iter().zip(training) {
        if *known < smallest {
            rare = true;
            rest = (rest.0 + count, rest.1 + known);
        } else {
            merged.0.push(*count);
            merged.1.push(*known);
        }
    }
    if rare {
        merged.0.push(rest.0);
        merged.1.push(rest.1);
    }
    merged
}

/// Neighbouring bins put together until each holds at least 0.5 % of the fit.
fn neighbours_merged(live: &[f64], training: &[f64]) -> (Vec<f64>, Vec<f64>) {
    let smallest = RARE * training.iter().sum::<f64>();
    let mut merged = (Vec::new(), Vec::new());
    let mut open = (0.0, 0.0);
    for (count, known) in live.iter().zip(training) {
        open = (open.0 + count, open.1 + known);
        if open.1 > 0.0 && open.1 >= smallest {
            merged.0.push(open.0);
            merged.1.push(open.1);
            open = (0.0, 0.0);
        }
    }
    if let (Some(last), Some(last_known)) = (merged.0.last_mut(), merged.1.last_mut()) {
        *last += open.0;
        *last_known += open.1;
    }
    merged
}

fn missing_rate(part: &FieldPart, known: Option<&FieldBaseline>) -> Rate {
    let n = part.total();
    let Some(known) = known else { return Rate::new(part.missing, n, None, None) };
    let before = known.missing;
    let cases = known.counts.iter().sum::<f64>() + before;
    let p = if part.missing + before <= LARGEST_EXACT {
        hypergeometric_upper_mid_p(part.missing, part.missing + before, n, n + cases)
    } else {
        let pooled = (part.missing + before) / (n + cases);
        let deviation = (pooled * (1.0 - pooled) * (1.0 / n + 1.0 / cases)).sqrt();
        let z = (part.missing / n - before / cases) / deviation;
        z.is_finite().then(|| normal_upper(z))
    };
    Rate::new(part.missing, n, Some(before / cases), p)
}

/// A level never seen is judged by how many levels the fit saw once (n1) and twice (n2): with
/// `r = (n1 + 1) / (n1 + 1 + 2 n2)` the rate of new ones is beta with `(n1 + 1) r` and
/// `(N - n1) r` (Good 1953).
fn unseen_rate(part: &FieldPart, known: Option<&FieldBaseline>) -> Rate {
    let n = part.binned() + part.unseen;
    let Some(known) = known else { return Rate::new(part.unseen, n, None, None) };
    let cases: f64 = known.counts.iter().sum();
    let (a, b) = match known.rare_levels {
        Some([once, twice]) => {
            let (once, twice) = (once as f64, twice as f64);
            let r = (once + 1.0) / (once + 1.0 + 2.0 * twice);
            ((once + 1.0) * r, (cases - once) * r)
        }
        None => (0.5, cases + 0.5),
    };
    Rate::new(part.unseen, n, Some(0.0), beta_binomial_upper(part.unseen, n, a, b))
}

/// Of N numbers from one distribution, a further one falls outside their range with a probability
/// that is beta with parameters 2 and N - 1.
fn outside_rate(part: &FieldPart, known: Option<&FieldBaseline>) -> Rate {
    let n = part.binned();
    let Some(known) = known.filter(|known| known.observed.is_some()) else {
        return Rate::new(part.outside, n, None, None);
    };
    let cases: f64 = known.counts.iter().sum();
    Rate::new(part.outside, n, Some(0.0), beta_binomial_upper(part.outside, n, 2.0, cases - 1.0))
}

impl Rate {
    fn new(count: f64, n: f64, training_share: Option<f64>, p: Option<f64>) -> Self {
        let share = (n > 0.0).then(|| count / n);
        let flagged = n >= FEWEST_FOR_RATE
            && p.is_some_and(|p| p < FLAG_P)
            && share.is_some_and(|share| {
                share >= SMALLEST_FLAGGED_SHARE && share >= 2.0 * training_share.unwrap_or(0.0)
            });
        Self { count, n, share, training_share, p, flagged }
    }
}

fn labels(bins: &FieldBins) -> Vec<String> {
    match bins {
        FieldBins::Levels { levels } => levels.clone(),
        FieldBins::Flag => vec!["false".to_owned(), "true".to_owned()],
        FieldBins::Number { edges, .. } => interval_labels(edges),
    }
}

fn interval_labels(edges: &[f64]) -> Vec<String> {
    let (Some(first), Some(last)) = (edges.first(), edges.last()) else { return vec!["any".to_owned()] };
    let inner = edges.windows(2).map(|ends| format!("above {} up to {}", short(ends[0]), short(ends[1])));
    let (first, last) = (format!("up to {}", short(*first)), format!("above {}", short(*last)));
    std::iter::once(first).chain(inner).chain([last]).collect()
}

/// An edge for people: four significant digits, or all digits before the point.
fn short(edge: f64) -> String {
    let digits_before_point = if edge == 0.0 { 1.0 } else { edge.abs().log10().floor() + 1.0 };
    let decimals = (4.0 - digits_before_point).clamp(0.0, 12.0) as usize;
    let text = format!("{edge:.decimals$}");
    if decimals == 0 { text } else { text.trim_end_matches('0').trim_end_matches('.').to_owned() }
}
