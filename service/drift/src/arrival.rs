//! Arrival of outcomes: how long they take by category, when a record's outcome can be expected to
//! be known, and what can be said before.

use serde::Serialize;

use crate::error::DriftError;
use crate::frame::{Frame, check_length, check_number};
use crate::summary::{DELAY_EDGES_HOURS, Summary};

const BINS: usize = DELAY_EDGES_HOURS.len();
/// Outcomes of a category from which it has a say in the maturity age.
const FEWEST_OUTCOMES: f64 = 100.0;
/// Share of the eventual outcomes that must have come at the maturity age.
const MATURE_SHARE: f64 = 0.98;
/// Age in hours at which outcomes are taken to have come eventually.
const EVENTUAL_HOURS: f64 = 1440.0;
/// Smallest share of outcomes that may be scaled up to all.
const SMALLEST_SHARE: f64 = 0.1;
const HOURS_PER_DAY: f64 = 24.0;

/// A window and the age of its youngest record.
#[derive(Debug, Clone, Copy)]
pub struct AgedWindow<'a> {
    /// Age in hours.
    pub age_hours: f64,
    /// Summary of its records.
    pub summary: &'a Summary,
}

/// For each category the share of its outcomes that have come by an age.
#[derive(Debug, Clone, PartialEq)]
pub struct ArrivalCurve {
    /// Shares at the upper edges of the delay bins, J x 24.
    shares: Vec<f64>,
}

impl ArrivalCurve {
    /// From windows that are all older than the largest delay considered: plain shares, with half a
    /// record added, as nothing is censored there.
    pub fn of_complete(summary: &Summary) -> Self {
        let of_category = |counts: &[f64]| {
            let all: f64 = counts.iter().sum();
            let mut sum = 0.0;
            counts
                .iter()
                .map(|count| {
                    sum += count;
                    (sum + 0.5) / (all + 1.0)
                })
                .collect::<Vec<_>>()
        };
        Self { shares: summary.outcomes.delays.chunks(BINS).flat_map(of_category).collect() }
    }

    /// From windows of any age, each delay bin judged by the windows old enough to have seen it:
    /// the reverse-time hazard of right-truncated data (Kalbfleisch and Lawless 1989). The largest
    /// age among the windows counts as eventually.
    ///
    /// # Errors
    /// [`DriftError::Missing`] without windows, [`DriftError::Shape`] for windows of different models.
    pub fn of_windows(windows: &[AgedWindow]) -> Result<Self, DriftError> {
        let Some(first) = windows.first() else {
            return Err(DriftError::Missing { what: "arrival of outcomes", needed: "at least one window" });
        };
        let size = first.summary.outcomes.delays.len();
        if windows.iter().any(|window| window.summary.outcomes.delays.len() != size) {
            return Err(DriftError::Shape { part: "outcomes.delays" });
        }
        let mut shares = vec![1.0; size];
        for category in 0..size / BINS {
            for bin in (1..BINS).rev() {
                let at = category * BINS + bin;
                shares[at - 1] = shares[at] * (1.0 - reverse_hazard(windows, category, bin));
            }
        }
        Ok(Self { shares })
    }

    /// Share of the outcomes of a category that have come by an age; linear within a delay bin.
    pub fn share(&self, category: usize, age_hours: f64) -> f64 {
        let shares = &self.shares[category * BINS..(category + 1) * BINS];
        let bin = DELAY_EDGES_HOURS.partition_point(|edge| *edge < age_hours).min(BINS - 1);
        let (from, below) = if bin == 0 { (0.0, 0.0) } else { (DELAY_EDGES_HOURS[bin - 1], shares[bin - 1]) };
        let to = DELAY_EDGES_HOURS[bin];
        let part = if to.is_finite() { ((age_hours - from) / (to - from)).clamp(0.0, 1.0) } else { 0.0 };
        below + part * (shares[bin] - below)
    }

    /// Shares of all categories at an age.
    pub fn shares(&self, age_hours: f64) -> Vec<f64> {
        (0..self.shares.len() / BINS).map(|category| self.share(category, age_hours)).collect()
    }
}

/// Outcomes in a delay bin over those up to it, in windows that have seen the whole bin. Bins that
/// no window has seen hold nothing.
fn reverse_hazard(windows: &[AgedWindow], category: usize, bin: usize) -> f64 {
    let (mut inside, mut up_to) = (0.0, 0.0);
    for window in windows.iter().filter(|window| window.age_hours >= DELAY_EDGES_HOURS[bin]) {
        let counts = &window.summary.outcomes.delays[category * BINS..];
        inside += counts[bin];
        up_to += counts[..=bin].iter().sum::<f64>();
    }
    if up_to > 0.0 { inside / up_to } else { 0.0 }
}

