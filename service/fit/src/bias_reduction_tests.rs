//! Values of R 4.2.2 with brglm2 0.9 (`brmultinom`, mean bias reduction), which agrees to nine
//! digits; columns are standardised.

use super::*;
use crate::session::opened;
use crate::worked::{G, X1, X2, close, plan, rows};
use crate::{Batches, FitSettings, Plan, Session};

const TINY: [f64; 10] = [
    -0.072_859_433_9,
    0.296_717_398_8,
    0.070_840_980_1,
    -0.098_428_429_6,
    -0.468_328_076_4,
    -1.094_356_971_9,
    -1.321_126_590_4,
    -0.080_504_899_4,
    0.867_037_880_7,
    1.606_334_844_1,
];
const WITHOUT_CELL: [f64; 10] = [
    -0.073_996_541_9,
    0.257_939_581_7,
    0.183_089_342_4,
    -0.056_213_984_7,
    -2.368_536_136_7,
    -1.000_126_25,
    -1.238_864_154_9,
    -0.119_553_83,
    0.794_861_712_8,
    1.420_787_323_1,
];

fn with_solution<T>(
    plan: &Plan,
    mut rows: Batches,
    use_it: impl FnOnce(&mut Table, &Resolved, Solution) -> T,
) -> T {
    let session = Session::open(plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
    let (mut table, mut resolved) = opened(session);
    // The constants of the whole table, in which the values are given.
    resolved.scaling.centre = vec![2.37, 2_004.266_666_666_666_7];
    resolved.scaling.scale = vec![1.442_486_279_541_912, 7.210_794_377_567_256];
    let solution = estimate_bias_reduced(&mut table, &resolved, &mut |_, _| {}).unwrap();
    use_it(&mut table, &resolved, solution)
}

fn compare(solution: &Solution, beta: &[f64], errors: &[f64], log_likelihood: f64, adjusted: f64) {
    for index in 0..beta.len() {
        close("beta", solution.optimum.point[index], beta[index], 1e-8);
        close("error", solution.optimum.covariance[(index, index)].sqrt(), errors[index], 1e-8);
    }
    close("log-likelihood", solution.log_likelihood, log_likelihood, 1e-10);
    close("adjusted", solution.optimum.at.value, adjusted, 1e-9);
}

#[test]
fn data_that_overlap() {
    let plan = plan(&format!("{X1}{X2}{G}"));
    let errors = [
        0.442_280_523_9,
        0.390_840_713_7,
        0.324_224_152_1,
        0.786_790_782_6,
        0.839_684_218_2,
        0.621_378_883_6,
        0.496_901_463_6,
        0.371_315_573_3,
        0.992_913_840_1,
        0.878_586_618_7,
    ];
    with_solution(&plan, rows(&plan, |_| true), |_, _, solution| {
        compare(&solution, &TINY, &errors, -53.378_920_789_2, -46.196_258_433_8);
    });
}

/// Without the rows of category b at level m maximum likelihood has no estimate.
#[test]
fn data_that_separate() {
    let plan = plan(&format!("{X1}{X2}{G}"));
    let errors = [
        0.444_576_738_5,
        0.406_917_545_1,
        0.360_065_173_4,
        0.786_793_293_4,
        1.605_997_911,
        0.609_192_137_9,
        0.487_897_031_8,
        0.391_891_040_2,
        0.983_250_687_4,
        0.857_277_572,
    ];
    let rows = rows(&plan, |row| row[1] != "b" || row[5] != "m");
    with_solution(&plan, rows, |table, resolved, solution| {
        compare(&solution, &WITHOUT_CELL, &errors, -47.337_960_920_3, -41.176_699_793_4);
        // The adjusted score a tenth away from the solution.
        let point: Vec<f64> = WITHOUT_CELL.iter().map(|b| b + 0.1).collect();
        let mut reduction = BiasReduction::new(table, &solution.layout, resolved);
        let (mut there, factor) = reduction.evaluate(&point).unwrap();
        reduction.adjust(&point, &factor, &mut there.at).unwrap();
        let wanted = [
            -1.331_342_304_2,
            -1.017_472_972_6,
            -0.485_793_958_3,
            -0.558_860_434_9,
            -0.068_036_616_6,
            -0.881_701_848_1,
            -0.173_793_425_6,
            -0.417_070_228_8,
            -0.231_047_018_6,
            -0.528_645_869_5,
        ];
        for (found, wanted) in there.at.gradient.iter().zip(wanted) {
            close("score", *found, wanted, 1e-7);
        }
        // The coefficient of the empty cell held at 0: penalised likelihood ratio 3.936407234.
        let restricted = BiasReduction::new(table, &solution.layout, resolved).holding(&[4]);
        let (optimum, _) = restricted.maximise(&mut |_, _| {}).unwrap();
        close("restricted", optimum.at.value, -43.144_903_410_2, 1e-9);
        close("ratio", 2.0 * (solution.optimum.at.value - optimum.at.value), 3.936_407_234, 1e-7);
    });
}

/// The row of probabilities and H of the first row at the maximum likelihood fit.
#[test]
fn pseudo_counts_add_up_to_nothing_over_all_categories() {
    let (q, h) = ([0.102_138_4, 0.677_423_6], [0.634_849_6, 0.211_645, 0.211_645, 0.445_36]);
    let counts = pseudo_counts(&q, &h);
    // The reference has h = 0 and (H q) = 0.
    let reference = 1.0 - q[0] - q[1];
    let quadratic = q[0] * (h[0] * q[0] + h[1] * q[1]) + q[1] * (h[2] * q[0] + h[3] * q[1]);
    let of_reference = reference * (-(q[0] * h[0] + q[1] * h[3]) + 2.0 * quadratic);
    assert!((counts[0] + counts[1] + of_reference).abs() < 1e-15);
}
