//! Tests of the scorer.
use super::*;
use crate::batch::{Column, TextColumn};
use crate::check::tests::programme;
use proptest::prelude::*;

fn batch(rows: &[(&str, f64)]) -> Batch {
    let mut texts = TextColumn::default();
    for (row, (level, _)) in rows.iter().enumerate() {
        texts.codes.push(row as u32);
        texts.dictionary.push((*level).to_owned());
    }
    let numbers = rows.iter().map(|(_, number)| *number).collect();
    Batch { rows: rows.len(), columns: vec![Column::Text(texts), Column::Number(numbers)], bad_cells: vec![] }
}

/// Predicted probabilities at the mean writing score, 52.775, of the published example (UCLA
/// Statistical Consulting Group, "Multinomial Logistic Regression"; the printed values are from
/// memory, and an independent fit gives the same to 1e-6).
#[test]
fn published_probabilities_of_the_programme_example() {
    let scorer = Scorer::new(&programme()).unwrap();
    let scored = scorer.score(&batch(&[("low", 52.775), ("middle", 52.775), ("high", 52.775)]));
    let published = [
        [0.439_684_5, 0.358_191_7, 0.202_123_8],
        [0.477_748_8, 0.228_335_3, 0.293_915_9],
        [0.700_900_7, 0.178_493_9, 0.120_605_4],
    ];
    for (row, expected) in published.iter().enumerate() {
        for (found, wanted) in scored.probabilities_of(row).iter().zip(expected) {
            assert!((found - wanted).abs() < 3e-6, "row {row}: {found} instead of {wanted}");
        }
    }
    assert_eq!(scored.top_of(2), 0);
}

#[test]
fn a_record_whose_log_odds_overflow_is_refused_and_its_neighbour_scored() {
    let mut model = programme();
    model.coefficients.get_mut("general").unwrap()[3] = 1e300;
    let scorer = Scorer::new(&model).unwrap();
    let scored = scorer.score(&batch(&[("low", 1e300), ("low", 1e3)]));
    assert_eq!(scored.coded.refused.len(), 1);
    assert!(scored.coded.refused[0].reason.contains("too large"));
    assert_eq!(scored.probabilities_of(1), [0.0, 1.0, 0.0]);
}

#[test]
fn stable_far_out() {
    let mut log_p = [0.0; 3];
    log_probabilities_from_log_odds(&[800.0, -800.0], 0, &mut log_p);
    assert_eq!(log_p, [-800.0, 0.0, -1600.0]);
    let mut p = [0.0; 2];
    probabilities_from_log_odds(&[1e300], 0, &mut p);
    assert_eq!(p, [0.0, 1.0]);
}

/// The compiled blocks against the plain definition: every term times its coefficient.
#[test]
fn blocks_equal_the_sum_over_terms() {
    use crate::file::*;
    let mut model = programme();
    let second = LevelsField {
        name: "depot".into(),
        levels: vec!["north".into(), "south".into()],
        ..match &model.fields[0] {
            Field::Levels(levels) => LevelsField { reference: "south".into(), ..levels.clone() },
            _ => panic!("the first field has levels"),
        }
    };
    model.fields.push(Field::Levels(second));
    model.fields.push(Field::Number(NumberField {
        name: "rain".into(),
        unit: None,
        form: Form::Polynomial(2),
        range: None,
        missing: MissingNumber::MeanAndFlag(Means { means: vec![2.0, 5.0] }),
        observed: None,
    }));
    for pair in [["ses", "depot"], ["write", "ses"], ["write", "rain"], ["rain", "depot"]] {
        model.interactions.push(pair.map(String::from));
    }
    let design = Design::of_model(&model).unwrap();
    model.terms = design.term_names();
    for (row, coefficients) in model.coefficients.values_mut().enumerate() {
        *coefficients =
            (0..design.terms().len()).map(|t| ((t * 7 + row * 3) % 11) as f64 / 16.0 - 0.3).collect();
    }
    let scorer = Scorer::new(&model).unwrap();
    let records = [[0.0, 1.5, 0.0, 2.0], [2.0, -3.0, 1.0, f64::NAN], [1.0, 0.25, 0.0, -1.0]];
    let columns: Vec<Vec<f64>> =
        (0..4).map(|field| records.iter().map(|record| record[field]).collect()).collect();
    let mut room = Room::new(&scorer, records.len());
    scorer.score_block(&columns, 0, &mut room);
    let (mut dense, mut terms) = (vec![0.0; design.dense().len()], vec![0.0; design.terms().len()]);
    for (row, values) in records.iter().enumerate() {
        design.fill_row(values, &mut dense, &mut terms);
        for (place, category) in model.compared_categories().enumerate() {
            let found = room.log_odds[place * records.len() + row];
            let wanted: f64 = terms.iter().zip(&model.coefficients[category]).map(|(x, b)| x * b).sum();
            assert!((found - wanted).abs() < 1e-12, "{values:?}: {found} {wanted}");
        }
    }
}