/// The age in whole days at which 98 % of the eventual outcomes of every category with at least 100
/// outcomes have come; at least 1. `summary` is of windows older than 60 days, and what came by then
/// counts as eventually. Rounded up to an edge of the delay bins. `None` where no category has
/// enough outcomes.
pub fn maturity_days(summary: &Summary) -> Option<u32> {
    let eventual = DELAY_EDGES_HOURS.partition_point(|edge| *edge <= EVENTUAL_HOURS);
    let of_category = |counts: &[f64]| {
        let all: f64 = counts[..eventual].iter().sum();
        if all < FEWEST_OUTCOMES {
            return None;
        }
        let mut sum = 0.0;
        let enough = counts[..eventual].iter().position(|count| {
            sum += count;
            sum >= MATURE_SHARE * all
        });
        enough.map(|bin| (DELAY_EDGES_HOURS[bin] / HOURS_PER_DAY).ceil().max(1.0) as u32)
    };
    summary.outcomes.delays.chunks(BINS).filter_map(of_category).max()
}

/// Delays of the outcomes of one category.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct CategoryDelays {
    /// The category.
    pub category: String,
    /// Outcomes in each delay bin, [`DELAY_EDGES_HOURS`].
    pub counts: Vec<f64>,
    /// Upper edge in hours of the bin in which half of the outcomes have come.
    pub half_by_hours: Option<f64>,
}

/// Delays of the outcomes of every category.
pub fn delays(frame: &Frame, summary: &Summary) -> Vec<CategoryDelays> {
    let counts = summary.outcomes.delays.chunks(BINS);
    let of_category = |(name, counts): (&String, &[f64])| {
        let all: f64 = counts.iter().sum();
        let mut sum = 0.0;
        let half = counts.iter().position(|count| {
            sum += count;
            all > 0.0 && sum >= 0.5 * all
        });
        CategoryDelays {
            category: name.clone(),
            counts: counts.to_vec(),
            half_by_hours: half.map(|bin| DELAY_EDGES_HOURS[bin]).filter(|edge| edge.is_finite()),
        }
    };
    frame.categories.iter().zip(counts).map(of_category).collect()
}

/// Log-odds of a record given that its outcome has come already: each category is likelier in
/// proportion to the share of its outcomes that have come at the record's age. With them every
/// statistic holds for records that are not mature yet, as estimates and never as alarms.
///
/// # Shapes
/// `log_odds`: J-1, changed in place; `shares`: J, from [`ArrivalCurve::shares`].
///
/// # Errors
/// Lengths that do not fit, shares that are not above 0.
pub fn correct_for_arrival(log_odds: &mut [f64], reference: usize, shares: &[f64]) -> Result<(), DriftError> {
    check_length("shares", shares.len(), log_odds.len() + 1)?;
    if reference >= shares.len() {
        return Err(DriftError::Reference { reference, categories: shares.len() });
    }
    for share in shares {
        check_number("shares", *share, *share > 0.0, "must be above 0")?;
    }
    let others = shares.iter().enumerate().filter(|(category, _)| *category != reference);
    for (odds, (_, share)) in log_odds.iter_mut().zip(others) {
        *odds += (share / shares[reference]).ln();
    }
    Ok(())
}

