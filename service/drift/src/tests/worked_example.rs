//! The worked example: eight records of three categories, computed independently in double
//! precision and given to ten digits.

use kilter_model::{Baseline, Holdout};

use crate::baseline::{FitFacts, baseline, expected_slope, holdout};
use crate::calibration::{ScoreTests, calibration, estimates, matrix_form};
use crate::coverage::coverage;
use crate::error::DriftError;
use crate::field_shift::{Movement, shift};
use crate::frame::{Frame, PROBABILITY_BINS};
use crate::grouped_fit;
use crate::label_shift::{StoppingRule, shares_by_likelihood};
use crate::losses::{brier, log_loss};
use crate::mix::{category_test, homogeneity, joint_test};
use crate::predicted_mix::predicted_mix;
use crate::recalibration::{Observations, Recalibration, recalibrate};
use crate::record::Probabilities;
use crate::reliability::{bin_sums, bin_test, calibration_error};
use crate::score_sums::ScoreSums;
use crate::segments::{discoveries, shrink};
use crate::statistic::Status;
use crate::summary::{Detail, FullPart, Summary, lower};
use crate::test_data::{
    WORKED_DIGITS, WORKED_MIX, WORKED_P, WORKED_Y, close, log_odds, plain_frame, summary_of, worked_frame,
    worked_summary,
};
use crate::training::TrainingUncertainty;
use crate::{ScoredRecord, mix};

/// A baseline in which everything that the example does not name is empty or neutral.
pub(super) fn plain_baseline(mix: &[f64], covariance: &[f64], cases: f64, expected_slope: f64) -> Baseline {
    Baseline {
        cases,
        mix: mix.to_vec(),
        slopes: 4,
        slope_information: 100.0,
        expected_slope,
        variance: vec![1.0; mix.len()],
        mean_probability: mix.to_vec(),
        probability_covariance: covariance.to_vec(),
        probability_histogram: vec![vec![1.0; PROBABILITY_BINS]; mix.len()],
        decile_edges: vec![0.45, 0.72],
        log_loss: 0.9,
        fields: Vec::new(),
        term_means: Vec::new(),
        term_covariance: Vec::new(),
    }
}

fn framed(expected_slope: f64) -> Frame {
    let mut frame = worked_frame();
    frame.baseline = Some(plain_baseline(&WORKED_MIX, &[0.0; 9], 1000.0, expected_slope));
    frame
}

fn assert_all(what: &str, found: &[f64], wanted: &[f64]) {
    assert_eq!(found.len(), wanted.len(), "{what}");
    for (index, (found, wanted)) in found.iter().zip(wanted).enumerate() {
        close(&format!("{what} {index}"), *found, *wanted, WORKED_DIGITS);
    }
}

#[test]
fn sums() {
    let part = worked_summary().outcomes;
    assert_eq!(part.observed, [2.0, 3.0, 3.0]);
    assert_all("E", &part.expected.values(), &[3.15, 2.25, 2.6]);
    let v = [[1.3625, -0.7825, -0.58], [-0.7825, 1.4375, -0.655], [-0.58, -0.655, 1.235]];
    for row in 0..3 {
        for column in 0..3 {
            close("V", part.variance.value(lower(row, column)), v[row][column], WORKED_DIGITS);
        }
    }
    close("L", part.loss.values().iter().sum(), 6.717_465_553, WORKED_DIGITS);
    close("H", part.entropy.value(), 6.882_683_101, WORKED_DIGITS);
    close("VL", part.loss_variance.value(), 2.835_867_204, WORKED_DIGITS);
    close("L2", part.loss_squared.value(), 8.770_386_039, WORKED_DIGITS);
    assert_all("C", &part.loss_covariance.values(), &[0.413_555_043_6, -0.481_123_802_9, 0.067_568_759_3]);
    close("B", part.brier.value(), 3.965, WORKED_DIGITS);
    close("EB", part.brier_expected.value(), 4.035, WORKED_DIGITS);
    close("VB", part.brier_variance.value(), 1.2627, WORKED_DIGITS);
    assert_eq!(part.surprises, 0.0);
    assert_eq!(part.surprises_expected.value(), 0.0);
}

