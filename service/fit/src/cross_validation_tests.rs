//! The worked example of cross-validation.

use super::*;
use crate::session::opened;
use crate::worked::{G, X1, X2, close, plan, rows};
use crate::{FitSettings, Session};

#[test]
fn the_grid_runs_from_ten_to_a_hundred_thousandth() {
    let grid = grid();
    assert_eq!((grid.len(), grid[0]), (25, 10.0));
    assert!((grid[24] - 1e-5).abs() < 1e-18);
}

#[test]
fn the_largest_penalty_within_one_error_is_chosen() {
    let candidates: Vec<Candidate> = [(1.0, 1.2), (0.1, 1.04), (0.01, 1.0), (0.001, 1.1)]
        .map(|(ridge, loss)| Candidate { ridge, loss, error: 0.05 })
        .to_vec();
    let found = choose(5, candidates);
    assert_eq!((found.smallest_loss, found.chosen, found.at_end), (0.01, 0.1, false));
}

/// Five folds by the number of the row, penalties from 10 to 10^-4; computed with a separate
/// program.
#[test]
fn losses_equal_the_worked_numbers() {
    let plan = plan(&format!("{X1}{X2}{G}"));
    let mut rows = rows(&plan, |_| true);
    let session = Session::open(&plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
    let (mut table, resolved) = opened(session);
    let grid: Vec<f64> = (0..=10).map(|step| 10f64.powf(1.0 - 0.5 * f64::from(step))).collect();
    let fold_of = |chunk: &Chunk, row: usize| (chunk.key[row] % 5) as usize;
    let found = cross_validate(&mut table, &resolved, &grid, 5, &fold_of).unwrap();
    close("smallest", found.smallest_loss, 0.316_227_766, 1e-9);
    close("chosen", found.chosen, 1.0, 1e-12);
    for (index, loss) in [
        (0, 1.123_395_142_4),
        (2, 1.095_843_130_8),
        (3, 1.078_296_176_9),
        (4, 1.087_377_806_1),
        (6, 1.175_361_987_7),
        (10, 1.245_328_765_3),
    ] {
        close("loss", found.candidates[index].loss, loss, 1e-8);
    }
    close("error", found.candidates[3].error, 0.026_475_311_2, 1e-7);
}
