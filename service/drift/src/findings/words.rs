//! Numbers in words.

/// A count with thousands separated.
pub(super) fn count(value: f64) -> String {
    let digits = format!("{:.0}", value.max(0.0));
    let mut grouped = String::with_capacity(digits.len() + digits.len() / 3);
    for (position, digit) in digits.chars().enumerate() {
        if position > 0 && (digits.len() - position).is_multiple_of(3) {
            grouped.push(',');
        }
        grouped.push(digit);
    }
    grouped
}

/// A share as percent, with more digits where it is small.
pub(super) fn percent(share: f64) -> String {
    let value = 100.0 * share;
    if value == 0.0 {
        "0 %".to_owned()
    } else if value.abs() < 0.01 {
        "less than 0.01 %".to_owned()
    } else if value.abs() < 1.0 {
        format!("{value:.2} %")
    } else if value.abs() < 10.0 {
        format!("{value:.1} %")
    } else {
        format!("{value:.0} %")
    }
}

/// In how many periods chance alone would give such a thing.
pub(super) fn chance(p: f64) -> String {
    if p < 1e-6 {
        "fewer than one in a million such periods".to_owned()
    } else if p < 0.01 {
        format!("about one in {} such periods", count(rounded(1.0 / p)))
    } else {
        format!("about {} in 100 such periods", count((100.0 * p).max(1.0)))
    }
}

/// Two significant digits.
fn rounded(value: f64) -> f64 {
    let scale = 10_f64.powf(value.log10().floor() - 1.0);
    (value / scale).round() * scale
}

/// Names in a row.
pub(super) fn list(names: &[String]) -> String {
    let quoted: Vec<String> = names.iter().map(|name| format!("`{name}`")).collect();
    match quoted.as_slice() {
        [] => String::new(),
        [one] => one.clone(),
        [first @ .., last] => format!("{} and {last}", first.join(", ")),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_read_well() {
        assert_eq!(count(1_234_567.4), "1,234,567");
        assert_eq!(count(12.0), "12");
        assert_eq!(percent(0.1234), "12 %");
        assert_eq!(percent(0.034), "3.4 %");
        assert_eq!(percent(0.0012), "0.12 %");
        assert_eq!(percent(0.0), "0 %");
        assert_eq!(chance(0.2), "about 20 in 100 such periods");
        assert_eq!(chance(5.87e-5), "about one in 17,000 such periods");
        assert_eq!(chance(1e-9), "fewer than one in a million such periods");
        assert_eq!(list(&["a".into(), "b".into(), "c".into()]), "`a`, `b` and `c`");
    }
}
