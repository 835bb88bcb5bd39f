//! The forms of a number: which columns it becomes, their values and their derivatives.

use crate::file::Form;

impl Form {
    /// Number of columns that a number becomes.
    pub fn columns(&self) -> usize {
        match self {
            Self::AsIs | Self::Log | Self::Log1p => 1,
            Self::Polynomial(degree) => *degree as usize,
            Self::Spline(spline) => spline.knots.len().saturating_sub(1),
        }
    }

    /// Name of a column, from the name of the field.
    pub fn column_name(&self, field: &str, basis: usize) -> String {
        match self {
            Self::AsIs => field.to_owned(),
            Self::Log => format!("log({field})"),
            Self::Log1p => format!("log1p({field})"),
            Self::Polynomial(_) | Self::Spline(_) if basis == 0 => field.to_owned(),
            Self::Polynomial(_) => format!("{field}^{}", basis + 1),
            Self::Spline(_) => format!("spline{basis}({field})"),
        }
    }

    /// Value of a column for a number.
    pub fn column(&self, basis: usize, value: f64) -> f64 {
        match self {
            Self::AsIs => value,
            Self::Log => value.ln(),
            Self::Log1p => value.ln_1p(),
            Self::Polynomial(_) => value.powi(basis as i32 + 1),
            Self::Spline(spline) if basis > 0 => restricted_cubic(&spline.knots, basis - 1, value),
            Self::Spline(_) => value,
        }
    }

    /// Derivative of a column with respect to the number.
    pub fn derivative(&self, basis: usize, value: f64) -> f64 {
        match self {
            Self::AsIs => 1.0,
            Self::Log => value.recip(),
            Self::Log1p => (1.0 + value).recip(),
            Self::Polynomial(_) => (basis as f64 + 1.0) * value.powi(basis as i32),
            Self::Spline(spline) if basis > 0 => restricted_cubic_slope(&spline.knots, basis - 1, value),
            Self::Spline(_) => 1.0,
        }
    }

    /// Why a number cannot be used with this form; `None` where it can.
    pub fn objection(&self, value: f64) -> Option<&'static str> {
        match self {
            Self::Log if value <= 0.0 => Some("is not above 0, so it has no logarithm"),
            Self::Log1p if value <= -1.0 => Some("is not above -1, so one plus it has no logarithm"),
            _ => None,
        }
    }
}

/// Nonlinear column `r` of a restricted cubic spline (Stone and Koo 1985; scaled by the squared
/// distance of the outer knots, as Harrell 2001), linear beyond the outer knots.
///
/// From the last knot on it is continued by its tangent: there the cubes would cancel.
fn restricted_cubic(knots: &[f64], r: usize, value: f64) -> f64 {
    let last = knots[knots.len() - 1];
    if value > last {
        return restricted_cubic(knots, r, last) + restricted_cubic_slope(knots, r, last) * (value - last);
    }
    truncated_powers(knots, r, value, 3)
}

fn restricted_cubic_slope(knots: &[f64], r: usize, value: f64) -> f64 {
    3.0 * truncated_powers(knots, r, value.min(knots[knots.len() - 1]), 2)
}

fn truncated_powers(knots: &[f64], r: usize, value: f64, power: i32) -> f64 {
    let (first, before_last, last) = (knots[0], knots[knots.len() - 2], knots[knots.len() - 1]);
    let above = |knot: f64| (value - knot).max(0.0).powi(power);
    let gap = last - before_last;
    let sum = above(knots[r]) - above(before_last) * (last - knots[r]) / gap
        + above(last) * (before_last - knots[r]) / gap;
    sum / ((last - first) * (last - first))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::file::Spline;

    /// Values computed with Hmisc 4.8 `rcspline.eval(x, knots, inclx = TRUE, norm = 2)` in R 4.2.2.
    #[test]
    fn restricted_cubic_spline_equals_hmisc() {
        let form = Form::Spline(Spline { knots: vec![0.19, 1.765, 3.0, 4.415] });
        assert_eq!(form.columns(), 3);
        for (x, second, third) in [
            (-1.0, 0.0, 0.0),
            (1.0, 0.029_771_562_6, 0.0),
            (2.0, 0.332_186_744_2, 0.000_727_026_4),
            (4.0, 2.931_016_436_4, 0.520_516_024_3),
            (6.0, 6.913_597_633_1, 1.617_066_909_4),
            (9.0, 12.899_396_449_7, 3.267_135_184_3),
        ] {
            assert!((form.column(1, x) - second).abs() < 1e-9, "{x}: {}", form.column(1, x));
            assert!((form.column(2, x) - third).abs() < 1e-9, "{x}: {}", form.column(2, x));
        }
        assert!((form.derivative(1, 3.0) - 1.327_029_165_6).abs() < 1e-9);
        assert!((form.column(1, 1e7) - 19_952_657.7).abs() < 0.1, "far out the tangent keeps its digits");
    }

    #[test]
    fn derivatives_agree_with_differences() {
        let spline = Form::Spline(Spline { knots: vec![0.5, 1.0, 2.0, 4.0, 5.0] });
        for form in [Form::AsIs, Form::Log, Form::Log1p, Form::Polynomial(3), spline] {
            for basis in 0..form.columns() {
                for x in [0.3, 0.9, 1.7, 3.3, 4.9, 6.0] {
                    let h = 1e-5;
                    let difference = (form.column(basis, x + h) - form.column(basis, x - h)) / (2.0 * h);
                    let derivative = form.derivative(basis, x);
                    assert!(
                        (difference - derivative).abs() < 1e-6 * (1.0 + derivative.abs()),
                        "{form:?} {x}"
                    );
                }
            }
        }
    }
}
