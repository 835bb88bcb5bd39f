//! Student's t distribution, for standard errors from few clusters.

use statrs::distribution::{ContinuousCDF, StudentsT};

/// Two-sided p-value of a statistic with `freedom` degrees of freedom.
pub(super) fn two_sided_p(t: f64, freedom: f64) -> f64 {
    StudentsT::new(0.0, 1.0, freedom).map_or(f64::NAN, |student| 2.0 * student.sf(t.abs()))
}

/// Quantile of a probability above one half: bisection of the survival function.
pub(super) fn quantile(probability: f64, freedom: f64) -> f64 {
    let upper_tail = 2.0 * (1.0 - probability);
    let mut high = 1.0;
    while two_sided_p(high, freedom) > upper_tail && high < 1e12 {
        high *= 2.0;
    }
    let mut low = 0.0;
    for _ in 0..100 {
        let middle = 0.5 * (low + high);
        if two_sided_p(middle, freedom) > upper_tail { low = middle } else { high = middle }
    }
    0.5 * (low + high)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Values of scipy 1.17: `2 * t.sf(30, 14)` and `t.ppf(0.975, 14)`.
    #[test]
    fn values_of_another_implementation() {
        assert!((two_sided_p(-30.0, 14.0) / 4.171_869_530_521_058e-14 - 1.0).abs() < 1e-10);
        assert!((quantile(0.975, 14.0) - 2.144_786_687_916_927_7).abs() < 1e-10);
    }
}
