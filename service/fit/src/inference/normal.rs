//! The normal distribution, as far as tests and intervals need it.

use std::f64::consts::{FRAC_1_SQRT_2, LN_10, PI};

use libm::erfc;

/// Two-sided p-value of a standard normal `z`: `erfc(|z| / sqrt 2)`, the survival function, so that
/// small p-values keep their digits.
pub fn two_sided_p(z: f64) -> f64 {
    erfc(z.abs() * FRAC_1_SQRT_2)
}

/// Decimal logarithm of [`two_sided_p`], also where that underflows.
pub fn log10_two_sided_p(z: f64) -> f64 {
    const FAR: f64 = 30.0;
    if z.abs() < FAR {
        return two_sided_p(z).log10();
    }
    // The asymptotic series of erfc: exp(-x^2) / (x sqrt pi) (1 - 1/(2x^2) + 3/(4x^4) - 15/(8x^6)).
    let x2 = z * z / 2.0;
    let series = 1.0 - 0.5 / x2 + 0.75 / (x2 * x2) - 1.875 / (x2 * x2 * x2);
    (-x2 - 0.5 * (x2 * PI).ln() + series.ln()) / LN_10
}

/// The standard normal quantile of a probability between 0 and 1.
///
/// Bisection of the survival function, then Newton steps; right to the last digits.
pub fn normal_quantile(probability: f64) -> f64 {
    let upper_tail = probability.min(1.0 - probability);
    let survival = |z: f64| 0.5 * erfc(z * FRAC_1_SQRT_2);
    let (mut low, mut high) = (0.0, 40.0);
    for _ in 0..30 {
        let middle = 0.5 * (low + high);
        if survival(middle) > upper_tail { low = middle } else { high = middle }
    }
    let mut z = 0.5 * (low + high);
    for _ in 0..3 {
        let density = (-0.5 * z * z).exp() / (2.0 * PI).sqrt();
        z += (survival(z) - upper_tail) / density;
    }
    if probability < 0.5 { -z } else { z }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// p-values computed with scipy 1.17 (`norm.sf`) and, beyond its range, mpmath 1.4.
    #[test]
    fn tails_keep_their_digits() {
        for (z, want) in [(8.5, 1.895_906_964e-17), (-37.0, 1.145_114_244_505_03e-299), (0.0, 1.0)] {
            assert!((two_sided_p(z) / want - 1.0).abs() < 1e-9, "{z}");
            assert!((log10_two_sided_p(z) - want.log10()).abs() < 1e-8, "{z}");
        }
        assert!((log10_two_sided_p(45.0) + 441.474_649_6).abs() < 1e-6);
        let (near, far) = (log10_two_sided_p(29.999_999), log10_two_sided_p(30.000_001));
        assert!((near - far - 2e-6 * 30.0 / LN_10).abs() < 1e-7, "the two formulas meet: {near} {far}");
    }

    #[test]
    fn quantiles() {
        for (probability, want) in [
            (0.975, 1.959_963_984_540_054),
            (0.5, 0.0),
            (0.025, -1.959_963_984_540_054),
            (0.995, 2.575_829_303_548_901),
        ] {
            let found = normal_quantile(probability);
            assert!((found - want).abs() < 2e-15 * (1.0 + want.abs()), "{probability}: {found}");
        }
    }
}
