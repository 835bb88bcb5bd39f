//! Sums that lose no digits, and counts that never become negative.

use serde::{Deserialize, Deserializer, Serialize, Serializer};

use crate::error::DriftError;

/// Share of a weight by which a removal may exceed a count, for weights that are no whole numbers.
const ROUNDING: f64 = 1e-9;

/// Adds `value` to `total` and what rounding took from it to `carry` (Knuth's two-sum, the form of
/// Neumaier's 1974 compensated sum without a branch).
#[inline]
fn two_sum(total: &mut f64, carry: &mut f64, value: f64) {
    let sum = *total + value;
    let added = sum - *total;
    *carry += (*total - (sum - added)) + (value - added);
    *total = sum;
}

/// One compensated sum. Written and read as a plain number.
#[derive(Debug, Clone, Copy, Default)]
pub(crate) struct Sum {
    total: f64,
    carry: f64,
}

impl Sum {
    #[inline]
    pub(crate) fn add(&mut self, value: f64) {
        two_sum(&mut self.total, &mut self.carry, value);
    }

    pub(crate) fn value(self) -> f64 {
        self.total + self.carry
    }

    pub(crate) fn combine(&mut self, other: Self, sign: f64) {
        self.add(sign * other.total);
        self.carry += sign * other.carry;
    }
}

impl PartialEq for Sum {
    fn eq(&self, other: &Self) -> bool {
        self.value() == other.value()
    }
}

impl Serialize for Sum {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        self.value().serialize(serializer)
    }
}

impl<'de> Deserialize<'de> for Sum {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        f64::deserialize(deserializer).map(|total| Self { total, carry: 0.0 })
    }
}

/// Several compensated sums side by side. Written and read as a plain list of numbers.
#[derive(Debug, Clone, Default)]
pub(crate) struct Sums {
    totals: Vec<f64>,
    carries: Vec<f64>,
}

impl Sums {
    pub(crate) fn zeros(length: usize) -> Self {
        Self { totals: vec![0.0; length], carries: vec![0.0; length] }
    }

    pub(crate) fn len(&self) -> usize {
        self.totals.len()
    }

    #[inline]
    pub(crate) fn add(&mut self, index: usize, value: f64) {
        two_sum(&mut self.totals[index], &mut self.carries[index], value);
    }

    /// Adds `factor * values` to the sums from `start` on.
    #[inline]
    pub(crate) fn add_scaled(&mut self, start: usize, values: &[f64], factor: f64) {
        let totals = &mut self.totals[start..start + values.len()];
        let carries = &mut self.carries[start..start + values.len()];
        for ((total, carry), value) in totals.iter_mut().zip(carries).zip(values) {
            two_sum(total, carry, factor * value);
        }
    }

    pub(crate) fn value(&self, index: usize) -> f64 {
        self.totals[index] + self.carries[index]
    }

    pub(crate) fn values(&self) -> Vec<f64> {
        self.totals.iter().zip(&self.carries).map(|(total, carry)| total + carry).collect()
    }

    pub(crate) fn combine(&mut self, other: &Self, sign: f64) {
        self.add_scaled(0, &other.totals, sign);
        for (carry, theirs) in self.carries.iter_mut().zip(&other.carries) {
            *carry += sign * theirs;
        }
    }

    pub(crate) fn clear(&mut self) {
        self.totals.fill(0.0);
        self.carries.fill(0.0);
    }
}

impl PartialEq for Sums {
    fn eq(&self, other: &Self) -> bool {
        self.values() == other.values()
    }
}

impl Serialize for Sums {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        self.values().serialize(serializer)
    }
}

impl<'de> Deserialize<'de> for Sums {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        Vec::deserialize(deserializer).map(|totals: Vec<f64>| {
            let carries = vec![0.0; totals.len()];
            Self { totals, carries }
        })
    }
}

/// Whether a count can take a signed weight without becoming negative.
#[inline]
pub(crate) fn holds(count: f64, weight: f64) -> bool {
    weight >= 0.0 || count >= -weight * (1.0 - ROUNDING)
}

/// Adds a signed weight to a count that [`holds`] it.
#[inline]
pub(crate) fn count(cell: &mut f64, weight: f64) {
    *cell = (*cell + weight).max(0.0);
}

/// Checks that counts of one summary can be combined with those of another.
pub(crate) fn check_counts(
    mine: &[f64],
    theirs: &[f64],
    sign: f64,
    part: &'static str,
) -> Result<(), DriftError> {
    if mine.len() != theirs.len() {
        return Err(DriftError::Shape { part });
    }
    if mine.iter().zip(theirs).all(|(mine, theirs)| holds(*mine, sign * theirs)) {
        Ok(())
    } else {
        Err(DriftError::Negative { part })
    }
}

/// Adds counts, or takes them away with `sign` -1, after [`check_counts`].
pub(crate) fn combine_counts(mine: &mut [f64], theirs: &[f64], sign: f64) {
    for (mine, theirs) in mine.iter_mut().zip(theirs) {
        count(mine, sign * theirs);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn small_numbers_survive_beside_large_ones() {
        let mut sum = Sum::default();
        for value in [1e16, 1.0, -1e16, 1.0] {
            sum.add(value);
        }
        assert_eq!(sum.value(), 2.0);
        let mut sums = Sums::zeros(2);
        sums.add_scaled(0, &[1e16, 3.0], 1.0);
        sums.add_scaled(0, &[1.0, 4.0], 1.0);
        sums.add_scaled(0, &[1e16, 3.0], -1.0);
        assert_eq!(sums.values(), [1.0, 4.0]);
    }

    #[test]
    fn counts_refuse_to_become_negative() {
        assert!(check_counts(&[3.0, 1.0], &[3.0, 1.0], -1.0, "bins").is_ok());
        let refused = check_counts(&[3.0, 1.0], &[3.0, 2.0], -1.0, "bins");
        assert_eq!(refused, Err(DriftError::Negative { part: "bins" }));
        assert_eq!(check_counts(&[3.0], &[], 1.0, "bins"), Err(DriftError::Shape { part: "bins" }));
    }
}
