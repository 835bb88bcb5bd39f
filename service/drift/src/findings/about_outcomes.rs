//! Findings about outcomes: mix, calibration, log-loss, coverage, segments.

use super::words::{chance, count, list, percent};
use super::{Finding, FindingKind, Severity};
use crate::mix::CategoryMix;
use crate::report::Report;
use crate::segments::{SegmentField, SegmentGroup, SegmentRow};
use crate::statistic::Statistic;

/// Log-loss that a recalibration could win, in nats per record, from which a misfit is clear, and
/// from which it is severe.
const CLEAR_GAIN: f64 = 0.005;
const SEVERE_GAIN: f64 = 0.02;
/// Records of a segment from which, and share in one bin from which, a field looks stuck, and the
/// share of that bin in the fit up to which it does.
const FEWEST_FOR_STUCK: f64 = 100.0;
const STUCK_SHARE: f64 = 0.98;
const LARGEST_FORMER_SHARE: f64 = 0.5;
/// Ratio of the coverages of two categories from which it is told.
const UNEVEN: f64 = 1.1;
/// Most categories that one report speaks of one by one.
const MOST_CATEGORIES: usize = 3;

pub(super) fn findings(report: &Report, level: f64) -> Vec<Finding> {
    if report.training.training_cases.is_none() {
        let sentence = "The model file does not say what the model was fitted to, so the figures are shown \
                        without a judgement."
            .to_owned();
        return vec![Finding::new(FindingKind::NoBaseline, Severity::Note, "", sentence)];
    }
    let mut findings = Vec::new();
    let joint = &report.calibration.joint;
    findings.extend(coverage(report));
    match joint.valid_p() {
        None => findings.push(too_few(report)),
        Some(p) if p >= level => findings.push(agreement(report)),
        Some(p) => {
            let before = findings.len();
            findings.extend(mix(report, level));
            findings.extend(slope(report, level));
            if findings.len() == before {
                findings.push(misfit(report, p));
            }
        }
    }
    findings.extend(beyond_slope(report, level));
    findings.extend(surprises(report, level));
    findings.extend(against_holdout(report, level));
    findings.extend(report.segments.iter().flat_map(segments));
    findings
}

fn below(test: &Statistic, level: f64) -> Option<f64> {
    test.valid_p().filter(|p| *p < level)
}

/// How much log-loss a recalibration could win, chance taken off: `phi (T - df) / 2n`.
fn gain(report: &Report, test: &Statistic) -> f64 {
    let phi = report.training.phi.unwrap_or(1.0);
    match (test.statistic, test.df) {
        (Some(value), Some(df)) if test.n > 0.0 => (phi * (value - df as f64) / (2.0 * test.n)).max(0.0),
        _ => 0.0,
    }
}

fn severity(gain: f64) -> Severity {
    if gain >= SEVERE_GAIN {
        Severity::Severe
    } else if gain >= CLEAR_GAIN {
        Severity::Clear
    } else {
        Severity::Slight
    }
}

fn too_few(report: &Report) -> Finding {
    let sentence = format!(
        "There are {} records with an outcome, too few to say whether the probabilities are right.",
        count(report.outcomes)
    );
    Finding::new(FindingKind::TooFewOutcomes, Severity::Note, "", sentence)
}

fn agreement(report: &Report) -> Finding {
    let sentence = format!(
        "The outcomes of {} records agree with the probabilities: the largest gap between a share observed and \
         promised is {:.1} percentage points, no more than chance gives.",
        count(report.outcomes),
        report.mix.gap.unwrap_or(0.0)
    );
    Finding::new(FindingKind::Calibration, Severity::Note, "", sentence)
}

fn mix(report: &Report, level: f64) -> Vec<Finding> {
    if below(&report.mix.joint, level).is_none() {
        return Vec::new();
    }
    let severity = severity(gain(report, &report.mix.joint));
    let mut off: Vec<(&CategoryMix, f64)> = report
        .mix
        .categories
        .iter()
        .filter_map(|category| below(&category.test, level).map(|p| (category, p)))
        .collect();
    off.sort_by(|a, b| a.1.total_cmp(&b.1));
    off.truncate(MOST_CATEGORIES);
    off.into_iter().map(|(category, p)| category_off(category, p, severity)).collect()
}

fn category_off(category: &CategoryMix, p: f64, severity: Severity) -> Finding {
    let (observed, expected) = (category.observed, category.expected);
    let direction = if observed > expected { "more" } else { "fewer" };
    let sentence = format!(
        "`{}` was observed {} times where the model promised {} ({} {direction}). If the model were right, so \
         large a gap would come up in {}.",
        category.category,
        count(observed),
        count(expected),
        percent((observed / expected - 1.0).abs()),
        chance(p)
    );
    Finding::new(FindingKind::Mix, severity, &category.category, sentence)
}

fn slope(report: &Report, level: f64) -> Option<Finding> {
    let p = below(&report.calibration.slope, level)?;
    let estimates = &report.calibration.estimates;
    let (slope, wanted) = (estimates.slope.estimate, estimates.expected_slope);
    let what = if slope < wanted {
        "too extreme: high ones come true less often than they say, and low ones more often"
    } else {
        "too timid: high ones come true more often than they say, and low ones less often"
    };
    let sentence = format!(
        "The probabilities are {what} (slope {slope:.2} where {wanted:.2} is to be expected). If the model were \
         right, this would come up in {}.",
        chance(p)
    );
    Some(Finding::new(FindingKind::Slope, severity(gain(report, &report.calibration.slope)), "", sentence))
}

fn misfit(report: &Report, p: f64) -> Finding {
    let sentence = format!(
        "Taken together, the outcomes of {} records do not agree with the probabilities. If the model were right, \
         this would come up in {}.",
        count(report.outcomes),
        chance(p)
    );
    Finding::new(FindingKind::Calibration, severity(gain(report, &report.calibration.joint)), "", sentence)
}

