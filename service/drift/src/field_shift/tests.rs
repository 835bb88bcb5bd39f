use super::*;
use crate::test_data::close;

fn part(bins: &[f64], missing: f64, unseen: f64, outside: f64) -> FieldPart {
    FieldPart { bins: bins.to_vec(), missing, unseen, outside }
}

fn known() -> FieldBaseline {
    FieldBaseline {
        counts: vec![2495.0, 2500.0],
        missing: 5.0,
        observed: Some([0.0, 1.0]),
        ..FieldBaseline::default()
    }
}

#[test]
fn missing_values_are_flagged_when_surely_and_much_more() {
    for (missing, present, flagged) in [
        (3.0, 47.0, false),
        (20.0, 0.0, true),
        (19.0, 0.0, false),
        (30.0, 4000.0, false),
        (400.0, 20_000.0, true),
        (2000.0, 20_000.0, true),
    ] {
        let rate = missing_rate(&part(&[present, 0.0], missing, 0.0, 0.0), Some(&known()));
        assert_eq!(rate.flagged, flagged, "{rate:?}");
    }
    // Exact and normal tails meet where one takes over from the other, at 1000 cases.
    let many = FieldBaseline { counts: vec![50_000.0], missing: 480.0, ..FieldBaseline::default() };
    let p = |missing| missing_rate(&part(&[50_000.0], missing, 0.0, 0.0), Some(&many)).p.expect("a value");
    let (exact, normal) = (p(520.0), p(521.0));
    assert!(normal < exact && normal > 0.9 * exact, "{exact}, {normal}");
    assert_eq!(missing_rate(&part(&[50.0], 50.0, 0.0, 0.0), None).p, None);
}

#[test]
fn unseen_levels_are_judged_by_the_rare_ones_of_the_fit() {
    let live = part(&[990.0, 0.0], 0.0, 10.0, 0.0);
    let never_rare = FieldBaseline { rare_levels: Some([0, 0]), ..known() };
    let often_rare = FieldBaseline { rare_levels: Some([40, 5]), ..known() };
    let surprising = unseen_rate(&live, Some(&never_rare));
    let ordinary = unseen_rate(&live, Some(&often_rare));
    assert!(surprising.flagged && !ordinary.flagged, "{surprising:?}, {ordinary:?}");
    // No level seen once or twice: a = 1, b = N, so P(X >= 1) = n / (n + N).
    let one = unseen_rate(&part(&[9.0, 0.0], 0.0, 1.0, 0.0), Some(&never_rare));
    close("one", one.p.expect("a value"), 10.0 / 5005.0, 1e-12);
}

#[test]
fn one_more_number_falls_outside_the_range_in_two_of_n_plus_one() {
    let rate = outside_rate(&part(&[1.0, 0.0], 0.0, 0.0, 1.0), Some(&known()));
    close("p", rate.p.expect("a value"), 2.0 / 4996.0, 1e-12);
    let unknown = FieldBaseline { observed: None, ..known() };
    assert_eq!(outside_rate(&part(&[1.0, 0.0], 0.0, 0.0, 1.0), Some(&unknown)).p, None);
}

#[test]
fn bands_hold_for_the_debiased_index() {
    let training = [1000.0; 10];
    let uneven = [8.0, 2.0, 5.0, 7.0, 4.0, 6.0, 3.0, 5.0, 8.0, 2.0];
    let small = shift(&uneven, &training);
    assert!(small.index.is_some_and(|index| index > 0.1));
    assert_eq!(small.movement, Movement::Steady, "an index above 0.1 is chance in fifty records");
    let scaled = |factor: f64| shift(&uneven.map(|count| factor * count), &training).movement;
    assert_eq!(scaled(100.0), Movement::Moved);
    assert_eq!(scaled(0.8), Movement::TooFew);
    let strongly = [200.0, 10.0, 200.0, 10.0, 10.0, 200.0, 10.0, 10.0, 200.0, 10.0];
    assert_eq!(shift(&strongly, &training).movement, Movement::StronglyMoved);
    let slightly: Vec<f64> = (0..10).map(|bin| 10_000.0 + 500.0 * f64::from(bin)).collect();
    assert_eq!(shift(&slightly, &training).movement, Movement::SmallButReal);
    assert_eq!(shift(&[5.0], &[10.0]).movement, Movement::Unknown);
}

#[test]
fn rare_levels_and_empty_bins_are_put_together() {
    let (live, training) = rare_merged(&[50.0, 1.0, 2.0, 47.0], &[500.0, 1.0, 2.0, 497.0]);
    assert_eq!((live, training), (vec![50.0, 47.0, 3.0], vec![500.0, 497.0, 3.0]));
    let (live, training) = neighbours_merged(&[0.0, 3.0, 40.0, 7.0], &[0.0, 2.0, 998.0, 0.0]);
    assert_eq!((live, training), (vec![50.0], vec![1000.0]));
}
