//! Segments: which parts of the records the model is wrong on, and whether it is wrong there alone.

use serde::Serialize;

use crate::calibration::{ScoreTests, estimates};
use crate::field_shift::{FieldShift, Movement, ShiftBin, field_shifts};
use crate::frame::Frame;
use crate::quadratic::{grouped, quadratic};
use crate::score_sums::{FEWEST_EXPECTED, Pools, ScoreSums};
use crate::statistic::Statistic;
use crate::summary::Summary;
use crate::training::TrainingUncertainty;

/// False discovery rate at which segments are called wrong.
const DISCOVERY_RATE: f64 = 0.05;
/// False discovery rate at which a segment is called apart from the others.
const DISCOVERY_RATE_APART: f64 = 0.01;
/// Share of the segments up to which being apart points at them and not at the whole.
const LARGEST_SHARE_APART: f64 = 1.0 / 3.0;

/// One segment as it comes in.
#[derive(Debug, Clone, Copy)]
pub struct Segment<'a> {
    /// What the segments are of: the name of a field.
    pub label: &'a str,
    /// Value of the field in this segment.
    pub value: &'a str,
    /// Summary of its records, over the same closed windows as the whole.
    pub summary: &'a Summary,
}

/// All segments of one label.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SegmentGroup {
    /// The label.
    pub label: String,
    /// Its segments, the largest misfit first.
    pub segments: Vec<SegmentRow>,
    /// Values of the segments to look at first: the few that are apart from all others.
    pub look_at: Vec<String>,
}

/// One segment.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SegmentRow {
    /// Value of the label.
    pub value: String,
    /// Records scored.
    pub scored: f64,
    /// Those with an outcome.
    pub outcomes: f64,
    /// Intercepts and slope, as for the whole.
    pub joint: Statistic,
    /// Whether the model is wrong here, false discoveries over the segments of the label kept to
    /// 5 % (Benjamini and Hochberg 1995).
    pub wrong: bool,
    /// Intercepts here once the rest is recalibrated by its one-step estimates.
    pub apart: Statistic,
    /// Whether this is one of the few segments apart from the rest, false discoveries kept to 1 %.
    pub is_apart: bool,
    /// Category with the largest gap between shares observed and promised.
    pub largest_gap: Option<SegmentGap>,
    /// Largest intercept of a category but the reference after shrinkage towards the mean of the
    /// segments: what to rank by.
    pub shrunk_intercept: Option<ShrunkIntercept>,
    /// Mean log-loss.
    pub log_loss: Option<f64>,
    /// Mean log-loss that the model promised.
    pub expected_log_loss: Option<f64>,
    /// Promised log-loss above that on the holdout: records here are harder.
    pub harder: Option<f64>,
    /// The fields of the segment against the whole fit.
    pub fields: Vec<SegmentField>,
}

/// Gap of a category in a segment.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SegmentGap {
    /// The category.
    pub category: String,
    /// Share observed.
    pub observed_share: f64,
    /// Share promised.
    pub expected_share: f64,
}

/// Intercept of a category in a segment, shrunk.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ShrunkIntercept {
    /// The category.
    pub category: String,
    /// The intercept after shrinkage.
    pub intercept: f64,
    /// Its standard deviation.
    pub deviation: f64,
}

/// What a segment shows of a field. A field replaced by its mean leaves the probabilities nearly
/// calibrated; it shows here, as nearly all records in one bin.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SegmentField {
    /// The field.
    pub field: String,
    /// Debiased shift index against the whole fit.
    pub excess: Option<f64>,
    /// What the shift amounts to.
    pub movement: Movement,
    /// Share of the records without the value.
    pub missing_share: Option<f64>,
    /// Share of the records with an unseen level or a number outside the range of the fit.
    pub foreign_share: Option<f64>,
    /// The bin with the most records.
    pub fullest_bin: Option<ShiftBin>,
}