fn beyond_slope(report: &Report, level: f64) -> Option<Finding> {
    let test = &report.calibration.beyond_slope;
    let p = below(test, level)?;
    let sentence = format!(
        "Some of the misfit cannot be repaired by shifting or stretching the log-odds: categories have become \
         likelier or less likely in places only. If the model were right, this would come up in {}.",
        chance(p)
    );
    Some(Finding::new(FindingKind::Calibration, severity(gain(report, test)), "", sentence))
}

fn surprises(report: &Report, level: f64) -> Option<Finding> {
    let surprises = &report.log_loss.surprises;
    let p = below(&surprises.test, level)?;
    let sentence = format!(
        "{} outcomes were of categories that the model had given less than one chance in a thousand; {:.1} were to \
         be expected. If model and feed were right, so many would come up in {}. Swapped labels look like this.",
        count(surprises.observed),
        surprises.expected,
        chance(p)
    );
    Some(Finding::new(FindingKind::Surprises, Severity::Clear, "", sentence))
}

fn against_holdout(report: &Report, level: f64) -> Option<Finding> {
    let against = report.log_loss.against_holdout.as_ref()?;
    let p = below(&against.test, level).filter(|_| against.worse > 0.0)?;
    let records = if against.harder > 0.0 { "harder" } else { "easier" };
    let sentence = format!(
        "The log-loss is {:.3} nats per record where the rows kept out of the fit had {:.3}: {:.3} because the model \
         has become worse, {:.3} because the records are {records}. If the model were as it was, the first part \
         would come up in {}.",
        report.log_loss.mean.unwrap_or(f64::NAN),
        against.holdout,
        against.worse,
        against.harder.abs(),
        chance(p)
    );
    Some(Finding::new(FindingKind::LogLoss, severity(against.worse), "", sentence))
}

fn coverage(report: &Report) -> Option<Finding> {
    let coverage = &report.coverage;
    let share = coverage.share.filter(|_| coverage.incomplete)?;
    let sentence = format!(
        "Outcomes are incomplete: {} of the {} records that are old enough have one{}. What looks like a wrong model \
         may come from the collection of outcomes.",
        percent(share),
        count(coverage.scored),
        uneven(report)
    );
    Some(Finding::new(FindingKind::Coverage, Severity::Clear, "", sentence))
}

/// The categories between which coverage differs most.
fn uneven(report: &Report) -> String {
    let known = report
        .coverage
        .categories
        .iter()
        .filter_map(|category| category.share.map(|share| (share, category.category.as_str())));
    let lowest = known.clone().min_by(|a, b| a.0.total_cmp(&b.0));
    let highest = known.max_by(|a, b| a.0.total_cmp(&b.0));
    match (lowest, highest) {
        (Some((low, least)), Some((high, most))) if high > UNEVEN * low => {
            format!(
                ", from {} of those predicted `{least}` to {} of those predicted `{most}`",
                percent(low),
                percent(high)
            )
        }
        _ => String::new(),
    }
}

fn segments(group: &SegmentGroup) -> Vec<Finding> {
    let mut findings: Vec<Finding> = group
        .segments
        .iter()
        .filter(|row| row.is_apart)
        .map(|row| segment_apart(&group.label, row))
        .collect();
    if findings.is_empty() {
        findings.extend(segments_together(group));
    }
    findings.extend(group.segments.iter().flat_map(|row| stuck_fields(&group.label, row)));
    findings
}

fn segments_together(group: &SegmentGroup) -> Option<Finding> {
    let wrong: Vec<String> =
        group.segments.iter().filter(|row| row.wrong).map(|row| row.value.clone()).collect();
    let sentence = format!(
        "By `{}`, outcomes and probabilities disagree in {} of {} segments ({}), none of them apart from the rest.",
        group.label,
        wrong.len(),
        group.segments.len(),
        list(&wrong)
    );
    (!wrong.is_empty()).then(|| Finding::new(FindingKind::Segment, Severity::Slight, &group.label, sentence))
}

/// Fields with nearly all records of a segment in a bin that holds at most half of the fit.
fn stuck_fields(label: &str, row: &SegmentRow) -> Vec<Finding> {
    let stuck = |field: &SegmentField| {
        let bin = field.fullest_bin.as_ref()?;
        let (now, then) = (bin.share?, bin.training_share?);
        if row.scored < FEWEST_FOR_STUCK || now < STUCK_SHARE || then > LARGEST_FORMER_SHARE {
            return None;
        }
        let sentence = format!(
            "In `{}` of `{label}`, {} of the records have `{}` in one place (`{}`), {} in the fit: look whether the \
             feed fills in the same value.",
            row.value,
            percent(now),
            field.field,
            bin.bin,
            percent(then)
        );
        let subject = format!("{label}={}", row.value);
        Some(Finding::new(FindingKind::Segment, Severity::Slight, &subject, sentence))
    };
    // The field that makes the segment is of course the same in all of its records.
    row.fields.iter().filter(|field| field.field != label).filter_map(stuck).collect()
}

fn segment_apart(label: &str, row: &SegmentRow) -> Finding {
    let subject = format!("{label}={}", row.value);
    let gap = row.largest_gap.as_ref().map_or_else(String::new, |gap| {
        format!(
            ": `{}` was observed in {} of its {} records where {} were promised",
            gap.category,
            percent(gap.observed_share),
            count(row.outcomes),
            percent(gap.expected_share)
        )
    });
    let sentence = format!("`{}` of `{label}` is apart from the other segments{gap}.", row.value);
    Finding::new(FindingKind::Segment, Severity::Clear, &subject, sentence)
}