#[test]
fn class_mix() {
    let sums = ScoreSums::new(&worked_summary());
    let z = |phi| {
        (0..3).map(move |category| category_test(&sums, category, Some(phi)).statistic.expect("a value"))
    };
    let known: Vec<f64> = z.clone()(1.0).collect();
    assert_all("z", &known, &[-0.985_211_754_8, 0.625_543_242_2, 0.359_937_016_5]);
    let corrected: Vec<f64> = z(1.008).collect();
    assert_all("z", &corrected, &[-0.981_294_396_3, 0.623_055_982_8, 0.358_505_849_8]);

    let sums = ScoreSums::new(&worked_summary());
    let joint = joint_test(&sums, Some(1.008), 2.0);
    assert_eq!(joint.df, Some(2));
    close("T", joint.statistic.expect("a value"), 0.970_988_487, WORKED_DIGITS);
    close("p", joint.p.expect("a value"), 0.615_392_967_6, WORKED_DIGITS);
    close("p without phi", joint.p_without_phi.expect("a value"), 0.613_007_445_3, WORKED_DIGITS);
    assert_eq!(joint.status, Status::TooFew);
    // With five expected cases in every cell all three categories fall together.
    assert_eq!(joint_test(&sums, Some(1.008), 5.0).status, Status::NotAvailable);

    let training = homogeneity(&sums.observed, &WORKED_MIX, 1000.0);
    close("T", training.statistic.expect("a value"), 2.351_427_339, WORKED_DIGITS);
    close("p", training.p.expect("a value"), 0.308_598_663_6, WORKED_DIGITS);
    assert_eq!(training.df, Some(2));
}

#[test]
fn losses() {
    let frame = framed(1.0);
    let summary = worked_summary();
    let loss = log_loss(&frame, &summary);
    close("loss", loss.mean.expect("a value"), 0.839_683_194_1, WORKED_DIGITS);
    close("expected", loss.expected.expect("a value"), 0.860_335_387_7, WORKED_DIGITS);
    let phi = TrainingUncertainty::new(&frame, &summary).phi.expect("a value");
    close("phi", phi, 1.008, 1e-15);
    close("z", loss.excess.statistic.expect("a value") * phi.sqrt(), -0.098_109_989_55, WORKED_DIGITS);
    close("null", loss.null.expect("a value"), 1.228_315_814, WORKED_DIGITS);
    close("skill", loss.skill.expect("a value"), 0.316_394_705_2, WORKED_DIGITS);
    close("skill error", loss.skill_standard_error.expect("a value"), 0.215_492_353, WORKED_DIGITS);
    assert_eq!(loss.excess.status, Status::TooFew);
    let score = brier(&frame, &summary);
    close("brier", score.mean.expect("a value"), 0.495_625, WORKED_DIGITS);
    close("expected", score.expected.expect("a value"), 0.504_375, WORKED_DIGITS);
    close("z", score.excess.statistic.expect("a value") * phi.sqrt(), -0.062_294_248_33, WORKED_DIGITS);
}

#[test]
fn score_tests() {
    let frame = worked_frame();
    let summary = worked_summary();
    let sums = ScoreSums::new(&summary);
    let tests = ScoreTests::new(&sums, 1.0, 0.0);
    close("T1", tests.intercepts.value, 0.978_756_394_9, WORKED_DIGITS);
    close("T2", tests.joint.value, 1.087_299_912, WORKED_DIGITS);
    close("slope", tests.slope().value, 0.108_543_517_5, WORKED_DIGITS);
    assert_eq!((tests.intercepts.rank, tests.joint.rank, tests.slope().rank), (2, 3, 1));
    let centred = ScoreTests::new(&sums, 0.98, 0.0);
    close("T1 centred", centred.intercepts.value / 1.008, 0.956_334_678_5, WORKED_DIGITS);
    close("T2 centred", centred.joint.value / 1.008, 1.086_352_144, WORKED_DIGITS);
    close("slope centred", centred.slope().value / 1.008, 0.130_017_465_5, WORKED_DIGITS);
    let matrix = matrix_form(&frame, &summary).expect("a full summary");
    close("T3", matrix.value, 5.446_524_546, WORKED_DIGITS);
    assert_eq!(matrix.rank, 6);
}