/// Statistics of segments, grouped by label in order of appearance. `whole` is the summary of all
/// records over the same windows, of which the segments of one label are parts.
pub fn segment_groups(frame: &Frame, whole: &Summary, segments: &[Segment]) -> Vec<SegmentGroup> {
    let mut labels: Vec<&str> = Vec::new();
    for segment in segments {
        if !labels.contains(&segment.label) {
            labels.push(segment.label);
        }
    }
    let whole = ScoreSums::new(whole);
    labels
        .into_iter()
        .map(|label| {
            let members: Vec<Member> = segments
                .iter()
                .filter(|segment| segment.label == label)
                .map(|segment| Member::new(frame, segment))
                .collect();
            segment_group(frame, &whole, label, &members)
        })
        .collect()
}

/// A segment with its sums.
struct Member<'a> {
    segment: &'a Segment<'a>,
    sums: ScoreSums,
    phi: Option<f64>,
}

impl<'a> Member<'a> {
    fn new(frame: &Frame, segment: &'a Segment) -> Self {
        let phi = TrainingUncertainty::new(frame, segment.summary).phi;
        Self { segment, sums: ScoreSums::new(segment.summary), phi }
    }
}

fn segment_group(frame: &Frame, whole: &ScoreSums, label: &str, members: &[Member]) -> SegmentGroup {
    let mut rows: Vec<SegmentRow> = members.iter().map(|member| segment_row(frame, member)).collect();
    let joint: Vec<Option<f64>> = rows.iter().map(|row| row.joint.valid_p()).collect();
    let wrong = discoveries(&joint, DISCOVERY_RATE);
    let (apart, look_at) = apart_from_the_rest(frame, whole, members);
    let shrunk = shrunk_intercepts(frame, members, &rows);
    for (index, row) in rows.iter_mut().enumerate() {
        row.wrong = wrong[index];
        row.apart = apart[index];
        row.is_apart = look_at.contains(&index);
        row.shrunk_intercept.clone_from(&shrunk[index]);
    }
    let look_at = look_at.iter().map(|index| rows[*index].value.clone()).collect();
    let size = |row: &SegmentRow| row.shrunk_intercept.as_ref().map_or(0.0, |shrunk| shrunk.intercept.abs());
    rows.sort_by(|a, b| size(b).total_cmp(&size(a)));
    SegmentGroup { label: label.to_owned(), segments: rows, look_at }
}

/// For each segment its test against the rest, and the indices of the few that are apart.
///
/// Segments are set aside one by one, the one furthest off first, until no other differs from the
/// rest. Where more than a third would have to go, no segment is apart: the whole is.
fn apart_from_the_rest(frame: &Frame, whole: &ScoreSums, members: &[Member]) -> (Vec<Statistic>, Vec<usize>) {
    let test_all = |rest: &ScoreSums, aside: &[usize]| -> Vec<Statistic> {
        let within = |index: usize| !aside.contains(&index);
        members.iter().enumerate().map(|(index, member)| apart(frame, rest, member, within(index))).collect()
    };
    let all = test_all(whole, &[]);
    let tested = all.iter().filter(|test| test.valid_p().is_some()).count();
    let most = (LARGEST_SHARE_APART * tested as f64).floor() as usize;
    let mut rest = whole.clone();
    let mut aside: Vec<usize> = Vec::new();
    loop {
        let tests = test_all(&rest, &aside);
        let p: Vec<Option<f64>> = tests
            .iter()
            .enumerate()
            .map(|(index, test)| test.valid_p().filter(|_| !aside.contains(&index)))
            .collect();
        let found = discoveries(&p, DISCOVERY_RATE_APART);
        let value = |index: &usize| tests[*index].statistic.unwrap_or(0.0);
        let furthest =
            (0..members.len()).filter(|index| found[*index]).max_by(|a, b| value(a).total_cmp(&value(b)));
        match furthest {
            None => return (tests, aside),
            Some(_) if aside.len() == most => return (all, Vec::new()),
            Some(index) => {
                rest = rest.without(&members[index].sums);
                aside.push(index);
            }
        }
    }
}

