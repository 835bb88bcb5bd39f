//! The worked example with a category left out.

use super::*;
use crate::worked::{G, X1, X2, close, plan, rows};
use crate::{FitSettings, Session};

/// With c and with b left out: Hausman's statistic (computed in R 4.2.2, badly conditioned),
/// smallest eigenvalue, robust statistic and p-value, and Small and Hsiao's with odd ids as the
/// first half.
#[test]
fn tests_of_independence_equal_the_worked_numbers() {
    let plan = plan(&format!("{X1}{X2}{G}"));
    let mut rows = rows(&plan, |_| true);
    let session = Session::open(&plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
    let mut analysis = session.fit(&mut |_| {}).unwrap();
    let tests = analysis.independence().unwrap();
    assert_eq!(tests.iter().map(|test| test.left_out.as_str()).collect::<Vec<_>>(), ["a", "b", "c"]);
    for (index, kept, hausman, smallest, robust, p, halves, halves_p) in [
        (
            2,
            [0, 1],
            0.069_410_783_7,
            -0.026_524_911_8,
            0.897_289_244_1,
            0.970_417_578_3,
            8.547_240_888_7,
            0.128_544_021_8,
        ),
        (
            1,
            [0, 2],
            0.271_850_915_4,
            -0.033_334_797_8,
            4.486_789_55,
            0.481_652_894_5,
            9.362_440_365_8,
            0.095_452_020_5,
        ),
    ] {
        let test = &tests[index];
        let found = test.hausman.unwrap();
        close("hausman", found.test.statistic, hausman, 1e-5);
        close("smallest", found.smallest_eigenvalue, smallest, 1e-6);
        close("robust", test.robust.statistic, robust, 1e-6);
        close("robust p", test.robust.p, p, 1e-6);
        // Halves of thirty rows often have no estimate.
        assert!((1..=11).contains(&test.small_hsiao.unwrap().halvings));
        // Rows are numbered from 0, ids from 1.
        let part = Part::new(kept.to_vec(), &analysis.solution);
        let odd_ids = |key: u64| key.is_multiple_of(2);
        let found = analysis.small_hsiao_of(&part, &odd_ids).unwrap().unwrap();
        close("halves", found.statistic, halves, 1e-8);
        close("halves p", found.p, halves_p, 1e-8);
    }
}

/// Separate fits equal binary logits of R's `glm`; differences from the joint fit in standard
/// errors of either kind. The intercept is left out: the numbers are of standardised columns.
#[test]
fn separate_fits_equal_the_worked_numbers() {
    let plan = plan(&format!("{X1}{X2}{G}"));
    let mut rows = rows(&plan, |_| true);
    let session = Session::open(&plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
    let fits = session.fit(&mut |_| {}).unwrap().separate_fits().unwrap();
    let scales = [1.442_486_279_541_912, 7.210_794_377_567_256, 1.0, 1.0];
    for (fit, category, separate, shift, z) in [
        (
            &fits[0],
            "b",
            [0.351_385_216_9, 0.076_794_509_4, -0.109_125_716_7, -0.597_337_323_2],
            [0.022_945_020_2, -0.013_216_774_6, 0.011_100_260_6, -0.056_924_725],
            [0.250_379_943_5, -0.184_389_694_3, 0.211_929_621_9, -0.751_368_384_2],
        ),
        (
            &fits[1],
            "c",
            [-1.728_974_191_7, -0.314_498_974, 1.912_197_977_5, 2.011_654_508_2],
            [-0.309_956_415_2, -0.579_616_296_1, 0.883_888_414_7, 0.140_687_764],
            [-0.607_524_091, -1.295_272_198_6, 1.563_556_179_6, 0.419_650_463_3],
        ),
    ] {
        assert_eq!(fit.category, category);
        for (index, term) in fit.terms[1..].iter().enumerate() {
            close(&term.term, term.separate * scales[index], separate[index], 1e-8);
            close(&term.term, (term.separate - term.joint) / term.joint_error, shift[index], 1e-7);
            close(&term.term, term.z, z[index], 1e-7);
        }
    }
}