#[test]
fn one_step_estimates() {
    let sums = ScoreSums::new(&worked_summary());
    let (theta, covariance) = sums.one_step(0);
    assert_all("theta", &theta, &[0.965_278_188_9, 0.824_763_571, 0.202_374_642_2]);
    let wanted = [
        0.980_295_078,
        0.511_481_068_1,
        0.154_126_806_1,
        0.511_481_068_1,
        1.077_645_077,
        0.061_099_678_97,
        0.154_126_806_1,
        0.061_099_678_97,
        0.377_318_671_4,
    ];
    assert_all("covariance", &covariance, &wanted);
    let found = estimates(&framed(1.0), &sums, Some(4.0));
    let first = &found.intercepts[0];
    assert_eq!(first.category, "neighbour");
    close("odds", first.odds_factor, 0.965_278_188_9_f64.exp(), 1e-8);
    close("error", first.estimate.standard_error.expect("a value"), 2.0 * 0.980_295_078_f64.sqrt(), 1e-8);
    close("slope", found.slope.estimate, 1.202_374_642_2, WORKED_DIGITS);
}

#[test]
fn reliability_bins_and_calibration_error() {
    let full = full_part();
    let rows: [&[(usize, [f64; 4])]; 3] = [
        &[
            (4, [1.0, 0.05, 0.0475, 0.0]),
            (5, [1.0, 0.1, 0.09, 0.0]),
            (6, [1.0, 0.25, 0.1875, 0.0]),
            (7, [1.0, 0.3, 0.21, 0.0]),
            (8, [1.0, 0.4, 0.24, 1.0]),
            (9, [1.0, 0.5, 0.25, 0.0]),
            (11, [1.0, 0.7, 0.21, 1.0]),
            (12, [1.0, 0.85, 0.1275, 0.0]),
        ],
        &[
            (5, [2.0, 0.25, 0.2175, 1.0]),
            (6, [2.0, 0.4, 0.32, 0.0]),
            (7, [2.0, 0.6, 0.42, 1.0]),
            (8, [1.0, 0.4, 0.24, 0.0]),
            (10, [1.0, 0.6, 0.24, 1.0]),
        ],
        &[
            (4, [1.0, 0.05, 0.0475, 0.0]),
            (5, [2.0, 0.25, 0.2175, 0.0]),
            (6, [2.0, 0.4, 0.32, 0.0]),
            (9, [1.0, 0.5, 0.25, 1.0]),
            (10, [1.0, 0.6, 0.24, 1.0]),
            (12, [1.0, 0.8, 0.16, 1.0]),
        ],
    ];
    let errors = [
        (0.36875, 0.320_594_221_2, 0.087_954_672_29, 0.167_705_098_3, 9.520_885_547),
        (0.29375, 0.265_289_070_9, 0.090_343_016_23, 0.0, 4.800_492_611),
        (0.225, 0.263_291_659_6, 0.083_738_299_66, 0.0, 2.756_654_567),
    ];
    for (category, (mean, expected, deviation, rms, q)) in errors.into_iter().enumerate() {
        let bins = bin_sums(&full, category);
        for (bin, row) in rows[category] {
            let found = bins[*bin];
            assert_all("bin", &[found.n, found.probability, found.variance, found.observed], row);
        }
        let error = calibration_error(&bins, Some(1.0), 8.0);
        close("mean", error.mean.expect("a value"), mean, WORKED_DIGITS);
        close("expected", error.expected.expect("a value"), expected, WORKED_DIGITS);
        close("deviation", error.expected_deviation.expect("a value"), deviation, WORKED_DIGITS);
        close("size", error.debiased_root_mean_square.expect("a value"), rms, WORKED_DIGITS);
        let test = bin_test(&bins, Some(1.0), 0.0, 8.0);
        close("Q", test.statistic.expect("a value"), q, WORKED_DIGITS);
        assert_eq!(test.df, Some(rows[category].len()));
    }
}