/// The mix of the outcomes of windows that are not mature yet, each outcome weighted by one over the
/// share of its category that has come at its age. `None` without outcomes, and where a share is
/// below 0.1: then too little has come to scale it up.
pub fn corrected_mix(windows: &[AgedWindow], curve: &ArrivalCurve) -> Option<Vec<f64>> {
    let categories = curve.shares.len() / BINS;
    let mut weighted = vec![0.0; categories];
    for window in windows {
        let shares = curve.shares(window.age_hours);
        if shares.iter().any(|share| *share < SMALLEST_SHARE) {
            return None;
        }
        for ((sum, count), share) in weighted.iter_mut().zip(window.summary.observed()).zip(shares) {
            *sum += count / share;
        }
    }
    let total: f64 = weighted.iter().sum();
    (total > 0.0).then(|| weighted.iter().map(|sum| sum / total).collect())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::record::{ScoredRecord, with_probabilities};
    use crate::summary::Detail;
    use crate::test_data::{WORKED_DIGITS, close, log_odds, plain_frame};

    fn frame() -> Frame {
        plain_frame(&["handed-over", "carded"], &[])
    }

    /// A window with some outcomes: category, delay in hours, how many.
    fn window(outcomes: &[(usize, f64, f64)]) -> Summary {
        let frame = frame();
        let mut summary = Summary::new(&frame, Detail::Light);
        let record = ScoredRecord { log_odds: &[0.0], inputs: &[], terms: &[] };
        for (category, delay, count) in outcomes {
            summary.add_outcome(&frame, &record, *category, *delay, *count).expect("an outcome");
        }
        summary
    }

    #[test]
    fn probabilities_given_that_the_outcome_has_come() {
        // Worked example, computed independently in double precision.
        let mut odds = log_odds(&[0.7, 0.2, 0.1]);
        correct_for_arrival(&mut odds, 0, &[0.9, 0.6, 0.3]).expect("shares");
        with_probabilities(&odds, 0, |of| {
            for (found, wanted) in of.p.iter().zip([0.807_692_307_7, 0.153_846_153_8, 0.038_461_538_46]) {
                close("p", *found, wanted, WORKED_DIGITS);
            }
        });
        assert!(correct_for_arrival(&mut odds, 0, &[0.9, 0.6, 0.0]).is_err());
    }

    #[test]
    fn maturity_waits_for_the_slowest_category() {
        // 97 % of the first category come within a day, 98 % within two; the second takes a week.
        let quick = window(&[(0, 20.0, 970.0), (0, 40.0, 10.0), (0, 700.0, 20.0)]);
        assert_eq!(maturity_days(&quick), Some(2));
        let mut both = quick;
        both.merge(&window(&[(1, 160.0, 99.0)])).expect("one frame");
        assert_eq!(maturity_days(&both), Some(2), "too few of the second category to have a say");
        both.merge(&window(&[(1, 160.0, 1.0), (1, 5000.0, 50.0)])).expect("one frame");
        assert_eq!(maturity_days(&both), Some(7), "what comes after 60 days is not waited for");
        assert_eq!(maturity_days(&window(&[])), None);
    }

    #[test]
    fn shares_of_complete_windows() {
        let curve = ArrivalCurve::of_complete(&window(&[(0, 20.0, 3.0), (0, 40.0, 1.0)]));
        close("a day", curve.share(0, 24.0), 3.5 / 5.0, 1e-15);
        close("a day and a half", curve.share(0, 36.0), 4.0 / 5.0, 1e-15);
        close("a year", curve.share(0, 9000.0), 4.5 / 5.0, 1e-15);
    }

    #[test]
    fn windows_of_any_age_give_the_share_of_complete_ones() {
        // Half of the outcomes come within a day, a quarter in the second, a quarter in the third.
        let (first, second, third) = ((0, 20.0, 200.0), (0, 40.0, 100.0), (0, 60.0, 100.0));
        let old = window(&[first, second, third]);
        let younger = window(&[first, second]);
        let youngest = window(&[first]);
        let windows = [(72.0, &old), (48.0, &younger), (24.0, &youngest)]
            .map(|(age_hours, summary)| AgedWindow { age_hours, summary });
        let curve = ArrivalCurve::of_windows(&windows).expect("windows");
        close("a day", curve.share(0, 24.0), 0.5, 1e-15);
        close("two days", curve.share(0, 48.0), 0.75, 1e-15);
        close("three days", curve.share(0, 72.0), 1.0, 1e-15);
        assert!(ArrivalCurve::of_windows(&[]).is_err());
    }

    #[test]
    fn the_mix_of_young_windows_is_scaled_up() {
        // By now all outcomes of the first category have come, and half of the second.
        let complete = window(&[(0, 20.0, 1e9), (1, 20.0, 1e9), (1, 40.0, 1e9)]);
        let curve = ArrivalCurve::of_complete(&complete);
        let young = window(&[(0, 20.0, 60.0), (1, 20.0, 20.0)]);
        let windows = [AgedWindow { age_hours: 24.0, summary: &young }];
        let mix = corrected_mix(&windows, &curve).expect("enough");
        close("first", mix[0], 0.6, 1e-6);
        let windows = [AgedWindow { age_hours: 0.5, summary: &young }];
        assert_eq!(corrected_mix(&windows, &curve), None);
    }

    #[test]
    fn delays_in_a_report() {
        let found = delays(&frame(), &window(&[(0, 20.0, 3.0), (0, 40.0, 1.0)]));
        assert_eq!(found[0].half_by_hours, Some(24.0));
        assert_eq!(found[1].half_by_hours, None);
        assert_eq!(found[0].counts.iter().sum::<f64>(), 4.0);
    }
}
