//! Tails of distributions and intervals, each by its survival function, so that small
//! probabilities keep their digits.

use statrs::distribution::{
    Binomial, ChiSquared, ContinuousCDF, Discrete, DiscreteCDF, NegativeBinomial, Poisson,
};
use statrs::function::gamma::ln_gamma;

/// The 97.5 % point of the standard normal distribution.
pub(crate) const NORMAL_975: f64 = 1.959_963_984_540_054;

/// Terms of a sum of probabilities below this share of the sum no longer change it.
const NEGLIGIBLE: f64 = 1e-17;

/// Upper tail of the chi-square distribution: `P(X >= value)` with `df` degrees of freedom.
/// `None` for no degrees of freedom or a value that is no number.
pub fn chi_square_upper(value: f64, df: usize) -> Option<f64> {
    if df == 0 || value.is_nan() {
        return None;
    }
    if value <= 0.0 {
        return Some(1.0);
    }
    ChiSquared::new(df as f64).ok().map(|distribution| distribution.sf(value).clamp(0.0, 1.0))
}

/// Upper tail of the standard normal distribution.
pub fn normal_upper(z: f64) -> f64 {
    0.5 * libm::erfc(z / std::f64::consts::SQRT_2)
}

/// Both tails of the standard normal distribution beyond |z|.
pub fn normal_two_sided(z: f64) -> f64 {
    libm::erfc(z.abs() / std::f64::consts::SQRT_2)
}

/// Lower and upper mid-p of a count: the observed value counts half (Lancaster 1961).
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct MidP {
    pub(crate) lower: f64,
    pub(crate) upper: f64,
}

impl MidP {
    pub(crate) fn two_sided(self) -> f64 {
        (2.0 * self.lower.min(self.upper)).min(1.0)
    }
}

/// Mid-p of a count whose mean is known up to training error: Poisson for `phi` 1, otherwise the
/// negative binomial with that mean and variance `phi * mean`.
pub(crate) fn count_mid_p(observed: f64, mean: f64, phi: f64) -> Option<MidP> {
    if !(mean > 0.0 && mean.is_finite() && observed >= 0.0 && phi >= 1.0) {
        return None;
    }
    let observed = observed.round() as u64;
    if phi - 1.0 < 1e-9 {
        let poisson = Poisson::new(mean).ok()?;
        Some(mid_p(observed, &poisson))
    } else {
        let shape = mean / (phi - 1.0);
        let negative_binomial = NegativeBinomial::new(shape, 1.0 / phi).ok()?;
        Some(mid_p(observed, &negative_binomial))
    }
}

fn mid_p<D: DiscreteCDF<u64, f64> + Discrete<u64, f64>>(observed: u64, distribution: &D) -> MidP {
    let half = 0.5 * distribution.pmf(observed);
    let below = if observed == 0 { 0.0 } else { distribution.cdf(observed - 1) };
    MidP { lower: below + half, upper: distribution.sf(observed) + half }
}

/// Upper tail `P(X >= observed)` of the beta-binomial distribution of `drawn` records whose
/// probability has a beta distribution with parameters `a` and `b`.
pub(crate) fn beta_binomial_upper(observed: f64, drawn: f64, a: f64, b: f64) -> Option<f64> {
    if !(a > 0.0 && b > 0.0 && observed >= 0.0 && observed <= drawn && drawn.is_finite()) {
        return None;
    }
    if observed == 0.0 {
        return Some(1.0);
    }
    let log_choose = ln_gamma(drawn + 1.0) - ln_gamma(observed + 1.0) - ln_gamma(drawn - observed + 1.0);
    let log_first = log_choose + ln_beta(observed + a, drawn - observed + b) - ln_beta(a, b);
    let mut term = 1.0;
    let mut sum = 0.0;
    let mut k = observed;
    while k <= drawn {
        sum += term;
        if k == drawn {
            break;
        }
        let ratio = (drawn - k) * (a + k) / ((k + 1.0) * (b + drawn - k - 1.0));
        term *= ratio;
        if ratio < 1.0 && term < NEGLIGIBLE * sum {
            break;
        }
        k += 1.0;
    }
    Some((log_first + sum.ln()).exp().min(1.0))
}

