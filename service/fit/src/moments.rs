//! Means and deviations that merge.

use crate::reduce::Merge;

/// Weighted mean and squared deviations of numbers, with their range. Missing numbers are left
/// out.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Moments {
    pub(crate) weight: f64,
    pub(crate) mean: f64,
    /// Weighted sum of squared deviations from the mean.
    pub(crate) squares: f64,
    pub(crate) least: f64,
    pub(crate) most: f64,
}

impl Default for Moments {
    fn default() -> Self {
        Self { weight: 0.0, mean: 0.0, squares: 0.0, least: f64::INFINITY, most: f64::NEG_INFINITY }
    }
}

impl Moments {
    /// In two passes: first the mean, then the deviations from it.
    pub(crate) fn of(values: impl Iterator<Item = (f64, f64)> + Clone) -> Self {
        let present = values.filter(|(value, _)| !value.is_nan());
        let mut moments = Self::default();
        let mut sum = 0.0;
        for (value, weight) in present.clone() {
            moments.weight += weight;
            sum += weight * value;
            moments.least = moments.least.min(value);
            moments.most = moments.most.max(value);
        }
        if moments.weight > 0.0 {
            moments.mean = sum / moments.weight;
            moments.squares = present.map(|(value, weight)| weight * (value - moments.mean).powi(2)).sum();
        }
        moments
    }

    /// Standard deviation with the sum of weights as divisor; 0 for a constant, exactly.
    pub(crate) fn deviation(&self) -> f64 {
        if self.least < self.most { (self.squares / self.weight).sqrt() } else { 0.0 }
    }
}

impl Merge for Moments {
    /// Chan, Golub and LeVeque (1983).
    fn merge(&mut self, later: Self) {
        self.least = self.least.min(later.least);
        self.most = self.most.max(later.most);
        if later.weight == 0.0 {
            return;
        }
        let weight = self.weight + later.weight;
        let gap = later.mean - self.mean;
        self.mean += gap * (later.weight / weight);
        self.squares += later.squares + gap * gap * (self.weight * later.weight / weight);
        self.weight = weight;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::reduce::BinaryCounter;
    use proptest::prelude::*;

    #[test]
    fn moments_of_large_numbers_keep_their_digits() {
        let value = |row: usize| 1e9 + if row.is_multiple_of(2) { 1.0 } else { -1.0 };
        let mut counter = BinaryCounter::new();
        for chunk in 0..25 {
            counter.push(Moments::of((0..4000).map(move |row| (value(chunk * 4000 + row), 1.0))));
        }
        let moments = counter.finish().unwrap();
        assert_eq!((moments.mean, moments.deviation()), (1e9, 1.0));
    }

    #[test]
    fn a_constant_has_no_deviation_whatever_the_rounding() {
        assert_eq!(Moments::of([(0.1, 1.0); 10].into_iter()).deviation(), 0.0);
    }

    proptest! {
        #[test]
        fn merged_moments_are_those_of_the_whole(
            values in prop::collection::vec((-1e3..1e3f64, 0.1..5.0f64), 2..60),
            cut in 0usize..60,
        ) {
            let (left, right) = values.split_at(cut.min(values.len()));
            let whole = Moments::of(values.iter().copied());
            let mut merged = Moments::of(left.iter().copied());
            merged.merge(Moments::of(right.iter().copied()));
            prop_assert!((merged.mean - whole.mean).abs() < 1e-10);
            prop_assert!((merged.squares - whole.squares).abs() < 1e-10 * (1.0 + whole.squares));
            prop_assert_eq!((merged.least, merged.most), (whole.least, whole.most));
        }
    }
}
