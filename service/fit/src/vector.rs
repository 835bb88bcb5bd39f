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

/// From log-odds to probabilities, residuals and log-probabilities, for the rows of a block.
///
/// # Shapes
/// With n rows and m categories beside the reference: `odds` and `residuals` m columns of n;
/// `reference`, `category`, `weight`, `log_probability` n; `largest`, `others` scratch of n.
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
        let Self { odds, reference, category, weight, residuals, log_probability, largest, others } = self;
        let rows = category.len();
        largest.fill(0.0);
        // The log-odds of the observed category, for now.
        log_probability.fill(0.0);
        for (j, odds) in (1u32..).zip(odds.chunks_exact(rows)) {
            for i in 0..rows {
                largest[i] = if odds[i] > largest[i] { odds[i] } else { largest[i] };
                log_probability[i] = if category[i] == j { odds[i] } else { log_probability[i] };
            }
        }
        for i in 0..rows {
            reference[i] = exp_of_nonpositive(-largest[i]);
            others[i] = if category[i] == 0 { 0.0 } else { reference[i] };
        }
        for (j, odds) in (1u32..).zip(odds.chunks_exact_mut(rows)) {
            for i in 0..rows {
                odds[i] = exp_of_nonpositive(odds[i] - largest[i]);
                others[i] += if category[i] == j { 0.0 } else { odds[i] };
            }
        }
        finish(category, log_probability, largest, others, reference, odds);
        for (j, (odds, residuals)) in
            (1u32..).zip(odds.chunks_exact_mut(rows).zip(residuals.chunks_exact_mut(rows)))
        {
            for i in 0..rows {
                // `largest` now holds the reciprocal of the sum of the exponentials.
                odds[i] *= largest[i];
                residuals[i] = weight[i] * if category[i] == j { others[i] * largest[i] } else { -odds[i] };
            }
        }
    }
}

/// Log-probabilities of the observed categories; the probability of the reference; in `largest` the
/// reciprocals of the sums.
fn finish(
    category: &[u32],
    log_probability: &mut [f64],
    largest: &mut [f64],
    others: &[f64],
    reference: &mut [f64],
    odds: &[f64],
) {
    let rows = category.len();
    for i in 0..rows {
        let observed = log_probability[i];
        let of_observed = match category[i] {
            0 => reference[i],
            j => odds[(j as usize - 1) * rows + i],
        };
        let sum = others[i] + of_observed;
        // Where the observed category is the likeliest, the sum of the others keeps losses that
        // are far below machine precision.
        log_probability[i] =
            if observed == largest[i] { -others[i].ln_1p() } else { observed - largest[i] - sum.ln() };
        largest[i] = sum.recip();
        reference[i] *= largest[i];
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

/// Standardises a column: `(x - centre) / scale`.
pub(crate) struct Standardise<'a> {
    pub(crate) values: &'a [f64],
    pub(crate) centre: f64,
    pub(crate) scale: f64,
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
            let standardised = (value - self.centre) / self.scale;
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
        let (mut reference, mut largest, mut others) = ([0.0], [0.0], [0.0]);
        Softmax {
            odds: &mut odds,
            reference: &mut reference,
            category: &[observed],
            weight: &[1.0],
            residuals: &mut vec![0.0; m],
            log_probability: &mut found,
            largest: &mut largest,
            others: &mut others,
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