/// Upper hypergeometric mid-p: `marked_drawn` or more of `marked` records among `drawn` taken out
/// of `population`, the observed number counted half.
pub(crate) fn hypergeometric_upper_mid_p(
    marked_drawn: f64,
    marked: f64,
    drawn: f64,
    population: f64,
) -> Option<f64> {
    let most = marked.min(drawn);
    let unmarked_drawn = drawn - marked_drawn;
    if !(marked_drawn >= 0.0 && marked_drawn <= most && population - marked >= unmarked_drawn) {
        return None;
    }
    let log_first = ln_choose(marked, marked_drawn) + ln_choose(population - marked, unmarked_drawn)
        - ln_choose(population, drawn);
    let mut term = 1.0;
    let mut sum = 0.5;
    let mut k = marked_drawn;
    while k + 1.0 <= most {
        term *= (marked - k) * (drawn - k) / ((k + 1.0) * (population - marked - drawn + k + 1.0));
        sum += term;
        k += 1.0;
    }
    Some((log_first + sum.ln()).exp().min(1.0))
}

fn ln_beta(a: f64, b: f64) -> f64 {
    ln_gamma(a) + ln_gamma(b) - ln_gamma(a + b)
}

fn ln_choose(n: f64, k: f64) -> f64 {
    ln_gamma(n + 1.0) - ln_gamma(k + 1.0) - ln_gamma(n - k + 1.0)
}

/// Wilson's (1927) score interval for a share of `successes` in `n`, with the normal point `z`.
/// Its ends are exactly 0 and 1 where no and where all were successes. `None` for `n` = 0.
pub fn wilson(successes: f64, n: f64, z: f64) -> Option<[f64; 2]> {
    if !(n > 0.0 && successes >= 0.0 && successes <= n) {
        return None;
    }
    let share = successes / n;
    let z2 = z * z;
    let centre = (successes + z2 / 2.0) / (n + z2);
    let half = z / (n + z2) * (n * share * (1.0 - share) + z2 / 4.0).sqrt();
    let low = if successes == 0.0 { 0.0 } else { (centre - half).max(0.0) };
    let high = if successes == n { 1.0 } else { (centre + half).min(1.0) };
    Some([low, high])
}