/// The full part, from the probabilities as they stand: rebuilt from log-odds, one that stands on an
/// edge of a bin may be rounded to either side of it.
fn full_part() -> FullPart {
    let frame = worked_frame();
    let mut full = FullPart::new(&frame);
    for (p, y) in WORKED_P.iter().zip(WORKED_Y) {
        let log_p = p.map(f64::ln);
        let entropy = -p.iter().zip(log_p).map(|(p, log_p)| p * log_p).sum::<f64>();
        full.fold(&frame, &Probabilities { p, log_p: &log_p, entropy }, &log_odds(p), y, 1.0);
    }
    full
}

#[test]
fn grouped_goodness_of_fit() {
    let found = grouped_fit::fit(&worked_frame(), &full_part(), Some(1.0), 0.0);
    close("T", found.test.statistic.expect("a value"), 2.724_903_589, WORKED_DIGITS);
    assert_eq!(found.test.df, Some(6));
    assert_eq!(found.groups.len(), 3);
    assert_eq!(found.groups.iter().map(|group| group.n).sum::<f64>(), 8.0);
    // With five expected cases in every cell all groups and categories fall together.
    let pooled = grouped_fit::fit(&worked_frame(), &full_part(), Some(1.0), 5.0);
    assert_eq!((pooled.groups.len(), pooled.test.status), (1, Status::NotAvailable));
}

#[test]
fn likelihood_ratio_fits() {
    let odds: Vec<f64> = WORKED_P.iter().flat_map(|p| log_odds(p)).collect();
    let data = Observations { categories: 3, reference: 0, log_odds: &odds, outcomes: &WORKED_Y };
    let as_given = data.log_likelihood().expect("records");
    close("as given", as_given, -6.717_465_553, WORKED_DIGITS);
    let intercepts = recalibrate(&data, Recalibration::Intercepts).expect("a fit");
    close("intercepts", 2.0 * (intercepts.log_likelihood - as_given), 1.024_165_369, WORKED_DIGITS);
    assert_all("intercepts", &intercepts.intercepts, &[0.939_696_736_5, 0.879_897_796_3]);
    assert_eq!(intercepts.slopes, [1.0, 0.0, 0.0, 1.0]);
    let both = recalibrate(&data, Recalibration::InterceptsAndSlope).expect("a fit");
    close("both", 2.0 * (both.log_likelihood - as_given), 1.282_999_063, WORKED_DIGITS);
    assert_all("both", &both.parameters, &[1.231_218_961, 1.131_126_36, 1.355_296_696_6]);
}

#[test]
fn shares_by_the_iteration() {
    let p: [f64; 24] = [
        0.8, 0.15, 0.05, 0.1, 0.8, 0.1, 0.15, 0.1, 0.75, 0.6, 0.3, 0.1, 0.2, 0.2, 0.6, 0.05, 0.85, 0.1, 0.1,
        0.1, 0.8, 0.7, 0.1, 0.2,
    ];
    let mix = [0.4, 0.35, 0.25];
    for (rounds, wanted) in
        [(1, [0.3375, 0.325, 0.3375]), (2, [0.297_676_568_3, 0.306_949_922_1, 0.395_373_509_6])]
    {
        let rule = StoppingRule { change: 1e-12, rounds };
        let found = shares_by_likelihood(&p, &mix, None, rule).expect("records");
        assert_all("shares", &found.shares, &wanted);
        assert!(!found.converged);
    }
    let rule = StoppingRule { change: 1e-12, rounds: 5000 };
    let found = shares_by_likelihood(&p, &mix, None, rule).expect("records");
    // The worked figures were taken at a change of 1e-7, a little before the limit.
    let wanted = [0.230_657_810_8, 0.283_099_979_2, 0.486_242_21];
    for (found, wanted) in found.shares.iter().zip(wanted) {
        close("shares", *found, wanted, 1e-6);
    }
    for (found, wanted) in
        found.standard_errors.iter().zip([0.262_418_396_2, 0.263_513_331_4, 0.282_956_504_9])
    {
        close("errors", *found, wanted, 1e-5);
    }
    let corrected = shares_by_likelihood(&p, &mix, Some(8.0), rule).expect("records");
    close("doubled", corrected.standard_errors[0], found.standard_errors[0] * 2.0_f64.sqrt(), 1e-12);
    assert!(found.converged);
}

