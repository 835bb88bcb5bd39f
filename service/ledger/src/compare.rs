//! Comparing summaries that were kept with summaries that were computed anew.

use kilter_drift::Summary;
use serde_json::Value;

/// Difference of two sums of the same numbers, relative to their scale, that the order of addition
/// may explain.
const RELATIVE: f64 = 1e-9;

/// Where two summaries of the same records differ by more than the order of addition explains.
/// Counts are compared exactly. Sums may cancel, so their scale is at least the number of records.
pub(crate) fn difference(stored: &Summary, computed: &Summary) -> Option<String> {
    let scale = computed.scored().max(1.0);
    match (serde_json::to_value(stored), serde_json::to_value(computed)) {
        (Ok(stored), Ok(computed)) => differing_place(&stored, &computed, scale, ""),
        _ => Some("a summary holds numbers that are not finite".into()),
    }
}

fn differing_place(stored: &Value, computed: &Value, scale: f64, place: &str) -> Option<String> {
    match (stored, computed) {
        (Value::Number(left), Value::Number(right)) => {
            let (left, right) = (left.as_f64()?, right.as_f64()?);
            (!agree(left, right, scale)).then(|| format!("{place}: {left} stored, {right} computed"))
        }
        (Value::Array(left), Value::Array(right)) if left.len() == right.len() => {
            left.iter().zip(right).enumerate().find_map(|(index, (left, right))| {
                differing_place(left, right, scale, &format!("{place}[{index}]"))
            })
        }
        (Value::Object(left), Value::Object(right)) if left.len() == right.len() => {
            left.iter().find_map(|(key, left)| {
                let right = right.get(key).unwrap_or(&Value::Null);
                differing_place(left, right, scale, &format!("{place}.{key}"))
            })
        }
        _ => (stored != computed).then(|| format!("{place}: {stored} stored, {computed} computed")),
    }
}

fn agree(left: f64, right: f64, scale: f64) -> bool {
    let whole = left.fract() == 0.0 && right.fract() == 0.0;
    left == right || (!whole && (left - right).abs() <= RELATIVE * scale.max(left.abs()).max(right.abs()))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn counts_agree_exactly_and_sums_to_nine_digits() {
        for (left, right, scale, want) in [
            (3.0, 3.0, 1.0, true),
            (1e12, 1e12 + 1.0, 1e12, false),
            (0.1 + 0.2, 0.3, 1.0, true),
            (1e-17, 0.0, 1.0, true),
            (100.25, 100.25 + 2e-7, 1.0, false),
            (1e-8, 0.0, 1.0, false),
            (1e-8, 0.0, 100.0, true),
        ] {
            assert_eq!(agree(left, right, scale), want, "{left} {right} {scale}");
        }
    }
}