/// The 2.5 % and 97.5 % quantiles of a binomial share.
pub(crate) fn binomial_share_quantiles(n: f64, p: f64) -> Option<[f64; 2]> {
    let n = n.round();
    let binomial = Binomial::new(p.clamp(0.0, 1.0), n as u64).ok()?;
    let share = |probability: f64| binomial.inverse_cdf(probability) as f64 / n;
    (n > 0.0).then(|| [share(0.025), share(0.975)])
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::test_data::close;

    #[test]
    fn chi_square_tails_keep_their_digits() {
        // Values from an independent computation in R 4.2.2 on the same statistics.
        for (value, df, wanted) in [
            (22.219_730_356_3, 3, 5.871_190_935_9e-05),
            (624.297_347_914, 12, 6.841_787_422_63e-126),
            (392.340_272_802, 6, 1.238_955_466_08e-81),
            (15.0, 9, 0.090_935_976_579_8),
            (0.978_756_394_9, 2, 0.613_007_445_3),
        ] {
            let found = chi_square_upper(value, df).expect("degrees of freedom");
            assert!((found / wanted - 1.0).abs() < 1e-8, "{value}, {df}: {found}, not {wanted}");
        }
        assert_eq!(chi_square_upper(3.0, 0), None);
        assert_eq!(chi_square_upper(0.0, 2), Some(1.0));
    }

    #[test]
    fn normal_tails_keep_their_digits() {
        close("median", normal_upper(0.0), 0.5, 0.0);
        close("97.5 %", normal_upper(NORMAL_975), 0.025, 1e-16);
        // Abramowitz and Stegun 1964, table 26.2: Q(10) = 7.61985e-24.
        assert!((normal_upper(10.0) / 7.619_853_024_160_527e-24 - 1.0).abs() < 1e-12);
        close("both", normal_two_sided(-NORMAL_975), 0.05, 1e-15);
    }

    #[test]
    fn poisson_mid_p_adds_up() {
        let found = count_mid_p(3.0, 2.0, 1.0).expect("mean above 0");
        // P(X <= 2) = 5 exp(-2), P(X = 3) = 4/3 exp(-2).
        close("lower", found.lower, (5.0 + 2.0 / 3.0) * (-2.0_f64).exp(), 1e-14);
        close("sum", found.lower + found.upper, 1.0, 1e-14);
        // A barely uncertain mean gives nearly the Poisson answer, an uncertain one a milder one.
        let near = count_mid_p(3.0, 2.0, 1.0 + 1e-6).expect("mean above 0");
        close("near", near.upper, found.upper, 1e-6);
        let far = count_mid_p(9.0, 2.0, 1.0).expect("mean above 0");
        let milder = count_mid_p(9.0, 2.0, 3.0).expect("mean above 0");
        assert!(milder.upper > 20.0 * far.upper);
        assert_eq!(count_mid_p(1.0, 0.0, 1.0), None);
    }

    #[test]
    fn beta_binomial_tail() {
        // 3 of 50 against 5 of 5000, in exact fractions.
        let found = beta_binomial_upper(3.0, 50.0, 5.5, 4995.5).expect("valid");
        assert!((found / 3.956_281_687_853_779e-5 - 1.0).abs() < 1e-10, "{found}");
        // With a = b = 1 every count from 0 to n is equally likely.
        close("uniform", beta_binomial_upper(4.0, 9.0, 1.0, 1.0).expect("valid"), 0.6, 1e-14);
        assert_eq!(beta_binomial_upper(0.0, 9.0, 1.0, 1.0), Some(1.0));
    }

    #[test]
    fn hypergeometric_mid_p() {
        // Draw 2 of 5, 2 marked: P(both) = 1/10, P(one) = 6/10.
        close("both", hypergeometric_upper_mid_p(2.0, 2.0, 2.0, 5.0).expect("valid"), 0.05, 1e-14);
        close("one", hypergeometric_upper_mid_p(1.0, 2.0, 2.0, 5.0).expect("valid"), 0.4, 1e-14);
    }

    #[test]
    fn wilson_intervals() {
        // Newcombe 1998, Stat Med 17:857, table I, recomputed to 12 digits with statsmodels 0.15.0.
        for (successes, n, low, high) in [
            (81.0, 263.0, 0.255_288_519_878, 0.366_209_576_983),
            (15.0, 148.0, 0.062_386_399_530_7, 0.160_487_241_723),
            (0.0, 20.0, 0.0, 0.161_125_158_053),
            (1.0, 29.0, 0.006_113_214_292_76, 0.171_755_218_793),
            (20.0, 20.0, 0.838_874_841_947, 1.0),
            (0.0, 1.0, 0.0, 0.793_450_685_623),
            (3.0, 1e6, 1.020_271_240_97e-06, 8.821_149_774_31e-06),
            (3.0, 8.0, 0.136_844_285_8, 0.694_257_605_4),
        ] {
            let [found_low, found_high] = wilson(successes, n, NORMAL_975).expect("n above 0");
            close("low", found_low, low, 1e-10);
            close("high", found_high, high, 1e-10);
        }
        assert_eq!(wilson(0.0, 0.0, NORMAL_975), None);
    }

    #[test]
    fn binomial_quantiles() {
        // P(X <= 1) = 0.011, P(X <= 2) = 0.055, P(X <= 7) = 0.945, P(X <= 8) = 0.989 of 10 fair coins.
        assert_eq!(binomial_share_quantiles(10.0, 0.5), Some([0.2, 0.8]));
        assert_eq!(binomial_share_quantiles(0.0, 0.5), None);
    }
}
