//! Findings about the records as they come in: fields and mean prediction.

use super::words::{count, percent};
use super::{Finding, FindingKind, Severity};
use crate::field_shift::{FieldShift, Movement, Rate};
use crate::report::Report;

/// Share of records from which a flagged rate is severe, and from which it is clear.
const SEVERE_RATE: f64 = 0.2;
const CLEAR_RATE: f64 = 0.05;

pub(super) fn findings(report: &Report) -> Vec<Finding> {
    report.fields.iter().flat_map(of_field).chain(predicted_mix(report)).collect()
}

fn of_field(field: &FieldShift) -> Vec<Finding> {
    let rates = [
        (Some(field.missing), FindingKind::FieldMissing, "is missing in"),
        (field.unseen, FindingKind::FieldUnseen, "has a level that the fit did not know in"),
        (field.outside, FindingKind::FieldOutside, "is outside the range of the fit in"),
    ];
    let mut findings: Vec<Finding> = rates
        .into_iter()
        .filter_map(|(rate, kind, what)| {
            rate.filter(|rate| rate.flagged).map(|rate| of_rate(field, rate, kind, what))
        })
        .collect();
    findings.extend(moved(field));
    findings
}

fn of_rate(field: &FieldShift, rate: Rate, kind: FindingKind, what: &str) -> Finding {
    let share = rate.share.unwrap_or(0.0);
    let severity = if share >= SEVERE_RATE {
        Severity::Severe
    } else if share >= CLEAR_RATE {
        Severity::Clear
    } else {
        Severity::Slight
    };
    let sentence = format!(
        "`{}` {what} {} of {} records; in the fit it was {}.",
        field.field,
        percent(share),
        count(rate.n),
        percent(rate.training_share.unwrap_or(0.0))
    );
    Finding::new(kind, severity, &field.field, sentence)
}

fn moved(field: &FieldShift) -> Option<Finding> {
    let (severity, how) = match field.shift.movement {
        Movement::StronglyMoved => (Severity::Clear, "has moved strongly"),
        Movement::Moved => (Severity::Slight, "has moved"),
        Movement::SmallButReal => (Severity::Note, "has moved a little, surely but by too little to matter"),
        Movement::Steady | Movement::TooFew | Movement::Unknown => return None,
    };
    let difference =
        |bin: &crate::field_shift::ShiftBin| bin.share.unwrap_or(0.0) - bin.training_share.unwrap_or(0.0);
    let largest = field
        .bins
        .iter()
        .max_by(|a, b| difference(a).abs().total_cmp(&difference(b).abs()))
        .map_or_else(String::new, |bin| {
            format!(
                ": most of all, {} of the records are `{}`, {} in the fit",
                percent(bin.share.unwrap_or(0.0)),
                bin.bin,
                percent(bin.training_share.unwrap_or(0.0))
            )
        });
    let sentence = format!("`{}` {how}{largest}. This alone does not make the model wrong.", field.field);
    Some(Finding::new(FindingKind::FieldMoved, severity, &field.field, sentence))
}

fn predicted_mix(report: &Report) -> Option<Finding> {
    if !report.predicted_mix.moved {
        return None;
    }
    let ratio = |now: f64, then: f64| (now / then).ln().abs();
    let (category, now, then) = report
        .predicted_mix
        .categories
        .iter()
        .filter_map(|category| Some((category, category.share?, category.training_share?)))
        .max_by(|a, b| ratio(a.1, a.2).total_cmp(&ratio(b.1, b.2)))?;
    let sentence = format!(
        "On average the model gives `{}` {} where it gave {} over the fit: the records are of another kind. This \
         alone does not make the model wrong.",
        category.category,
        percent(now),
        percent(then)
    );
    Some(Finding::new(FindingKind::PredictedMix, Severity::Slight, &category.category, sentence))
}
