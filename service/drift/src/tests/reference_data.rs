//! Real scored data with figures computed independently; sources and licences stand beside the data.

use serde_json::Value;

use crate::error::DriftError;
use crate::field_shift::shift;
use crate::frame::Frame;
use crate::label_shift::{StoppingRule, shares_by_likelihood};
use crate::losses::{brier, log_loss};
use crate::mix::{class_mix, homogeneity};
use crate::quantiles::deciles;
use crate::recalibration::{Need, Observations, Recalibration, closed_test, recalibrate};
use crate::record::ScoredRecord;
use crate::summary::{Detail, Summary};
use crate::test_data::{close, plain_frame};
use crate::tests::worked_example::plain_baseline;

/// Scored rows of a table.
pub(super) struct Scored {
    pub(super) categories: Vec<&'static str>,
    /// Probabilities, the reference category first.
    pub(super) p: Vec<Vec<f64>>,
    pub(super) y: Vec<usize>,
    pub(super) expected: Value,
}

impl Scored {
    pub(super) fn hpc() -> Self {
        Self::read(
            include_str!("../../tests-data/hpc_cv/hpc_cv.csv"),
            include_str!("../../tests-data/hpc_cv/expected.json"),
            &["VF", "F", "M", "L"],
            2,
        )
    }

    pub(super) fn fishing() -> Self {
        Self::read(
            include_str!("../../tests-data/fishing_scored/fishing_scored.csv"),
            include_str!("../../tests-data/fishing_scored/expected.json"),
            &["beach", "pier", "boat", "charter"],
            1,
        )
    }

    pub(super) fn programmes() -> Self {
        Self::read(
            include_str!("../../tests-data/hsb2_scored/hsb2_scored.csv"),
            include_str!("../../tests-data/hsb2_scored/expected.json"),
            &["academic", "general", "vocational"],
            1,
        )
    }