#[test]
fn predicted_mix_and_label_shift() {
    let p = [
        [0.8, 0.15, 0.05],
        [0.1, 0.8, 0.1],
        [0.15, 0.1, 0.75],
        [0.6, 0.3, 0.1],
        [0.2, 0.2, 0.6],
        [0.05, 0.85, 0.1],
        [0.1, 0.1, 0.8],
        [0.7, 0.1, 0.2],
    ];
    let covariance = [0.08, -0.045, -0.035, -0.045, 0.075, -0.03, -0.035, -0.03, 0.065];
    let mut frame = worked_frame();
    frame.baseline = Some(plain_baseline(&[0.4, 0.35, 0.25], &covariance, 1000.0, 1.0));
    let found = predicted_mix(&frame, &summary_of(&frame, &p, &[0; 8]));
    let shares: Vec<f64> = found.categories.iter().map(|category| category.share.expect("a value")).collect();
    assert_all("shares", &shares, &[0.3375, 0.325, 0.3375]);
    close("T", found.test.statistic.expect("a value"), 0.965_546_071_7, WORKED_DIGITS);
    close("p", found.test.p.expect("a value"), 0.617_069_860_2, WORKED_DIGITS);
    assert_eq!((found.test.df, found.test.status, found.moved), (Some(2), Status::TooFew, false));
    let estimated = found.if_only_shares_changed.expect("identified");
    let shares: Vec<f64> = estimated.iter().map(|estimate| estimate.share).collect();
    assert_all("shares", &shares, &[0.218_553_459_1, 0.279_284_591_2, 0.502_161_949_7]);
    let factor = (1.0_f64 + 8.0 / 1000.0).sqrt();
    let errors: Vec<f64> = estimated.iter().map(|estimate| estimate.standard_error / factor).collect();
    assert_all("errors", &errors, &[0.304_833_524_4, 0.316_302_709, 0.306_864_732_8]);
}

#[test]
fn shift_index() {
    let found = shift(&[30.0, 22.0, 18.0, 20.0, 10.0], &[200.0; 5]);
    close("index", found.index.expect("a value"), 0.107_853_691_9, WORKED_DIGITS);
    close("chi-square", found.test.statistic.expect("a value"), 9.804_881_081, WORKED_DIGITS);
    close("p", found.test.p.expect("a value"), 0.043_845_875_49, WORKED_DIGITS);
    close("excess", found.excess.expect("a value"), 0.063_853_691_89, WORKED_DIGITS);
    assert_eq!(found.movement, Movement::Steady);
}

#[test]
fn discoveries_and_shrinkage() {
    let p = [0.001, 0.012, 0.021, 0.04, 0.3, 0.74].map(Some);
    assert_eq!(discoveries(&p, 0.05), [true, true, true, false, false, false]);
    assert_eq!(discoveries(&[None, Some(0.04)], 0.05), [false, true]);
    assert!(discoveries(&[], 0.05).is_empty());
    let found = shrink(&[0.5, -0.1, 0.2, 0.05], &[0.1, 0.2, 0.15, 0.05]).expect("estimates");
    assert_all("shrunk", &found.values, &[0.451_055_128_3, 0.017_048_821_52, 0.194_068_231_2, 0.055_579_752]);
    assert_all(
        "deviations",
        &found.deviations,
        &[0.094_291_607_99, 0.162_447_472_9, 0.132_289_313_9, 0.049_249_675_21],
    );
    close("between", found.between, 0.055_494_505_49, WORKED_DIGITS);
    close("mean", found.mean, 0.179_437_983_3, WORKED_DIGITS);
}

