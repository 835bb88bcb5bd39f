//! Loops over the rows of a block, compiled for the vector instructions that the processor has.
//!
//! The loops are plain Rust; `pulp` compiles each of them once per instruction set and chooses at
//! run time. They also end in the state that the rest of the program expects: the matrix products
//! leave the upper halves of the vector registers in use, which makes ordinary floating-point code
//! after them several times slower.

use pulp::{Arch, Simd, WithSimd};

/// Bits of `1.5 * 2^52`: added to a small number it leaves the nearest integer in the low bits.
const ROUND: f64 = 6_755_399_441_055_744.0;
/// The natural logarithm of 2 as the sum of a number with trailing zeros and a small rest.
const LN_2_HIGH: f64 = 6.931_471_803_691_238e-1;
const LN_2_LOW: f64 = 1.908_214_929_270_587_7e-10;
/// Below this the exponential counts as 0; it would be smaller than any normal number.
const UNDERFLOW: f64 = -708.0;
/// `1/n!` from 13 down to 2: on `|r| <= ln 2 / 2` the rest of the series is below 1e-17.
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

/// Exponential of a number that is not above 0; NaN for NaN.
#[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
#[inline(always)]
fn exp_of_nonpositive(x: f64) -> f64 {
    let shifted = x.mul_add(std::f64::consts::LOG2_E, ROUND);
    let exponent = shifted - ROUND;
    let rest = exponent.mul_add(-LN_2_LOW, exponent.mul_add(-LN_2_HIGH, x));
    let series = SERIES.iter().fold(0.0f64, |sum, term| sum.mul_add(rest, *term));
    let mantissa = (rest * rest).mul_add(series, rest) + 1.0;
    let scale = f64::from_bits(shifted.to_bits().wrapping_add(1023) << 52);
    if x < UNDERFLOW { 0.0 } else { mantissa * scale }
}

/// Bits of 1 less those of the root of one half: added to the bits of a number, its exponent is that
/// of the power of 2 nearest to the number, in the sense that the quotient lies between the roots
/// of one half and of 2.
const TO_NEAREST_POWER: u64 = 0x3FF0_0000_0000_0000 - 0x3FE6_A09E_667F_3BCD;
/// Exponent bits of 1 in their place.
const ONE: u64 = 1023;
/// `2^52` and its bits: a small whole number in its low bits is added to it.
const INTEGER: f64 = 4_503_599_627_370_496.0;
/// `1/(2n+1)` from n = 10 down to 1: on `s <= 0.172` the rest of the series is below 1e-17.
const ODD: [f64; 10] = [
    1.0 / 21.0,
    1.0 / 19.0,
    1.0 / 17.0,
    1.0 / 15.0,
    1.0 / 13.0,
    1.0 / 11.0,
    1.0 / 9.0,
    1.0 / 7.0,
    1.0 / 5.0,
    1.0 / 3.0,
];

/// Logarithm of one plus a number that is not below 0 and far from overflow; NaN for NaN.
///
/// With `1 + x = 2^k f` and `s = (f - 1) / (f + 1)` it is `k ln 2 + 2 (s + s^3/3 + s^5/5 + ...)`;
/// for k = 0, where the digits of x matter, f - 1 is x itself.
#[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
#[inline(always)]
fn ln_1p_of_nonnegative(x: f64) -> f64 {
    let one_plus = 1.0 + x;
    let exponent = (one_plus.to_bits().wrapping_add(TO_NEAREST_POWER) >> 52).wrapping_sub(ONE);
    let power = f64::from_bits(exponent.wrapping_add(INTEGER.to_bits())) - INTEGER;
    let scale = f64::from_bits(ONE.wrapping_sub(exponent) << 52);
    let above = if exponent == 0 { x } else { one_plus * scale - 1.0 };
    let s = above / (2.0 + above);
    let square = s * s;
    let series = ODD.iter().fold(0.0f64, |sum, term| sum.mul_add(square, *term));
    let of_rest = (2.0 * s).mul_add(series * square, 2.0 * s);
    power.mul_add(LN_2_HIGH, power.mul_add(LN_2_LOW, of_rest))
}

