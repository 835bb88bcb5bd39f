//! Whether a model file agrees with itself: everything that can be recomputed from the file alone.

use std::collections::HashSet;
use std::fmt;

use serde_json::Value;

use crate::cells::shorten;
use crate::file::{Field, ModelFile};
use crate::fingerprint::fingerprint;

mod coefficients;
mod fields;
mod figures;
mod semidefinite;

/// Something in a model file that cannot be.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Fault {
    /// Where: the path of the key, such as `fields[2].levels`.
    pub place: String,
    /// What was found and what is needed.
    pub reason: String,
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        write!(f, "`{}`: {}", self.place, self.reason)
    }
}

/// Nobody reads more faults than this, and a file made to have millions should not fill memory.
const MOST_FAULTS: usize = 100;

/// Collects faults.
#[derive(Default)]
struct Faults(Vec<Fault>);

impl Faults {
    fn add(&mut self, place: impl Into<String>, reason: impl Into<String>) {
        if self.0.len() < MOST_FAULTS {
            self.0.push(Fault { place: place.into(), reason: reason.into() });
        }
    }

    fn add_if(&mut self, wrong: bool, place: impl Into<String>, reason: impl Into<String>) {
        if wrong {
            self.add(place, reason);
        }
    }

    /// Whether a list has the length that it needs.
    fn expect_length(&mut self, place: impl Into<String>, found: usize, needed: usize) -> bool {
        self.add_if(found != needed, place, format!("{found} numbers, need {needed}"));
        found == needed
    }

    /// Whether so many faults were found that looking on is of no use.
    fn enough(&self) -> bool {
        self.0.len() >= MOST_FAULTS
    }
}

/// The faults of a model file but its fingerprint and signature, in the order of the file; no more
/// than the first hundred.
///
/// Coefficients and figures are looked at where names, categories and fields are sound.
pub fn check(model: &ModelFile) -> Vec<Fault> {
    let mut faults = Faults::default();
    check_name(model, &mut faults);
    check_outcome(model, &mut faults);
    let mut names = HashSet::new();
    for (index, field) in model.fields.iter().enumerate() {
        if faults.enough() {
            return faults.0;
        }
        let place = format!("fields[{index}]");
        faults.add_if(field.name().is_empty(), format!("{place}.name"), "is empty");
        let twice = !names.insert(field.name());
        faults.add_if(
            twice,
            format!("{place}.name"),
            format!("field `{}` stands twice", shorten(field.name())),
        );
        match field {
            Field::Number(number) => fields::check_number(number, &place, &mut faults),
            Field::Levels(levels) => fields::check_levels(levels, &place, &mut faults),
            Field::Flag(_) => {}
        }
    }
    if faults.0.is_empty() {
        coefficients::check_terms(model, &mut faults);
        coefficients::check_coefficients(model, &mut faults);
        figures::check_figures(model, &mut faults);
    }
    faults.0
}

/// The fault of a document whose fingerprint is not that of its content.
pub fn check_fingerprint(document: &Value) -> Option<Fault> {
    let written = document.get("fingerprint").and_then(Value::as_str).unwrap_or_default();
    let reason = match fingerprint(document) {
        Ok(computed) if computed == written => return None,
        Ok(computed) => {
            let long = written.len() > computed.len();
            let written = if long { shorten(written) } else { written.to_owned() };
            format!(
                "the file says {written}, its content gives {computed}: it was changed after it was written"
            )
        }
        Err(error) => format!("cannot be computed: {error}"),
    };
    Some(Fault { place: "fingerprint".into(), reason })
}

/// Whether a text can name a model: what stands in routes, folders and labels.
pub fn is_model_name(name: &str) -> bool {
    let usable = |c: char| c.is_ascii_alphanumeric() || c == '-' || c == '_' || c == '.';
    !name.is_empty() && name.len() <= 64 && name.chars().all(usable) && !name.starts_with('.')
}

fn check_name(model: &ModelFile, faults: &mut Faults) {
    faults.add_if(
        !is_model_name(&model.name),
        "name",
        format!(
            "`{}`: use up to 64 letters, digits, `-`, `_` and `.`, not starting with `.`",
            shorten(&model.name)
        ),
    );
}

fn check_outcome(model: &ModelFile, faults: &mut Faults) {
    let categories = &model.outcome.categories;
    let found = categories.len();
    faults.add_if(found < 2, "outcome.categories", format!("{found} categories, need at least 2"));
    let mut seen = HashSet::new();
    for category in categories {
        faults.add_if(category.is_empty(), "outcome.categories", "a category without a name");
        if !seen.insert(category) {
            faults.add("outcome.categories", format!("category `{}` stands twice", shorten(category)));
        }
    }
    faults.add_if(
        !seen.contains(&model.outcome.reference),
        "outcome.reference",
        format!("`{}` is not among the categories", shorten(&model.outcome.reference)),
    );
}

#[cfg(test)]
pub(crate) mod tests;
