//! What holds for every summary.

use proptest::prelude::*;

use crate::frame::Frame;
use crate::record::ScoredRecord;
use crate::summary::{Detail, Summary};
use crate::test_data::parcel_frame;

/// Sums of the same records agree to this, relative to their size, whatever the order.
const AGREEMENT: f64 = 1e-9;

#[derive(Debug, Clone)]
struct Row {
    log_odds: [f64; 3],
    inputs: [f64; 3],
    terms: [f64; 2],
    outcome: Option<(usize, f64)>,
}

fn row() -> impl Strategy<Value = Row> {
    let odds = prop_oneof![9 => -6.0..6.0, 1 => -60.0..60.0];
    let weight = prop_oneof![9 => 0.0..40.0, 1 => Just(f64::NAN)];
    let dwelling = prop_oneof![Just(0.0), Just(1.0), Just(2.0), Just(-1.0), Just(f64::NAN)];
    let rain = prop_oneof![Just(0.0), Just(1.0)];
    (
        prop::array::uniform3(odds),
        weight,
        dwelling,
        rain,
        prop::array::uniform2(-3.0..3.0),
        prop::option::of((0..4_usize, 0.0..2000.0)),
    )
        .prop_map(|(log_odds, weight, dwelling, rain, terms, outcome)| Row {
            log_odds,
            inputs: [weight, dwelling, rain],
            terms,
            outcome,
        })
}

fn add(summary: &mut Summary, frame: &Frame, row: &Row) {
    let record = ScoredRecord { log_odds: &row.log_odds, inputs: &row.inputs, terms: &row.terms };
    summary.add_scored(frame, &record, 1.0).expect("a record");
    if let Some((category, delay)) = row.outcome {
        summary.add_outcome(frame, &record, category, delay, 1.0).expect("an outcome");
    }
}

fn remove(summary: &mut Summary, frame: &Frame, row: &Row) {
    let record = ScoredRecord { log_odds: &row.log_odds, inputs: &row.inputs, terms: &row.terms };
    if let Some((category, delay)) = row.outcome {
        summary.remove_outcome(frame, &record, category, delay, 1.0).expect("an outcome");
    }
    summary.remove_scored(frame, &record, 1.0).expect("a record");
}

fn fold(frame: &Frame, detail: Detail, rows: &[Row]) -> Summary {
    let mut summary = Summary::new(frame, detail);
    for row in rows {
        add(&mut summary, frame, row);
    }
    summary
}

/// All numbers of a summary, in the order in which it is written.
fn numbers(summary: &Summary) -> Vec<f64> {
    fn collect(value: &serde_json::Value, into: &mut Vec<f64>) {
        match value {
            serde_json::Value::Number(number) => into.push(number.as_f64().expect("a number")),
            serde_json::Value::Array(list) => list.iter().for_each(|value| collect(value, into)),
            serde_json::Value::Object(map) => map.values().for_each(|value| collect(value, into)),
            _ => {}
        }
    }
    let mut found = Vec::new();
    collect(&serde_json::to_value(summary).expect("a summary can be written"), &mut found);
    found
}

fn agree(a: &Summary, b: &Summary) -> Result<(), TestCaseError> {
    let (a, b) = (numbers(a), numbers(b));
    prop_assert_eq!(a.len(), b.len());
    let largest = a.iter().fold(1.0_f64, |largest, value| largest.max(value.abs()));
    for (a, b) in a.iter().zip(&b) {
        prop_assert!((a - b).abs() <= AGREEMENT * largest, "{} and {}", a, b);
    }
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn parts_add_up_to_the_whole(rows in prop::collection::vec(row(), 0..40), cut in 0..40_usize) {
        let frame = parcel_frame();
        let cut = cut.min(rows.len());
        for detail in [Detail::Light, Detail::Full] {
            let whole = fold(&frame, detail, &rows);
            let mut parts = fold(&frame, detail, &rows[..cut]);
            parts.merge(&fold(&frame, detail, &rows[cut..])).expect("one frame");
            agree(&whole, &parts)?;
            let _ = parts.subtract(&fold(&frame, detail, &rows[..cut])).expect("it was added");
            agree(&fold(&frame, detail, &rows[cut..]), &parts)?;
        }
    }

    #[test]
    fn what_was_added_can_be_taken_out(
        kept in prop::collection::vec(row(), 0..20),
        passing in prop::collection::vec(row(), 0..20),
    ) {
        let frame = parcel_frame();
        let mut summary = fold(&frame, Detail::Full, &kept);
        for row in &passing {
            add(&mut summary, &frame, row);
        }
        for row in &passing {
            remove(&mut summary, &frame, row);
        }
        agree(&fold(&frame, Detail::Full, &kept), &summary)?;
        for row in &kept {
            remove(&mut summary, &frame, row);
        }
        prop_assert_eq!(summary, Summary::new(&frame, Detail::Full));
    }

    #[test]
    fn order_does_not_matter(rows in prop::collection::vec(row(), 0..40)) {
        let frame = parcel_frame();
        let forward = fold(&frame, Detail::Full, &rows);
        let backward: Vec<Row> = rows.iter().rev().cloned().collect();
        agree(&forward, &fold(&frame, Detail::Full, &backward))?;
    }

    #[test]
    fn a_summary_reads_back(rows in prop::collection::vec(row(), 0..20)) {
        let frame = parcel_frame();
        let summary = fold(&frame, Detail::Full, &rows);
        let text = serde_json::to_string(&summary).expect("a summary can be written");
        let back: Summary = serde_json::from_str(&text).expect("and read");
        prop_assert_eq!(back.check(&frame), Ok(()));
        prop_assert_eq!(back, summary);
    }

    #[test]
    fn a_weight_stands_for_equal_records(row in row(), times in 1..6_u32) {
        let frame = parcel_frame();
        let mut repeated = Summary::new(&frame, Detail::Full);
        for _ in 0..times {
            add(&mut repeated, &frame, &row);
        }
        let mut weighted = Summary::new(&frame, Detail::Full);
        let record = ScoredRecord { log_odds: &row.log_odds, inputs: &row.inputs, terms: &row.terms };
        weighted.add_scored(&frame, &record, f64::from(times)).expect("a record");
        if let Some((category, delay)) = row.outcome {
            weighted.add_outcome(&frame, &record, category, delay, f64::from(times)).expect("an outcome");
        }
        agree(&repeated, &weighted)?;
    }
}