/// From log-odds to probabilities, residuals and log-probabilities, for the rows of a block.
///
/// # Shapes
/// With n rows and m categories beside the reference: `odds` and `residuals` m columns of n;
/// `reference`, `category`, `weight`, `log_probability` n; `largest`, `others`, `sum` scratch of n.
pub(crate) struct Softmax<'a> {
    /// Log-odds in, probabilities out.
    pub(crate) odds: &'a mut [f64],
    /// Probability of the reference.
    pub(crate) reference: &'a mut [f64],
    pub(crate) category: &'a [u32],
    pub(crate) weight: &'a [f64],
    /// `w (1[y = j] - p_j)`; with `y = j` from the sum of the other probabilities, so that
    /// a probability near 1 costs no digits.
    pub(crate) residuals: &'a mut [f64],
    /// Log-probability of the observed category.
    pub(crate) log_probability: &'a mut [f64],
    pub(crate) largest: &'a mut [f64],
    pub(crate) others: &'a mut [f64],
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
        let Self { odds, reference, category, weight, residuals, log_probability, largest, others, sum } =
            self;
        let rows = category.len();
        // Slices of one length, so that the loops need no checks and become vector loops.
        let (category, weight) = (&category[..rows], &weight[..rows]);
        let (reference, log_probability) = (&mut reference[..rows], &mut log_probability[..rows]);
        let (largest, others, sum) = (&mut largest[..rows], &mut others[..rows], &mut sum[..rows]);
        largest.fill(0.0);
        // The log-odds of the observed category, for now.
        log_probability.fill(0.0);
        for (j, odds) in (1u32..).zip(odds.chunks_exact(rows)) {
            let odds = &odds[..rows];
            for i in 0..rows {
                largest[i] = if odds[i] > largest[i] { odds[i] } else { largest[i] };
                log_probability[i] = if category[i] == j { odds[i] } else { log_probability[i] };
            }
        }
        for i in 0..rows {
            reference[i] = exp_of_nonpositive(-largest[i]);
            sum[i] = reference[i];
            others[i] = if category[i] == 0 { 0.0 } else { reference[i] };
        }
        for (j, odds) in (1u32..).zip(odds.chunks_exact_mut(rows)) {
            let odds = &mut odds[..rows];
            for i in 0..rows {
                odds[i] = exp_of_nonpositive(odds[i] - largest[i]);
                sum[i] += odds[i];
                others[i] += if category[i] == j { 0.0 } else { odds[i] };
            }
        }
        for i in 0..rows {
            let observed = log_probability[i];
            // Where the observed category is the likeliest, the sum of the others keeps losses that
            // are far below machine precision. Elsewhere the likeliest has 1 of the sum.
            let rest = if observed == largest[i] { others[i] } else { sum[i] - 1.0 };
            log_probability[i] = (observed - largest[i]) - ln_1p_of_nonnegative(rest);
            sum[i] = 1.0 / sum[i];
            reference[i] *= sum[i];
        }
        let columns = odds.chunks_exact_mut(rows).zip(residuals.chunks_exact_mut(rows));
        for (j, (odds, residuals)) in (1u32..).zip(columns) {
            let (odds, residuals) = (&mut odds[..rows], &mut residuals[..rows]);
            for i in 0..rows {
                // `sum` now holds the reciprocal of the sum of the exponentials.
                odds[i] *= sum[i];
                residuals[i] = weight[i] * if category[i] == j { others[i] * sum[i] } else { -odds[i] };
            }
        }
    }
}

/// Multiplies each column of a block by the same weights, row by row.
///
/// # Shapes
/// `columns` and `weighted` q columns of n, `weights` n.
pub(crate) struct WeighColumns<'a> {
    pub(crate) columns: &'a [f64],
    pub(crate) weights: &'a [f64],
    pub(crate) weighted: &'a mut [f64],
}

impl WeighColumns<'_> {
    pub(crate) fn run(self) {
        Arch::new().dispatch(self);
    }
}