#[test]
fn a_record_has_the_same_bits_alone_and_among_others() {
    let scorer = Scorer::new(&programme()).unwrap();
    let levels = ["low", "middle", "high", "top"];
    let rows: Vec<(&str, f64)> =
        (0..500).map(|row| (levels[row % 4], 20.0 + (row as f64 * 0.717).sin() * 45.0)).collect();
    let together = scorer.score(&batch(&rows));
    for (row, record) in rows.iter().enumerate() {
        let alone = scorer.score(&batch(&[*record]));
        let bits = |p: &[f64]| p.iter().map(|p| p.to_bits()).collect::<Vec<_>>();
        assert_eq!(bits(alone.probabilities_of(0)), bits(together.probabilities_of(row)), "{record:?}");
        assert_eq!(bits(alone.log_odds_of(0)), bits(together.log_odds_of(row)), "{record:?}");
    }
}

proptest! {
    #[test]
    fn probabilities_sum_to_one_for_any_finite_log_odds(
        log_odds in prop::collection::vec(-1e308..1e308f64, 1..12),
        small in prop::collection::vec(-40.0..40.0f64, 1..12),
        reference in 0usize..12,
    ) {
        for odds in [&log_odds, &small] {
            let mut p = vec![0.0; odds.len() + 1];
            probabilities_from_log_odds(odds, reference % p.len(), &mut p);
            prop_assert!((p.iter().sum::<f64>() - 1.0).abs() < 1e-12);
            prop_assert!(p.iter().all(|p| (0.0..=1.0).contains(p)));
        }
    }

    #[test]
    fn logarithms_agree_with_probabilities(odds in prop::collection::vec(-30.0..30.0f64, 1..9)) {
        let (mut p, mut log_p) = (vec![0.0; odds.len() + 1], vec![0.0; odds.len() + 1]);
        probabilities_from_log_odds(&odds, 0, &mut p);
        log_probabilities_from_log_odds(&odds, 0, &mut log_p);
        for (p, log_p) in p.iter().zip(&log_p) {
            prop_assert!((p.ln() - log_p).abs() < 1e-12);
        }
    }

    #[test]
    fn the_reference_category_changes_nothing(write in 20.0..80.0f64, class in 0usize..3) {
        let model = programme();
        let mut other = model.clone();
        other.outcome.reference = "vocational".into();
        let vocational = model.coefficients["vocational"].clone();
        let minus = |row: &[f64]| row.iter().zip(&vocational).map(|(a, b)| a - b).collect::<Vec<_>>();
        other.coefficients.clear();
        other.coefficients.insert("academic".into(), minus(&[0.0; 4]));
        other.coefficients.insert("general".into(), minus(&model.coefficients["general"]));
        let rows = batch(&[(["low", "middle", "high"][class], write)]);
        let here = Scorer::new(&model).unwrap().score(&rows);
        let there = Scorer::new(&other).unwrap().score(&rows);
        for (a, b) in here.probabilities.iter().zip(&there.probabilities) {
            prop_assert!((a - b).abs() < 1e-14);
        }
    }
}
