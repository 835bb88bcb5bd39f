//! How large a design would be, before it is made.

use super::DesignError;
use crate::file::{Field, MissingNumber};
use crate::limits::{LARGEST_FILE, LARGEST_TERMS};

/// How many terms a field makes, and how many bytes their names have; without its missing flag,
/// which takes no part in interactions.
#[derive(Clone, Copy)]
struct Extent {
    terms: u64,
    bytes: u64,
}

impl Extent {
    fn of(field: &Field) -> Self {
        let name = field.name().len() as u64;
        match field {
            Field::Flag(_) => Self { terms: 1, bytes: name },
            Field::Number(number) => {
                let terms = number.form.columns() as u64;
                // `spline` and `log1p` with brackets and an index are shorter than this.
                Self { terms, bytes: terms.saturating_mul(name + 20) }
            }
            Field::Levels(levels) => {
                let compared = levels.levels.iter().filter(|level| **level != levels.reference);
                let (terms, bytes) = compared
                    .fold((0, 0), |(terms, bytes), level| (terms + 1, bytes + name + 1 + level.len() as u64));
                Self { terms, bytes }
            }
        }
    }

    fn times(self, other: Self) -> Self {
        let terms = self.terms.saturating_mul(other.terms);
        let left = self.bytes.saturating_mul(other.terms);
        let right = other.bytes.saturating_mul(self.terms);
        Self { terms, bytes: left.saturating_add(right).saturating_add(terms) }
    }
}

/// Counts the terms without making them, so that a design that nobody can want costs nothing.
pub(super) fn check_size(fields: &[Field], pairs: &[(usize, usize)]) -> Result<(), DesignError> {
    let of_fields: Vec<Extent> = fields.iter().map(Extent::of).collect();
    let of_pairs: Vec<Extent> = pairs.iter().map(|&(a, b)| of_fields[a].times(of_fields[b])).collect();
    let all = || of_fields.iter().chain(&of_pairs);
    let total = |part: fn(&Extent) -> u64| all().map(part).fold(0, u64::saturating_add);
    let missing_flags = fields.iter().filter(|field| has_missing_flag(field)).count() as u64;
    let found = total(|extent| extent.terms).saturating_add(missing_flags + 1);
    if found > LARGEST_TERMS as u64 {
        let (at, its_terms) = all()
            .map(|extent| extent.terms)
            .enumerate()
            .fold((0, 0), |most, next| if next.1 > most.1 { next } else { most });
        let most = match at.checked_sub(fields.len()) {
            None => fields[at].name().to_owned(),
            Some(pair) => format!("{}:{}", fields[pairs[pair].0].name(), fields[pairs[pair].1].name()),
        };
        return Err(DesignError::TooManyTerms { found, most, its_terms });
    }
    let found = total(|extent| extent.bytes);
    if found > LARGEST_FILE as u64 { Err(DesignError::TooLongNames { found }) } else { Ok(()) }
}

fn has_missing_flag(field: &Field) -> bool {
    matches!(field, Field::Number(number) if matches!(number.missing, MissingNumber::MeanAndFlag(_)))
}