impl WithSimd for WeighColumns<'_> {
    type Output = ();

    #[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        let rows = self.weights.len();
        let pairs = self.columns.chunks_exact(rows).zip(self.weighted.chunks_exact_mut(rows));
        for (column, weighted) in pairs {
            for ((slot, value), weight) in weighted.iter_mut().zip(column).zip(self.weights) {
                *slot = value * weight;
            }
        }
    }
}

/// Standardises a column: `(x - centre) factor`.
pub(crate) struct Standardise<'a> {
    pub(crate) values: &'a [f64],
    pub(crate) centre: f64,
    pub(crate) factor: f64,
    pub(crate) column: &'a mut [f64],
}

impl Standardise<'_> {
    pub(crate) fn run(self) {
        Arch::new().dispatch(self);
    }
}

impl WithSimd for Standardise<'_> {
    type Output = ();

    #[expect(clippy::inline_always, reason = "only inlined code is compiled for the chosen instructions")]
    #[inline(always)]
    fn with_simd<S: Simd>(self, _: S) {
        for (slot, value) in self.column.iter_mut().zip(self.values) {
            let standardised = (value - self.centre) * self.factor;
            // A missing number takes the mean of the column, which is 0 here.
            *slot = if value.is_nan() { 0.0 } else { standardised };
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn log_probability(odds: &[f64], observed: u32) -> f64 {
        let (mut found, mut odds, m) = ([0.0], odds.to_vec(), odds.len());
        let (mut reference, mut largest, mut others, mut sum) = ([0.0], [0.0], [0.0], [0.0]);
        Softmax {
            odds: &mut odds,
            reference: &mut reference,
            category: &[observed],
            weight: &[1.0],
            residuals: &mut vec![0.0; m],
            log_probability: &mut found,
            largest: &mut largest,
            others: &mut others,
            sum: &mut sum,
        }
        .run();
        assert!((odds.iter().sum::<f64>() + reference[0] - 1.0).abs() < 1e-15 || odds[0].is_nan());
        found[0]
    }

    #[test]
    fn log_probabilities_keep_tiny_losses_and_survive_huge_odds() {
        for (odds, observed, want) in [
            ([800.0, -800.0], 0, -800.0),
            ([800.0, -800.0], 1, 0.0),
            ([-40.0, -50.0], 0, -4.248_547_130_276_385e-18),
            ([1.0, 2.0], 2, -0.407_605_964_444_380_3),
        ] {
            let found = log_probability(&odds, observed);
            assert!((found - want).abs() <= 4e-16 * want.abs(), "{odds:?}: {found}");
        }
    }

    #[test]
    fn odds_that_are_no_numbers_show() {
        for odds in [[f64::NAN, 0.0], [f64::INFINITY, 0.0]] {
            assert!(log_probability(&odds, 2).is_nan(), "{odds:?}");
        }
    }

    #[test]
    fn logarithms_are_right_to_the_last_digits() {
        for step in 0..40_000 {
            let x = (0.001 * f64::from(step) - 38.0).exp();
            let (found, want) = (ln_1p_of_nonnegative(x), x.ln_1p());
            assert!((found - want).abs() <= 2.0 * f64::EPSILON * want, "{x}: {found} {want}");
        }
        assert_eq!([0.0, 1e-300].map(ln_1p_of_nonnegative), [0.0, 1e-300]);
        assert!(ln_1p_of_nonnegative(f64::NAN).is_nan());
    }

    #[test]
    fn exponentials_are_right_to_the_last_digits() {
        for step in 0..70_000 {
            let x = -0.01 * f64::from(step) - 1e-5;
            let (found, want) = (exp_of_nonpositive(x), x.exp());
            assert!((found - want).abs() <= 2.0 * f64::EPSILON * want, "{x}: {found} {want}");
        }
        assert_eq!([0.0, -0.0, -800.0, f64::NEG_INFINITY].map(exp_of_nonpositive), [1.0, 1.0, 0.0, 0.0]);
        assert!(exp_of_nonpositive(f64::NAN).is_nan());
    }
}
