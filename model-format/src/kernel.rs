//! Loops of the scorer over the records of a block, compiled for the vector instructions that the
//! processor has.
//!
//! The loops are plain Rust that `pulp` compiles once per instruction set. They add and multiply in
//! the order that stands here and never fuse the two, so a record has the same probabilities to the
//! last bit alone and among others, and on every processor.

use pulp::{Arch, Simd, WithSimd};

/// Records that are scored together: their columns stay in the nearest cache.
pub(crate) const BLOCK_ROWS: usize = 128;

/// Bits of `1.5 * 2^52`: added to a small number it leaves the nearest integer in the low bits.
const ROUND: f64 = 6_755_399_441_055_744.0;
/// The natural logarithm of 2 as the sum of a number with 21 trailing zeros or more, whose products
/// with exponents are exact, and a small rest.
const LN_2_HIGH: f64 = 6.931_471_803_691_238e-1;
const LN_2_LOW: f64 = 1.908_214_929_270_587_7e-10;
/// Below this the exponential counts as 0; it would be smaller than any normal number.
const UNDERFLOW: f64 = -708.0;
/// `1/n!` from 13 down to 2.
const SERIES: [f64; 12] = [
    1.0 / 6_227_020_800.0,
    1.0 / 479_001_600.0,
    1.0 / 39_916_800.0,
    1.0 / 3_628_800.0,
    1.0 / 362_880.0,
    1.0 / 40_320.0,
    1.0 / 5_040.0,
    1.0 / 720.0,
    1.0 / 120.0,
    1.0 / 24.0,
    1.0 / 6.0,
    1.0 / 2.0,
];

/// Exponential of a number that is not above 0; NaN for NaN, 0 below -708.
///
/// `x = k ln 2 + r` with `|r| < 0.3467`, and `exp(x) = 2^k exp(r)` by its power series. The relative
/// error is below 1e-15, by this account in units of `u = 2^-53`: `k LN_2_HIGH` is exact and so is its
/// difference from x (the two are within a factor of 2 of each other, or k is 0); rounding
/// `k LN_2_LOW` and the last difference leaves an error of r below 0.35 u + 1022 ln2_low u < 0.4 u,
/// and ln 2 itself is represented to 1e-26 k; both move `exp(r)` by less than 0.5 u. What is left of
/// the series is below `0.3467^14 / 14! < 5e-18`. Horner's scheme errs by at most 2 u of
/// `r^2 exp(r) / 2 < 0.09`, the two sums that follow by u of 0.42 and u of 1.42. Together that is
/// below 3 u of a result of at least 0.707, or 4.3 u < 5e-16.
#[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
#[inline(always)]
fn exp_of_nonpositive(x: f64) -> f64 {
    let shifted = x * std::f64::consts::LOG2_E + ROUND;
    let exponent = shifted - ROUND;
    let rest = (x - exponent * LN_2_HIGH) - exponent * LN_2_LOW;
    let mut series = 0.0;
    for term in SERIES {
        series = series * rest + term;
    }
    let mantissa = (rest * rest * series + rest) + 1.0;
    let scale = f64::from_bits(shifted.to_bits().wrapping_add(1023) << 52);
    if x < UNDERFLOW { 0.0 } else { mantissa * scale }
}

/// Adds a column times a coefficient per category to the log-odds.
///
/// # Shapes
/// `factor` n; `coefficients` m; `odds` m columns of n.
pub(crate) struct AddColumn<'a> {
    pub(crate) factor: &'a [f64],
    pub(crate) coefficients: &'a [f64],
    pub(crate) odds: &'a mut [f64],
}

impl AddColumn<'_> {
    pub(crate) fn run(self) {
        Arch::new().dispatch(self);
    }
}

impl WithSimd for AddColumn<'_> {
    type Output = ();

    #[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let rows = self.factor.len();
        for (odds, coefficient) in self.odds.chunks_exact_mut(rows).zip(self.coefficients) {
            for (odds, factor) in odds.iter_mut().zip(self.factor) {
                *odds += factor * coefficient;
            }
        }
    }
}

/// From log-odds against the reference category to probabilities.
///
/// The largest log-odds (0 for the reference included) is subtracted before exponentials are taken, so
/// nothing overflows.
///
/// # Shapes
/// For n records and m = J-1 compared categories: `odds` m columns of n; `probabilities` J columns of n,
/// in model order; `largest` and `sum` scratch of n.
pub(crate) struct Softmax<'a> {
    pub(crate) odds: &'a [f64],
    pub(crate) reference: usize,
    pub(crate) probabilities: &'a mut [f64],
    pub(crate) largest: &'a mut [f64],
    pub(crate) sum: &'a mut [f64],
}