#[test]
fn training_uncertainty_under_moved_terms() {
    // By hand: one term, its mean moved by half a standard deviation, n = 100, N = 1000:
    // 0.25 - (1/100 + 1/1000) = 0.239 and 1 + 0.1 * 1.239.
    let names = ["handed-over", "carded"].map(str::to_owned).to_vec();
    let mut frame = Frame::for_fit(names, 0, Vec::new(), Vec::new(), 1).expect("a frame");
    let mut known = plain_baseline(&[0.5, 0.5], &[0.0; 4], 1000.0, 1.0);
    known.term_means = vec![2.0];
    known.term_covariance = vec![1.0];
    frame.baseline = Some(known);
    let mut summary = Summary::new(&frame, Detail::Light);
    for index in 0..100 {
        let term = [2.5 + if index % 2 == 0 { 0.3 } else { -0.3 }];
        let record = ScoredRecord { log_odds: &[0.0], inputs: &[], terms: &term };
        summary.add_outcome(&frame, &record, 0, f64::NAN, 1.0).expect("an outcome");
    }
    let found = TrainingUncertainty::new(&frame, &summary);
    close("M2", found.moved.expect("a value"), 0.239, 1e-12);
    close("phi", found.phi.expect("a value"), 1.1239, 1e-12);
}

#[test]
fn without_baseline_there_are_statistics_but_no_p_values() {
    let frame = worked_frame();
    let summary = worked_summary();
    let mix = mix::class_mix(&frame, &summary);
    let z = mix.categories[0].test;
    close("z", z.statistic.expect("a value"), -0.985_211_754_8, WORKED_DIGITS);
    assert_eq!((z.p, z.status), (None, Status::TrainingSizeUnknown));
    assert_eq!(mix.against_training.status, Status::NotAvailable);
    let found = calibration(&frame, &summary);
    assert_eq!(found.joint.p, None);
    assert_eq!(found.estimates.slope.interval, None);
    assert_eq!(log_loss(&frame, &summary).skill, None);
}

#[test]
fn the_baseline_of_the_example() {
    let frame = worked_frame();
    let facts = FitFacts { cases: 8.0, slopes: 4, ..FitFacts::default() };
    let found = baseline(&frame, &worked_summary(), facts.clone()).expect("a baseline");
    assert_all("mix", &found.mix, &[0.25, 0.375, 0.375]);
    assert_all("mean p", &found.mean_probability, &[3.15 / 8.0, 2.25 / 8.0, 2.6 / 8.0]);
    assert_all("variance", &found.variance, &[1.3625, 1.4375, 1.235]);
    close("log-loss", found.log_loss, 0.839_683_194_1, WORKED_DIGITS);
    // The inverse of the efficient information stands in the last corner of the inverse information.
    close("slope information", found.slope_information, 1.0 / 0.377_318_671_4, 1e-8);
    close("expected slope", found.expected_slope, 0.5, 0.0);
    let first: f64 = WORKED_P.iter().map(|p| p[0] * p[0]).sum::<f64>() / 8.0 - (3.15_f64 / 8.0).powi(2);
    close("covariance", found.probability_covariance[0], first, 1e-15);
    assert_eq!(found.probability_histogram[0].iter().sum::<f64>(), 8.0);
    // With sampling weights the sums are brought to the effective number of cases.
    let halved = baseline(&frame, &worked_summary(), FitFacts { cases: 4.0, ..facts }).expect("a baseline");
    assert_all("variance", &halved.variance, &[0.68125, 0.71875, 0.6175]);
    assert_all("mix", &halved.mix, &found.mix);
    // Rows without outcomes make no baseline.
    let empty = Summary::new(&frame, Detail::Full);
    assert!(matches!(
        baseline(&frame, &empty, FitFacts { cases: 8.0, ..FitFacts::default() }),
        Err(DriftError::Missing { .. })
    ));
}

