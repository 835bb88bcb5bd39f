//! How long raw records are kept.

use std::time::Duration;

/// The first day whose raw records are kept.
pub(crate) fn first_day_kept(now: i64, kept: Duration) -> i64 {
    let age = i64::try_from(kept.as_micros()).unwrap_or(i64::MAX);
    kilter_ledger::day_of(now.saturating_sub(age))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_day_is_kept_as_long_as_some_of_it_is_young_enough() {
        let (hour, day) = (3_600_000_000, 86_400_000_000);
        let two_days = Duration::from_hours(48);
        assert_eq!(first_day_kept(10 * day + hour, two_days), 8);
        assert_eq!(first_day_kept(10 * day - hour, two_days), 7);
        assert!(first_day_kept(day, Duration::MAX) < 0);
    }
}
