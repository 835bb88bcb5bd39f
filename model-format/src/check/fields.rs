//! Faults of single fields.

use std::collections::HashSet;

use super::Faults;
use crate::cells::shorten;
use crate::file::{Form, LevelsField, MissingNumber, NumberField};

/// Highest power of a polynomial form.
const HIGHEST_DEGREE: u32 = 10;

pub(super) fn check_number(field: &NumberField, place: &str, faults: &mut Faults) {
    let name = shorten(&field.name);
    match &field.form {
        Form::Polynomial(degree) => faults.add_if(
            !(1..=HIGHEST_DEGREE).contains(degree),
            format!("{place}.form"),
            format!("field `{name}`: degree {degree}, need 1 to {HIGHEST_DEGREE}"),
        ),
        Form::Spline(spline) => {
            if let Some(objection) = objection_to_knots(&spline.knots) {
                faults.add(format!("{place}.form.spline.knots"), format!("field `{name}`: {objection}"));
            }
        }
        Form::AsIs | Form::Log | Form::Log1p => {}
    }
    match &field.missing {
        MissingNumber::Refuse => {}
        MissingNumber::Value(value) => {
            if let Some(objection) = field.form.objection(*value) {
                faults.add(format!("{place}.missing.value"), format!("field `{name}`: {value} {objection}"));
            }
        }
        MissingNumber::MeanAndFlag(means) => {
            let (found, needed) = (means.means.len(), field.form.columns());
            faults.add_if(
                found != needed,
                format!("{place}.missing.mean-and-flag.means"),
                format!("field `{name}`: {found} means, need {needed}"),
            );
        }
    }
    for (key, pair) in [("range", field.range), ("observed", field.observed)] {
        let upside_down = pair.is_some_and(|[low, high]| low > high);
        faults.add_if(
            upside_down,
            format!("{place}.{key}"),
            format!("field `{name}`: the first is above the second"),
        );
    }
}

fn objection_to_knots(knots: &[f64]) -> Option<&'static str> {
    let ascending = knots.windows(2).all(|pair| pair[0] < pair[1]);
    if knots.len() < 3 || !ascending {
        return Some("need at least three knots, ascending");
    }
    let span = knots[knots.len() - 1] - knots[0];
    let computable = (span * span).is_normal();
    if computable { None } else { Some("the knots are too near together or too far apart to compute with") }
}

pub(super) fn check_levels(field: &LevelsField, place: &str, faults: &mut Faults) {
    let name = shorten(&field.name);
    let mut seen = HashSet::new();
    for level in &field.levels {
        if !seen.insert(level.as_str()) {
            faults.add(
                format!("{place}.levels"),
                format!("field `{name}`: level `{}` stands twice", shorten(level)),
            );
        }
    }
    faults.add_if(
        !seen.contains(field.reference.as_str()),
        format!("{place}.reference"),
        format!("field `{name}`: `{}` is not among the levels", shorten(&field.reference)),
    );
    for (key, policy) in [("unseen", &field.unseen), ("missing", &field.missing)] {
        faults.add_if(
            policy != "refuse" && policy != "reference" && !seen.contains(policy.as_str()),
            format!("{place}.{key}"),
            format!("field `{name}`: `{}` is neither `refuse` nor `reference` nor a level", shorten(policy)),
        );
    }
    for (rare, into) in &field.merged {
        if !seen.contains(into.as_str()) || seen.contains(rare.as_str()) {
            let (rare, into) = (shorten(rare), shorten(into));
            faults.add(
                format!("{place}.merged"),
                format!(
                    "field `{name}`: `{rare}` into `{into}` needs a level on the right and none on the left"
                ),
            );
        }
    }
}