#[test]
fn the_slope_to_expect() {
    for (slopes, information, penalised, wanted) in [
        (10, 100.0, false, 0.92),
        (2, 100.0, false, 1.0),
        (10, 100.0, true, 1.0),
        (100, 10.0, false, 0.5),
        (10, 0.0, false, 0.5),
    ] {
        close("slope", expected_slope(slopes, information, penalised), wanted, 1e-15);
    }
}

#[test]
fn holdout_figures_and_the_split_against_them() {
    let summary = worked_summary();
    let found = holdout(&summary, &WORKED_MIX, 8).expect("a holdout");
    close("log-loss", found.log_loss, 0.839_683_194_1, WORKED_DIGITS);
    close(
        "variance",
        found.log_loss_variance,
        (8.770_386_039 - 8.0 * 0.839_683_194_1_f64.powi(2)) / 7.0,
        1e-8,
    );
    close("expected", found.log_loss_expected, 0.860_335_387_7, WORKED_DIGITS);
    close("null", found.log_loss_null, 1.228_315_814, WORKED_DIGITS);
    close("brier", found.brier, 0.495_625, WORKED_DIGITS);
    assert_all("observed", &found.observed_mix, &[0.25, 0.375, 0.375]);
    assert_all("predicted", &found.predicted_mix, &[0.39375, 0.28125, 0.325]);

    // By hand: half a nat worse than the holdout, of which 0.3 because the records are harder.
    let mut frame = framed(1.0);
    frame.holdout = Some(Holdout {
        log_loss: found.log_loss - 0.5,
        log_loss_expected: found.log_loss_expected - 0.3,
        excess_variance: 0.4,
        weight: 100.0,
        ..found
    });
    let against = log_loss(&frame, &summary).against_holdout.expect("a holdout");
    close("harder", against.harder, 0.3, 1e-12);
    close("worse", against.worse, 0.2, 1e-12);
    let deviation = (2.835_867_204_f64 / 64.0 + 0.004).sqrt();
    close("z", against.test.statistic.expect("a value"), 0.2 / deviation, 1e-8);
    assert_eq!(against.test.status, Status::TooFew);
}

#[test]
fn coverage_by_category() {
    // Two scored records, one with an outcome: its predictions are covered, the other's are not.
    let frame = plain_frame(&["handed-over", "carded"], &[]);
    let mut summary = Summary::new(&frame, Detail::Light);
    for (p, outcome) in [([0.8, 0.2], Some(0)), ([0.4, 0.6], None)] {
        let log_odds = log_odds(&p);
        let record = ScoredRecord { log_odds: &log_odds, inputs: &[], terms: &[] };
        summary.add_scored(&frame, &record, 1.0).expect("a record");
        if let Some(category) = outcome {
            summary.add_outcome(&frame, &record, category, 5.0, 1.0).expect("an outcome");
        }
    }
    let found = coverage(&frame, &summary);
    close("share", found.share.expect("a value"), 0.5, 0.0);
    close("first", found.categories[0].share.expect("a value"), 0.8 / 1.2, 1e-14);
    close("second", found.categories[1].share.expect("a value"), 0.2 / 0.8, 1e-14);
    close("ratio", found.ratio.expect("a value"), (0.8 / 1.2) / 0.25, 1e-13);
    assert!(found.incomplete);
    // U = 0.2 - 0.5 * 0.8 = -0.2; I = 0.25 * (0.4 - 0.64 / 2) = 0.02; T = 2.
    close("T", found.test.statistic.expect("a value"), 2.0, 1e-12);
}
