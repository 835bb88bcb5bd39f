//! Edges of bins: quantiles of the values of a fit.

/// The nine inner deciles of some values, equal ones taken once: the edges of up to ten bins.
///
/// Quantiles of type 7 (Hyndman and Fan 1996): linear interpolation between order statistics.
/// Values that are no numbers are left out; the order of `values` is not kept.
pub fn deciles(values: &mut Vec<f64>) -> Vec<f64> {
    values.retain(|value| value.is_finite());
    let mut edges: Vec<f64> = (1..10).filter_map(|tenth| quantile(values, f64::from(tenth) / 10.0)).collect();
    edges.dedup();
    edges
}

/// One quantile of type 7; `None` without values. Reorders `values`, which must be numbers.
pub fn quantile(values: &mut [f64], share: f64) -> Option<f64> {
    let last = values.len().checked_sub(1)?;
    let position = share.clamp(0.0, 1.0) * last as f64;
    let below = position.floor() as usize;
    let (_, low, above) = values.select_nth_unstable_by(below, f64::total_cmp);
    let low = *low;
    let next = above.iter().copied().fold(f64::INFINITY, f64::min);
    let part = position - below as f64;
    Some(if part > 0.0 { low + part * (next - low) } else { low })
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::test_data::close;

    #[test]
    fn quantiles_interpolate() {
        let mut values = vec![4.0, 1.0, 3.0, 2.0];
        assert_eq!(quantile(&mut values, 0.0), Some(1.0));
        assert_eq!(quantile(&mut values, 1.0), Some(4.0));
        close("middle", quantile(&mut values, 0.5).expect("values"), 2.5, 0.0);
        close("tenth", quantile(&mut values, 0.1).expect("values"), 1.3, 1e-15);
        assert_eq!(quantile(&mut [], 0.5), None);
    }

    #[test]
    fn equal_deciles_are_taken_once_and_missing_values_left_out() {
        let mut values = vec![f64::NAN, 1.0, 1.0, 1.0, 2.0, f64::NAN];
        assert_eq!(deciles(&mut values).first(), Some(&1.0));
        assert!(deciles(&mut values).is_sorted_by(|a, b| a < b));
        assert_eq!(deciles(&mut vec![5.0; 20]), [5.0]);
        assert!(deciles(&mut Vec::new()).is_empty());
    }
}