    /// Column 0 is the observed category, the probabilities begin at `first`.
    fn read(table: &str, expected: &str, categories: &[&'static str], first: usize) -> Self {
        let mut scored = Self {
            categories: categories.to_vec(),
            p: Vec::new(),
            y: Vec::new(),
            expected: serde_json::from_str(expected).expect("JSON"),
        };
        for line in table.lines().skip(1) {
            let cells: Vec<&str> = line.split(',').collect();
            scored.y.push(categories.iter().position(|name| *name == cells[0]).expect("a category"));
            let p = cells[first..first + categories.len()].iter().map(|cell| cell.parse().expect("a number"));
            scored.p.push(p.collect());
        }
        scored
    }

    /// Log-odds against the first category, rows x (J-1). Not clipped: no probability is 0.
    pub(super) fn log_odds(&self) -> Vec<f64> {
        self.p
            .iter()
            .flat_map(|p| p[1..].iter().map(|other| (other / p[0]).ln()).collect::<Vec<_>>())
            .collect()
    }

    pub(super) fn number(&self, path: &str) -> f64 {
        let value = self.expected.pointer(&format!("/expected/{path}"));
        value.and_then(Value::as_f64).unwrap_or_else(|| panic!("no number at `{path}`"))
    }

    fn frame(&self) -> Frame {
        plain_frame(&self.categories, &[])
    }

    fn summary(&self) -> Summary {
        summary(&self.frame(), &self.log_odds(), &self.y)
    }
}

fn summary(frame: &Frame, log_odds: &[f64], y: &[usize]) -> Summary {
    let mut summary = Summary::new(frame, Detail::Full);
    for (log_odds, y) in log_odds.chunks(frame.categories().len() - 1).zip(y) {
        let record = ScoredRecord { log_odds, inputs: &[], terms: &[] };
        summary.add_scored(frame, &record, 1.0).expect("a record");
        summary.add_outcome(frame, &record, *y, f64::NAN, 1.0).expect("an outcome");
    }
    summary
}

/// Absolute tolerance of scores in the expected files.
const SCORE: f64 = 1e-9;
/// Relative tolerance of test statistics in them.
const STATISTIC: f64 = 1e-6;

#[test]
fn scores_and_class_mix() {
    for data in [Scored::hpc(), Scored::fishing(), Scored::programmes()] {
        let summary = data.summary();
        let frame = data.frame();
        close("n", summary.outcomes(), data.number("n"), 0.0);
        for (category, name) in data.categories.iter().enumerate() {
            close(name, summary.observed()[category], data.number(&format!("observed_counts/{name}")), 0.0);
            let expected = data.number(&format!("expected_counts/{name}"));
            close(name, summary.expected()[category], expected, 1e-8);
        }
        let loss = log_loss(&frame, &summary).mean.expect("outcomes");
        close("log-loss", loss, data.number("log_loss_mean_nat"), SCORE);
        let score = brier(&frame, &summary).mean.expect("outcomes");
        close("brier", score, data.number("brier_sum_over_classes"), SCORE);
        let mix = class_mix(&frame, &summary);
        for category in &mix.categories {
            let name = &category.category;
            let z = data.number(&format!("class_mix_test/z/{name}"));
            close(name, category.test.statistic.expect("a value"), z, STATISTIC * z.abs().max(1.0));
            let interval = category.observed_interval.expect("outcomes");
            for (end, found) in interval.iter().enumerate() {
                let wanted = data.number(&format!("observed_share_intervals_95/{name}/wilson/{end}"));
                close(name, *found, wanted, SCORE);
            }
        }
        let wanted = data.number("class_mix_test/chi2");
        let found = mix.joint.statistic.expect("a value");
        close("chi-square", found, wanted, STATISTIC * wanted.max(1.0));
        assert_eq!(mix.joint.df, Some(data.categories.len() - 1));
    }
}

#[test]
fn p_value_of_the_class_mix() {
    let data = Scored::hpc();
    let mut frame = data.frame();
    frame.baseline = Some(plain_baseline(&[0.25; 4], &[0.0; 16], 1e15, 1.0));
    let p = class_mix(&frame, &data.summary()).joint.p.expect("a value");
    let wanted = data.number("class_mix_test/p");
    assert!((p / wanted - 1.0).abs() < 1e-6, "{p}, not {wanted}");
}

#[test]
fn brier_of_one_category_against_the_rest_is_the_test_of_spiegelhalter() {
    for data in [Scored::hpc(), Scored::fishing(), Scored::programmes()] {
        for (category, name) in data.categories.iter().enumerate() {
            let frame = plain_frame(&["other", name], &[]);
            let odds: Vec<f64> = data
                .p
                .iter()
                .map(|p| {
                    let others: f64 =
                        p.iter().enumerate().filter(|(other, _)| *other != category).map(|(_, p)| p).sum();
                    (p[category] / others).ln()
                })
                .collect();
            let y: Vec<usize> = data.y.iter().map(|y| usize::from(*y == category)).collect();
            let found = brier(&frame, &summary(&frame, &odds, &y)).excess.statistic.expect("a value");
            let wanted = data.number(&format!("spiegelhalter_z_one_vs_rest/{name}"));
            close(name, found, wanted, STATISTIC * wanted.abs().max(1.0));
        }
    }
}

#[test]
fn scores_by_hand() {
    // numpy 2.4.6 and scikit-learn 1.9.1, to 1e-12.
    let third = 1.0 / 3.0;
    let p = [
        [0.7, 0.2, 0.1],
        [0.1, 0.8, 0.1],
        [0.2, 0.3, 0.5],
        [0.25, 0.5, 0.25],
        [0.05, 0.05, 0.9],
        [0.6, 0.3, 0.1],
        [third, third, third],
        [0.02, 0.95, 0.03],
    ];
    let frame = plain_frame(&["a", "b", "c"], &[]);
    let summary = crate::test_data::summary_of(&frame, &p, &[0, 1, 2, 0, 2, 1, 1, 1]);
    close("log-loss", log_loss(&frame, &summary).mean.expect("outcomes"), 0.639_812_367_496_524_9, 1e-12);
    close("brier", brier(&frame, &summary).mean.expect("outcomes"), 0.375_058_333_333_333_4, 1e-12);
}

#[test]
fn shift_index_and_homogeneity() {
    // scipy 1.17.1: index after adding half a record to every bin; Pearson's chi-square.
    for (training, live, index, chi_square) in [
        (&[400.0, 300.0, 300.0][..], &[350.0, 250.0, 400.0][..], 0.044_427_055_344_5, 22.164_502_164_5),
        (
            &[100.0; 10],
            &[80.0, 90.0, 110.0, 120.0, 100.0, 95.0, 105.0, 85.0, 115.0, 100.0],
            0.014_998_750_159_3,
            7.555_794_497_91,
        ),
        (&[500.0, 300.0, 200.0], &[500.0, 500.0, 0.0], 1.298_875_940_51, 250.0),
        (
            &[769.0, 1077.0, 583.0, 241.0],
            &[300.0, 500.0, 260.0, 95.0],
            0.005_897_026_675_03,
            4.767_502_007_92,
        ),
        (&[45.0, 105.0, 50.0], &[45.0, 105.0, 50.0], 0.0, 0.0),
    ] {
        close("index", shift(live, training).index.expect("a value"), index, 1e-10);
        let cases: f64 = training.iter().sum();
        let shares: Vec<f64> = training.iter().map(|count| count / cases).collect();
        let test = homogeneity(live, &shares, cases);
        close("chi-square", test.statistic.expect("a value"), chi_square, 1e-8);
        assert_eq!(test.df, Some(live.len() - 1));
    }
}

#[test]
fn deciles_and_bins_of_a_number() {
    // Bill length in the years 2007 and 2008 against 2009 (numpy 2.4.6, quantiles of type 7).
    let rows = include_str!("../../tests-data/penguins/penguins.csv").lines().skip(1);
    let lengths: Vec<(bool, f64)> = rows
        .map(|line| line.split(',').collect::<Vec<_>>())
        .map(|cells| (cells[7] == "2009", cells[2].parse().unwrap_or(f64::NAN)))
        .collect();
    let mut before = lengths.iter().filter(|(late, _)| !late).map(|(_, value)| *value).collect();
    let edges = deciles(&mut before);
    let wanted = [36.4, 38.24, 40.22, 41.96, 44.0, 45.8, 46.54, 48.7, 50.48];
    assert_eq!(edges.len(), wanted.len());
    for (found, wanted) in edges.iter().zip(wanted) {
        close("edge", *found, wanted, 1e-9);
    }
    let layout = crate::FieldLayout {
        name: "bill_length_mm".into(),
        bins: crate::FieldBins::Number { edges, observed: None },
    };
    let names = vec!["a".to_owned(), "b".to_owned()];
    let frame = Frame::for_fit(names, 0, vec![layout], Vec::new(), 0).expect("a frame");
    let counts = |late: bool| {
        let mut summary = Summary::new(&frame, Detail::Light);
        for (_, value) in lengths.iter().filter(|(year, _)| *year == late) {
            let record = ScoredRecord { log_odds: &[0.0], inputs: &[*value], terms: &[] };
            summary.add_scored(&frame, &record, 1.0).expect("a record");
        }
        summary.fields[0].bins.clone()
    };
    let (training, live) = (counts(false), counts(true));
    assert_eq!(training, [24.0, 21.0, 22.0, 22.0, 23.0, 24.0, 20.0, 24.0, 20.0, 23.0]);
    assert_eq!(live, [8.0, 15.0, 14.0, 10.0, 9.0, 11.0, 1.0, 14.0, 16.0, 21.0]);
    close("index", shift(&live, &training).index.expect("a value"), 0.251_780_399_766, 1e-9);
}

/// Absolute tolerance of recalibration estimates in the expected files, and the relative one of
/// their standard errors.
const ESTIMATE: f64 = 1e-7;
const STANDARD_ERROR: f64 = 1e-6;

/// Names of the parameters of a fit in the expected files, in our order.
fn parameter_names(data: &Scored, recalibration: Recalibration) -> Vec<String> {
    let compared = &data.categories[1..];
    let intercepts = compared.iter().map(|name| format!("a[{name}]"));
    match recalibration {
        Recalibration::Intercepts => intercepts.collect(),
        Recalibration::Slope => vec!["b".to_owned()],
        Recalibration::InterceptsAndSlope => intercepts.chain(["b".to_owned()]).collect(),
        Recalibration::SlopePerCategory => {
            intercepts.chain(compared.iter().map(|name| format!("b[{name}]"))).collect()
        }
        Recalibration::FullMatrix => compared
            .iter()
            .flat_map(|row| {
                let slopes = compared.iter().map(move |column| format!("b[{row},{column}]"));
                [format!("a[{row}]")].into_iter().chain(slopes)
            })
            .collect(),
    }
}

#[test]
fn recalibrations_agree_with_independent_fits() {
    for data in [Scored::hpc(), Scored::fishing(), Scored::programmes()] {
        let odds = data.log_odds();
        let records = Observations {
            categories: data.categories.len(),
            reference: 0,
            log_odds: &odds,
            outcomes: &data.y,
        };
        let as_given = records.log_likelihood().expect("records");
        close("as given", as_given, data.number("recalibration/loglik_as_given"), 1e-8);
        for (name, recalibration) in [
            ("intercepts", Recalibration::Intercepts),
            ("temperature", Recalibration::Slope),
            ("common_slope", Recalibration::InterceptsAndSlope),
            ("own_slopes", Recalibration::SlopePerCategory),
            ("full", Recalibration::FullMatrix),
        ] {
            let found = recalibrate(&records, recalibration);
            if data.expected.pointer(&format!("/expected/recalibration/{name}/not_identified")).is_some() {
                assert!(matches!(found, Err(DriftError::NotIdentified { .. })), "{name}");
                continue;
            }
            let found = found.expect("a fit");
            close(name, found.log_likelihood, data.number(&format!("recalibration/{name}/loglik")), 1e-8);
            let size = found.parameters.len();
            for (index, parameter) in parameter_names(&data, recalibration).iter().enumerate() {
                let at = |what: &str| data.number(&format!("recalibration/{name}/{what}/{parameter}"));
                let (estimate, error) = (at("estimate"), at("std_error"));
                close(parameter, found.parameters[index], estimate, ESTIMATE * estimate.abs().max(1.0));
                let found = found.covariance[index * (size + 1)].sqrt();
                close(parameter, found, error, STANDARD_ERROR * error);
            }
        }
    }
}

#[test]
fn closed_testing_names_what_is_needed() {
    let hpc = Scored::hpc();
    let odds = hpc.log_odds();
    let records = Observations { categories: 4, reference: 0, log_odds: &odds, outcomes: &hpc.y };
    let found = closed_test(&records, 1.0, 0.05).expect("fits");
    assert_eq!(found.need, Need::Refit);
    close("full", found.tests[0].statistic.expect("a value"), 624.297_347_914, 1e-5);
    assert_eq!(found.tests.map(|test| test.df), [Some(12), Some(9), Some(8)]);

    let own = Scored::programmes();
    let odds = own.log_odds();
    let records = Observations { categories: 3, reference: 0, log_odds: &odds, outcomes: &own.y };
    let found = closed_test(&records, 1.0, 0.05).expect("fits");
    assert_eq!(found.need, Need::None, "a fit on its own rows needs no recalibration");
    for (parameter, wanted) in found.fits[1].parameters.iter().zip([0.0, 0.0, 1.0]) {
        close("own rows", *parameter, wanted, 1e-8);
    }
}

#[test]
fn shares_by_likelihood_on_a_subset() {
    // numpy fixed point, checked against scipy 1.17.1: rows whose category is not VF, and every
    // fourth row; the mix of the fit is that of the whole table.
    let data = Scored::hpc();
    let chosen = data.p.iter().zip(&data.y).enumerate().filter(|(row, (_, y))| **y != 0 || row % 4 == 0);
    let p: Vec<f64> = chosen.flat_map(|(_, (p, _))| p.clone()).collect();
    assert_eq!(p.len(), 4 * 2140);
    let mix = [0.510_239_400_058, 0.310_931_641_188, 0.118_834_727_43, 0.059_994_231_323_9];
    let rule = StoppingRule { change: 1e-12, rounds: 100_000 };
    let found = shares_by_likelihood(&p, &mix, None, rule).expect("records");
    assert!(found.converged);
    let wanted = [0.228_632_178_385, 0.578_661_811_282, 0.085_396_379_321_6, 0.107_309_631_012];
    for (found, wanted) in found.shares.iter().zip(wanted) {
        close("share", *found, wanted, 1e-8);
    }
    close("likelihood ratio", found.test.statistic.expect("a value"), 382.816_235_588, 1e-6);
    let third =
        shares_by_likelihood(&p, &mix, None, StoppingRule { change: 1e-12, rounds: 3 }).expect("records");
    for (found, wanted) in third.shares.iter().zip([0.272_017_630_898, 0.480_281_989_524]) {
        close("third round", *found, wanted, 1e-10);
    }
}

#[test]
fn shares_on_the_boundary() {
    let data = Scored::fishing();
    let p: Vec<f64> = data.p.concat();
    let mix = [0.088_333_333_333_3, 0.131_666_666_667, 0.325, 0.455];
    let rule = StoppingRule { change: 1e-12, rounds: 200_000 };
    let found = shares_by_likelihood(&p, &mix, None, rule).expect("records");
    // Two categories go to 0, where convergence is slow.
    for (found, wanted) in found.shares.iter().zip([0.0, 0.572_015_398_311, 0.427_984_601_688, 0.0]) {
        close("share", *found, wanted, 1e-6);
    }
    close("likelihood ratio", found.test.statistic.expect("a value"), 6.691_722_441_63, 1e-6);
}