fn segment_row(frame: &Frame, member: &Member) -> SegmentRow {
    let (summary, sums) = (member.segment.summary, &member.sums);
    let tests = ScoreTests::new(sums, frame.expected_slope(), FEWEST_EXPECTED);
    let mean = |sum: f64| (sums.n > 0.0).then(|| sum / sums.n);
    let expected_log_loss = mean(summary.outcomes.entropy.value());
    SegmentRow {
        value: member.segment.value.to_owned(),
        scored: summary.scored(),
        outcomes: sums.n,
        joint: Statistic::chi_square(tests.joint.value, tests.joint.rank, member.phi, sums.n, tests.enough),
        wrong: false,
        apart: Statistic::unavailable(sums.n),
        is_apart: false,
        largest_gap: largest_gap(frame, sums),
        shrunk_intercept: None,
        log_loss: mean(summary.outcomes.loss.values().iter().sum()),
        expected_log_loss,
        harder: frame
            .holdout
            .as_ref()
            .zip(expected_log_loss)
            .map(|(known, now)| now - known.log_loss_expected),
        fields: field_shifts(frame, summary).iter().map(segment_field).collect(),
    }
}

/// Score test of a segment's intercepts once the rest is recalibrated by its one-step intercepts and
/// slope: the score of the segment less what that explains. The estimates share records with a
/// segment `within` the rest, which takes from its variance; otherwise they add to it.
fn apart(frame: &Frame, rest: &ScoreSums, member: &Member, within: bool) -> Statistic {
    let (theta, inverse) = rest.one_step(frame.reference);
    let (mut score, information) = member.sums.free(frame.reference);
    let size = score.len();
    let mut variance = information.clone();
    let sign = if within { -1.0 } else { 1.0 };
    for row in 0..size {
        let of_row = &information[row * size..(row + 1) * size];
        score[row] -= of_row.iter().zip(&theta).map(|(entry, theta)| entry * theta).sum::<f64>();
        for column in 0..size {
            let mut explained = 0.0;
            for (a, entry) in of_row.iter().enumerate() {
                for b in 0..size {
                    explained += entry * inverse[a * size + b] * information[b * size + column];
                }
            }
            variance[row * size + column] += sign * explained;
        }
    }
    let pools = Pools::new(&member.sums.expected, FEWEST_EXPECTED);
    let groups = pools.without_reference(frame.reference);
    let (score, variance) = grouped(&score, &variance, &groups, pools.count.saturating_sub(1));
    let form = quadratic(&score, &variance);
    let n = member.sums.n;
    let enough = member.sums.is_enough(&pools) && (!within || n < rest.n);
    Statistic::chi_square(form.value, form.rank, member.phi, n, enough)
}

fn largest_gap(frame: &Frame, sums: &ScoreSums) -> Option<SegmentGap> {
    let gap = |category: &usize| (sums.observed[*category] - sums.expected[*category]).abs();
    let category = (0..sums.categories()).max_by(|a, b| gap(a).total_cmp(&gap(b)))?;
    (sums.n > 0.0).then(|| SegmentGap {
        category: frame.categories[category].clone(),
        observed_share: sums.observed[category] / sums.n,
        expected_share: sums.expected[category] / sums.n,
    })
}

fn segment_field(shift: &FieldShift) -> SegmentField {
    let foreign = shift.unseen.or(shift.outside);
    let share = |bin: &ShiftBin| bin.share.unwrap_or(0.0);
    let fullest = shift.bins.iter().max_by(|a, b| share(a).total_cmp(&share(b)));
    SegmentField {
        field: shift.field.clone(),
        excess: shift.shift.excess,
        movement: shift.shift.movement,
        missing_share: shift.missing.share,
        foreign_share: foreign.and_then(|rate| rate.share),
        fullest_bin: fullest.filter(|bin| bin.share.is_some()).cloned(),
    }
}

