//! Faults of terms, coefficients and their covariance.

use std::collections::HashSet;

use super::Faults;
use super::semidefinite::{Semidefinite, semidefinite};
use crate::cells::shorten;
use crate::design::Design;
use crate::file::{COVARIANCE_ORDER, Covariance, ModelFile};

pub(super) fn check_terms(model: &ModelFile, faults: &mut Faults) {
    let mut pairs = HashSet::new();
    for (index, [first, second]) in model.interactions.iter().enumerate() {
        let twice = !pairs.insert((first.min(second), first.max(second)));
        faults.add_if(
            twice,
            format!("interactions[{index}]"),
            format!("`{}:{}` stands twice", shorten(first), shorten(second)),
        );
    }
    match Design::of_model(model) {
        Err(error) => faults.add("interactions", error.to_string()),
        Ok(design) => {
            let names = design.terms().iter().map(|term| &term.name);
            let differs = names.zip(&model.terms).position(|(needed, found)| needed != found);
            let (found, needed) = (model.terms.len(), design.terms().len());
            if let Some(at) = differs {
                let (found, needed) = (shorten(&model.terms[at]), shorten(&design.terms()[at].name));
                faults.add(format!("terms[{at}]"), format!("`{found}`, but the fields make `{needed}`"));
            } else if needed != found {
                faults.add("terms", format!("{found} terms, the fields make {needed}"));
            }
        }
    }
}

pub(super) fn check_coefficients(model: &ModelFile, faults: &mut Faults) {
    let needed = model.terms.len();
    for category in model.compared_categories() {
        let place = || format!("coefficients.{}", shorten(category));
        match model.coefficients.get(category) {
            None => faults.add(place(), "is missing"),
            Some(row) if row.len() != needed => {
                faults.add(place(), format!("{} coefficients, need {needed}, one per term", row.len()));
            }
            Some(_) => {}
        }
    }
    let known: HashSet<&str> = model.compared_categories().collect();
    for category in model.coefficients.keys().filter(|category| !known.contains(category.as_str())) {
        faults.add(
            format!("coefficients.{}", shorten(category)),
            "is no category, or the reference category, which has no coefficients",
        );
    }
    if let Some(covariance) = &model.covariance {
        check_covariance(covariance, needed.saturating_mul(known.len()), faults);
    }
}

fn check_covariance(covariance: &Covariance, size: usize, faults: &mut Faults) {
    faults.add_if(
        covariance.order != COVARIANCE_ORDER,
        "covariance.order",
        format!("`{}`, need `{COVARIANCE_ORDER}`", shorten(&covariance.order)),
    );
    let needed = (size as u128) * (size as u128 + 1) / 2;
    let found = covariance.lower.len();
    if found as u128 != needed {
        return faults.add("covariance.lower", format!("{found} numbers, need {needed}"));
    }
    let reason = match semidefinite(covariance, size) {
        Semidefinite::Yes => return,
        Semidefinite::Negative { at, variance } => {
            format!("variance {variance} of coefficient {at} is below 0")
        }
        Semidefinite::Pair { row, column } => format!(
            "the covariance of coefficients {row} and {column} is larger than their variances allow: it is no \
             covariance"
        ),
        Semidefinite::No { at } => format!(
            "coefficients 0 to {at} together have a combination with a variance below 0: it is no covariance"
        ),
    };
    faults.add("covariance.lower", reason);
}