impl Softmax<'_> {
    pub(crate) fn run(self) {
        Arch::new().dispatch(self);
    }
}

impl WithSimd for Softmax<'_> {
    type Output = ();

    #[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let Self { odds, reference, probabilities, largest, sum } = self;
        let rows = largest.len();
        let sum = &mut sum[..rows];
        largest.fill(0.0);
        sum.fill(0.0);
        for odds in odds.chunks_exact(rows) {
            for (largest, odds) in largest.iter_mut().zip(odds) {
                *largest = if *odds > *largest { *odds } else { *largest };
            }
        }
        let mut compared = odds.chunks_exact(rows);
        for (category, probabilities) in probabilities.chunks_exact_mut(rows).enumerate() {
            let odds = if category == reference { None } else { compared.next() };
            match odds {
                Some(odds) => {
                    for i in 0..rows {
                        probabilities[i] = exp_of_nonpositive(odds[i] - largest[i]);
                        sum[i] += probabilities[i];
                    }
                }
                None => {
                    for i in 0..rows {
                        probabilities[i] = exp_of_nonpositive(-largest[i]);
                        sum[i] += probabilities[i];
                    }
                }
            }
        }
        for probabilities in probabilities.chunks_exact_mut(rows) {
            for (probability, sum) in probabilities.iter_mut().zip(&*sum) {
                *probability /= sum;
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Exponential in twice the precision: `exp(x / 2^10)` by its series with error-free sums and
    /// products (Dekker 1971), squared ten times.
    fn exact(x: f64) -> (f64, f64) {
        let small = x / 1024.0;
        let (mut high, mut low) = (1.0, 0.0);
        for n in (1..=28).rev() {
            // 1 + small / n * (high + low)
            let (product, error) = product(small, high);
            let error = error + small * low;
            let quotient = product / f64::from(n);
            let rest = (product - quotient * f64::from(n) - product_error(quotient, f64::from(n)) + error)
                / f64::from(n);
            let sum = 1.0 + quotient;
            low = (1.0 - sum) + quotient + rest;
            high = sum;
        }
        for _ in 0..10 {
            let (square, error) = product(high, high);
            let error = error + 2.0 * high * low;
            high = square + error;
            low = (square - high) + error;
        }
        (high, low)
    }

    fn product(a: f64, b: f64) -> (f64, f64) {
        (a * b, a.mul_add(b, -(a * b)))
    }

    /// What `quotient * n` lost, where the caller has subtracted the rounded product.
    fn product_error(quotient: f64, n: f64) -> f64 {
        product(quotient, n).1
    }

    #[test]
    fn exponentials_err_by_less_than_the_account_says() {
        let mut worst: f64 = 0.0;
        for step in 0..700_000 {
            let x = -0.001 * f64::from(step) - 1e-7 * f64::from(step % 997);
            let (high, low) = exact(x);
            let found = exp_of_nonpositive(x);
            worst = worst.max((((found - high) - low) / high).abs());
        }
        assert!(worst < 5e-16, "{worst:e}");
        assert_eq!([0.0, -0.0, -800.0, f64::NEG_INFINITY].map(exp_of_nonpositive), [1.0, 1.0, 0.0, 0.0]);
        assert!(exp_of_nonpositive(f64::NAN).is_nan());
    }

    /// Values of mpmath 1.3 with 50 digits, rounded.
    #[test]
    fn exponentials_equal_values_of_high_precision() {
        for (x, want) in [
            (-0.5, 0.606_530_659_712_633_4),
            (-1.0, 0.367_879_441_171_442_33),
            (-10.0, 4.539_992_976_248_485e-5),
            (-100.0, 3.720_075_976_020_836e-44),
            (-700.0, 9.859_676_543_759_77e-305),
        ] {
            assert!((exp_of_nonpositive(x) / want - 1.0).abs() < 4.5e-16, "{x}");
        }
    }

    #[test]
    fn a_block_of_any_length_gives_the_same_bits() {
        let odds: Vec<f64> = (0..300).map(|i| (f64::from(i) * 0.77).sin() * 30.0).collect();
        let of = |odds: &[f64]| {
            let mut probabilities = vec![0.0; odds.len() * 2];
            let (mut largest, mut sum) = (vec![0.0; odds.len()], vec![0.0; odds.len()]);
            Softmax {
                odds,
                reference: 0,
                probabilities: &mut probabilities,
                largest: &mut largest,
                sum: &mut sum,
            }
            .run();
            probabilities
        };
        let together = of(&odds);
        for (row, odd) in odds.iter().enumerate() {
            let alone = of(&[*odd]);
            assert_eq!(alone, [together[row], together[row + odds.len()]]);
        }
    }
}