/// For each segment its largest shrunk intercept, over the segments that could be tested.
fn shrunk_intercepts(frame: &Frame, members: &[Member], rows: &[SegmentRow]) -> Vec<Option<ShrunkIntercept>> {
    let mut largest: Vec<Option<ShrunkIntercept>> = vec![None; rows.len()];
    let tested: Vec<usize> = (0..rows.len()).filter(|row| rows[*row].joint.valid_p().is_some()).collect();
    let fit = |row: &usize| estimates(frame, &members[*row].sums, members[*row].phi);
    let fits: Vec<_> = tested.iter().map(fit).collect();
    for (entry, category) in frame.compared().enumerate() {
        let usable: Vec<(usize, f64, f64)> = tested
            .iter()
            .zip(&fits)
            .filter_map(|(row, fit)| {
                let estimate = fit.intercepts[entry].estimate;
                estimate
                    .standard_error
                    .filter(|error| *error > 0.0)
                    .map(|error| (*row, estimate.estimate, error))
            })
            .collect();
        let (values, errors): (Vec<f64>, Vec<f64>) =
            usable.iter().map(|(_, value, error)| (value, error)).unzip();
        let Some(shrinkage) = shrink(&values, &errors) else { continue };
        for ((row, _, _), (intercept, deviation)) in
            usable.iter().zip(shrinkage.values.iter().zip(&shrinkage.deviations))
        {
            let larger = largest[*row].as_ref().is_none_or(|known| intercept.abs() > known.intercept.abs());
            if larger {
                let category = frame.categories[category].clone();
                largest[*row] =
                    Some(ShrunkIntercept { category, intercept: *intercept, deviation: *deviation });
            }
        }
    }
    largest
}

/// Which hypotheses are rejected at a false discovery rate (Benjamini and Hochberg 1995); those
/// without a p-value are no part of the family.
pub fn discoveries(p: &[Option<f64>], rate: f64) -> Vec<bool> {
    let mut known: Vec<f64> = p.iter().flatten().copied().collect();
    known.sort_by(f64::total_cmp);
    let count = known.len() as f64;
    let line = |(rank, p): (usize, &f64)| (*p <= rate * (rank + 1) as f64 / count).then_some(*p);
    let cut = known.iter().enumerate().filter_map(line).next_back();
    p.iter().map(|p| p.zip(cut).is_some_and(|(p, cut)| p <= cut)).collect()
}

/// Estimates drawn towards their mean.
#[derive(Debug, Clone, PartialEq)]
pub struct Shrinkage {
    /// Variance between the true values.
    pub between: f64,
    /// Their mean.
    pub mean: f64,
    /// The estimates after shrinkage.
    pub values: Vec<f64>,
    /// Their standard deviations.
    pub deviations: Vec<f64>,
}

/// Normal-normal shrinkage of estimates with standard errors; the variance between them by the
/// moments of DerSimonian and Laird (1986). `None` for fewer than two estimates.
pub fn shrink(estimates: &[f64], errors: &[f64]) -> Option<Shrinkage> {
    if estimates.len() < 2 || estimates.len() != errors.len() {
        return None;
    }
    let weights: Vec<f64> = errors.iter().map(|error| 1.0 / (error * error)).collect();
    let total: f64 = weights.iter().sum();
    let squares: f64 = weights.iter().map(|weight| weight * weight).sum();
    let centre = weighted_mean(estimates, &weights);
    let q: f64 =
        estimates.iter().zip(&weights).map(|(value, weight)| weight * (value - centre).powi(2)).sum();
    let between = ((q - (estimates.len() - 1) as f64) / (total - squares / total)).max(0.0);
    let marginal: Vec<f64> = errors.iter().map(|error| 1.0 / (error * error + between)).collect();
    let mean = weighted_mean(estimates, &marginal);
    let mean_variance = 1.0 / marginal.iter().sum::<f64>();
    let kept = |error: f64| between / (between + error * error);
    let values =
        estimates.iter().zip(errors).map(|(value, error)| mean + kept(*error) * (value - mean)).collect();
    let deviations = errors
        .iter()
        .map(|error| (kept(*error) * error * error + (1.0 - kept(*error)).powi(2) * mean_variance).sqrt())
        .collect();
    Some(Shrinkage { between, mean, values, deviations })
}

fn weighted_mean(values: &[f64], weights: &[f64]) -> f64 {
    values.iter().zip(weights).map(|(value, weight)| value * weight).sum::<f64>()
        / weights.iter().sum::<f64>()
}
