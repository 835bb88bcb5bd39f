//! The start of a large table against the way from the intercepts-only model.

use super::*;
use crate::estimate::cross_products;
use crate::newton::maximise;
use crate::separation::{Verdict, decide};
use crate::session::opened;
use crate::{Batches, FitSettings, Plan, Session};
use kilter_model::{Batch, Column, TextColumn};

const ROWS: usize = 100_000;

fn fraction(number: usize) -> f64 {
    (draw(number as u64, 5) >> 11) as f64 * 0.5f64.powi(53)
}

/// Two numbers, and levels of which one has about fifty rows; the outcome depends on all of them.
fn rows() -> Batches {
    let number =
        |salt: usize| -> Vec<f64> { (0..ROWS).map(|row| 4.0 * fraction(row * 4 + salt) - 2.0).collect() };
    let (x1, x2) = (number(0), number(1));
    let level = |row: usize| match fraction(row * 4 + 2) {
        u if u < 0.0005 => 2,
        u if u < 0.4 => 1,
        _ => 0,
    };
    let levels: Vec<u32> = (0..ROWS).map(level).collect();
    let category = |row: usize| {
        let odds = [0.0, 1.5 * x1[row] - x2[row], x2[row] + f64::from(levels[row]) - 1.0];
        let total: f64 = odds.iter().map(|odds| odds.exp()).sum();
        let u = fraction(row * 4 + 3) * total;
        if u < 1.0 { 0 } else { 1 + u32::from(u >= 1.0 + odds[1].exp()) }
    };
    let texts = |codes: Vec<u32>, dictionary: [&str; 3]| {
        Column::Text(TextColumn { codes, dictionary: dictionary.map(String::from).to_vec() })
    };
    let outcome = texts((0..ROWS).map(category).collect(), ["a", "b", "c"]);
    let columns = vec![Column::Number(x1), Column::Number(x2), texts(levels, ["k", "l", "m"]), outcome];
    Batches(vec![Batch { rows: ROWS, columns, bad_cells: vec![] }])
}

fn with_table(use_it: impl FnOnce(&mut Table, &Resolved)) {
    use crate::worked::{G, X1, X2, plan};
    let plan: Plan = plan(&format!("{X1}{X2}{G}"));
    let mut rows = rows();
    let session = Session::open(&plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
    let (mut table, resolved) = opened(session);
    use_it(&mut table, &resolved);
}

#[test]
fn gradients_lead_to_the_optimum() {
    with_table(|table, resolved| {
        let products = cross_products(table, resolved).unwrap();
        let layout = Layout::new(&resolved.design, &resolved.scaling, &[true; 5]);
        let mut passes = 0;
        let near = near_optimum(table, resolved, &layout, products.as_ref(), &mut |_, _| passes += 1);
        let near = near.unwrap().unwrap();
        assert!(passes < 10, "{passes}");
        let start = start_of(&resolved.category_weights, layout.order());
        let mut likelihood = Likelihood::new(table, &layout, resolved);
        let at = likelihood.evaluate(&start, Order::Information).unwrap();
        let cold = maximise(&mut likelihood, start, at, &mut |_, _| {}).unwrap();
        for (index, (near, cold_)) in near.iter().zip(&cold.point).enumerate() {
            let error = cold.covariance[(index, index)].sqrt();
            // The way ends at most 1e-4 standard errors away.
            assert!((near - cold_).abs() < 2e-4 * error, "{index}: {near} {cold_} {error}");
        }
    });
}

/// A level of some fifty rows is drawn whole, the weights add up to all rows.
#[test]
fn rare_levels_are_drawn_whole() {
    with_table(|table, resolved| {
        let chances = Chances::new(resolved, ROWS as f64, 20_000.0);
        let drawn = table.reduce(|chunk| Drawn(vec![chances.draw_from(chunk)])).unwrap().unwrap();
        let part = gathered(drawn.0);
        let count =
            |level: u32| part.iter().flat_map(|c| c.levels(2)).filter(|l| **l == level).count() as f64;
        let of_level: f64 = resolved.level_cases[2][2].iter().sum();
        assert!((20.0..100.0).contains(&of_level) && count(2) == of_level, "{of_level} {}", count(2));
        let weight: f64 = part.iter().flat_map(|chunk| &chunk.weight).sum();
        // Four standard deviations of the sum of weights 1 / 0.2 over the drawn rows.
        assert!((weight - ROWS as f64).abs() < 4.0 * (ROWS as f64 * 4.0).sqrt(), "{weight}");
        assert!(part.iter().rev().skip(1).all(|chunk| chunk.rows() >= CHUNK_ROWS));
    });
}

/// More pairs than the programme takes at once, none of them separated: a part of full rank that
/// overlaps decides.
#[test]
fn overlap_of_many_rows_is_decided() {
    with_table(|table, resolved| {
        let layout = Layout::new(&resolved.design, &resolved.scaling, &[true; 5]);
        assert_eq!(decide(table, &layout, 2, &[0.0; 10]).unwrap(), Verdict::Finite);
    });
}
