//! Numbers as people read them.

/// A share as a percentage.
pub(crate) fn percent(share: Option<f64>) -> String {
    share.map_or_else(dash, |share| format!("{:.1} %", share * 100.0))
}

/// A number with some decimals.
pub(crate) fn rounded(value: Option<f64>, decimals: usize) -> String {
    value.map_or_else(dash, |value| format!("{value:.decimals$}"))
}

/// A count with its thousands apart.
pub(crate) fn whole(count: f64) -> String {
    let digits = format!("{count:.0}");
    let mut grouped = String::new();
    for (place, digit) in digits.chars().enumerate() {
        if place > 0 && (digits.len() - place).is_multiple_of(3) && digit.is_ascii_digit() {
            grouped.push('\u{202f}');
        }
        grouped.push(digit);
    }
    grouped
}

/// What stands where there is no number.
pub(crate) fn dash() -> String {
    "–".into()
}

/// A p-value: four decimals say enough.
pub(crate) fn p_in_words(p: f64) -> String {
    if p.is_nan() {
        dash()
    } else if p < 1e-4 {
        "< 0.0001".into()
    } else {
        format!("{p:.4}")
    }
}

/// A number with as many decimals as three significant digits need, without an exponent unless it
/// is very small or large.
pub(crate) fn significant(value: f64) -> String {
    let size = value.abs();
    if size == 0.0 || !value.is_finite() {
        return value.to_string();
    }
    if !(1e-4..1e7).contains(&size) {
        return format!("{value:.2e}");
    }
    let decimals = (2 - size.log10().floor() as i32).max(0) as usize;
    format!("{value:.decimals$}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_for_people() {
        assert_eq!(whole(1_234_567.0), "1\u{202f}234\u{202f}567");
        assert_eq!(whole(0.0), "0");
        assert_eq!(percent(Some(0.123_45)), "12.3 %");
        assert_eq!(rounded(None, 2), "–");
        assert_eq!(p_in_words(0.000_099), "< 0.0001");
        let numbers = [1234.56, 12.345, -0.012_345, 0.0, 1e-9, f64::NAN];
        assert_eq!(numbers.map(significant), ["1235", "12.3", "-0.0123", "0", "1.00e-9", "NaN"]);
    }
}
