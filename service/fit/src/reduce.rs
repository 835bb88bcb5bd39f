//! Sums over chunks in an order that does not depend on who computed them.

/// What can be added up.
pub(crate) trait Merge {
    /// Adds what was summed over later rows.
    fn merge(&mut self, later: Self);
}

/// Adds the sums of consecutive chunks like the bits of a counter: slot `k` holds the sum of
/// `2^k` consecutive chunks. The order of additions depends on the number of chunks only, at most
/// `log2(chunks) + 1` sums are kept, and rounding errors grow with the logarithm of the number of
/// chunks (pairwise summation).
#[derive(Debug)]
pub(crate) struct BinaryCounter<T> {
    slots: Vec<Option<T>>,
}

impl<T: Merge> BinaryCounter<T> {
    pub(crate) fn new() -> Self {
        Self { slots: Vec::new() }
    }

    /// Adds the sum of the next chunk.
    pub(crate) fn push(&mut self, mut sum: T) {
        for slot in &mut self.slots {
            match slot.take() {
                None => {
                    *slot = Some(sum);
                    return;
                }
                Some(mut earlier) => {
                    earlier.merge(sum);
                    sum = earlier;
                }
            }
        }
        self.slots.push(Some(sum));
    }

    /// The sum over all chunks; `None` where there were none.
    pub(crate) fn finish(self) -> Option<T> {
        let mut total: Option<T> = None;
        for mut earlier in self.slots.into_iter().flatten() {
            if let Some(later) = total {
                earlier.merge(later);
            }
            total = Some(earlier);
        }
        total
    }
}

/// A sum with its rounding errors carried along (Neumaier 1974).
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub(crate) struct Compensated {
    sum: f64,
    lost: f64,
}

impl Compensated {
    pub(crate) fn add(&mut self, value: f64) {
        let sum = self.sum + value;
        self.lost +=
            if self.sum.abs() >= value.abs() { (self.sum - sum) + value } else { (value - sum) + self.sum };
        self.sum = sum;
    }

    pub(crate) fn value(self) -> f64 {
        self.sum + self.lost
    }
}

impl Merge for Compensated {
    fn merge(&mut self, later: Self) {
        self.add(later.sum);
        self.lost += later.lost;
    }
}

/// Adds `later` to `sums`, item by item.
pub(crate) fn add_all(sums: &mut [f64], later: &[f64]) {
    for (sum, value) in sums.iter_mut().zip(later) {
        *sum += value;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    impl Merge for f64 {
        fn merge(&mut self, later: Self) {
            *self += later;
        }
    }

    /// The bits differ from those of a running sum, 6.600000000000001.
    #[test]
    fn binary_counter_adds_in_its_own_order() {
        let values: Vec<f64> = (1..=11).map(|i| 0.1 * f64::from(i)).collect();
        let mut counter = BinaryCounter::new();
        for chunk in values.chunks(4) {
            counter.push(chunk.iter().fold(0.0, |sum, value| sum + value));
        }
        assert_eq!(counter.finish(), Some(6.600_000_000_000_000_5));
        assert_eq!(BinaryCounter::<f64>::new().finish(), None);
    }

    #[test]
    fn compensated_sums_keep_what_a_plain_sum_loses() {
        let (mut first, mut second) = (Compensated::default(), Compensated::default());
        for (early, late) in [(1.0, 1.0), (1e100, -1e100)] {
            first.add(early);
            second.add(late);
        }
        first.merge(second);
        assert_eq!(first.value(), 2.0);
    }
}
