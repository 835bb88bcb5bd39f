//! Tests of the checks, and the model that many tests start from.

use super::*;
use crate::file::*;
use std::collections::BTreeMap;

/// Programme choice of 200 students by social class and writing score, as published by the
/// UCLA Statistical Consulting Group (coefficients at the maximum, 8 digits).
pub(crate) fn programme() -> ModelFile {
    let class = LevelsField {
        name: "ses".into(),
        levels: ["low", "middle", "high"].map(String::from).to_vec(),
        reference: "low".into(),
        merged: BTreeMap::new(),
        unseen: "refuse".into(),
        missing: "refuse".into(),
    };
    let write = NumberField {
        name: "write".into(),
        unit: None,
        form: Form::AsIs,
        range: None,
        missing: MissingNumber::Refuse,
        observed: Some([31.0, 67.0]),
    };
    ModelFile {
        format: FORMAT.into(),
        format_version: FORMAT_VERSION.into(),
        name: "programme".into(),
        purpose: String::new(),
        cautions: vec![],
        record: RecordNames::default(),
        outcome: Outcome {
            field: "prog".into(),
            categories: ["academic", "general", "vocational"].map(String::from).to_vec(),
            reference: "academic".into(),
        },
        fields: vec![Field::Levels(class), Field::Number(write)],
        interactions: vec![],
        terms: ["(intercept)", "ses=middle", "ses=high", "write"].map(String::from).to_vec(),
        coefficients: BTreeMap::from([
            ("general".into(), vec![2.852_186_2, -0.533_291_0, -1.162_832_0, -0.057_928_4]),
            ("vocational".into(), vec![5.218_200_2, 0.291_393_1, -0.982_670_3, -0.113_602_6]),
        ]),
        covariance: None,
        fit: None,
        holdout: None,
        baseline: None,
        monitor: Monitor::default(),
        lineage: Lineage::default(),
        fingerprint: String::new(),
        extra: serde_json::Map::new(),
    }
}

#[test]
fn a_sound_file_has_no_faults() {
    assert_eq!(check(&programme()), []);
}

#[test]
fn each_fault_is_named_with_its_place() {
    type Change = fn(&mut ModelFile);
    let cases: [(&str, &str, Change); 12] = [
        ("name", "`../x`", |m| m.name = "../x".into()),
        ("outcome.categories", "stands twice", |m| m.outcome.categories[1] = "academic".into()),
        ("outcome.reference", "`none` is not among", |m| m.outcome.reference = "none".into()),
        ("fields[1].name", "stands twice", |m| m.fields[1] = m.fields[0].clone()),
        ("fields[0].reference", "`top` is not among", |m| levels(m).reference = "top".into()),
        ("fields[0].unseen", "neither `refuse`", |m| levels(m).unseen = "x".into()),
        ("fields[1].observed", "above the second", |m| number(m).observed = Some([2.0, 1.0])),
        ("fields[1].form.spline.knots", "three knots", |m| {
            number(m).form = Form::Spline(Spline { knots: vec![1.0, 1.0, 2.0] });
        }),
        ("terms[2]", "the fields make `ses=high`", |m| m.terms[2] = "ses=top".into()),
        ("coefficients.general", "3 coefficients, need 4", |m| {
            m.coefficients.get_mut("general").unwrap().pop();
        }),
        ("coefficients.academic", "reference category", |m| {
            m.coefficients.insert("academic".into(), vec![0.0; 4]);
        }),
        ("covariance.lower", "1 numbers, need 36", |m| {
            m.covariance = Some(Covariance { order: COVARIANCE_ORDER.into(), lower: vec![1.0] });
        }),
    ];
    for (place, part, change) in cases {
        let mut model = programme();
        change(&mut model);
        let faults = check(&model);
        let found = faults.iter().any(|f| f.place == place && f.reason.contains(part));
        assert!(found, "{place}: {faults:?}");
    }
}

fn levels(model: &mut ModelFile) -> &mut LevelsField {
    let Field::Levels(levels) = &mut model.fields[0] else { panic!("the first field has levels") };
    levels
}

fn number(model: &mut ModelFile) -> &mut NumberField {
    let Field::Number(number) = &mut model.fields[1] else { panic!("the second field is a number") };
    number
}

/// The programme example with figures as a fit of its 200 students writes them: 105, 45 and 50 in
/// the categories, log-likelihood from the published fit.
fn with_figures() -> ModelFile {
    let mut model = programme();
    let (weights, log_likelihood) = ([105.0, 45.0, 50.0], -179.981_726_22);
    let null: f64 = weights.iter().map(|weight| weight * (weight / 200.0_f64).ln()).sum();
    model.fit = Some(FitFigures {
        rows: 200,
        weight: 200.0,
        refused: 0,
        log_likelihood,
        log_likelihood_null: null,
        parameters: 8,
        gradient_norm: 1e-13,
        newton_decrement: 1e-14,
        iterations: 5,
        certificate: 1e-13,
        standard_errors: StandardErrors::Model,
        clusters: None,
        effective_parameters: None,
        ridge: 0.0,
        aic: 375.963_452_44,
        bic: 375.963_452_44 + 8.0 * (200.0_f64.ln() - 2.0),
        mcfadden_r2: 1.0 - log_likelihood / null,
        category_weights: weights.to_vec(),
        aliased: vec![],
        warnings: vec![],
        data_fingerprint: None,
        period: None,
        program: "kilter 0.1.0".into(),
    });
    let mix = vec![0.525, 0.225, 0.25];
    model.holdout = Some(Holdout {
        rows: 4,
        weight: 4.0,
        log_loss: 0.9,
        log_loss_variance: 0.1,
        log_loss_expected: 0.9,
        excess_variance: 0.1,
        log_loss_null: 1.0,
        brier: 0.5,
        brier_expected: 0.5,
        observed_mix: vec![0.5, 0.25, 0.25],
        predicted_mix: mix.clone(),
    });
    model.baseline = Some(Baseline {
        cases: 200.0,
        mix: mix.clone(),
        slopes: 6,
        slope_information: 40.0,
        expected_slope: 0.9,
        variance: vec![40.0, 33.0, 35.0],
        mean_probability: mix,
        probability_covariance: vec![0.02, -0.01, -0.01, -0.01, 0.008, 0.002, -0.01, 0.002, 0.008],
        probability_histogram: vec![vec![10.0, 190.0], vec![120.0, 80.0], vec![100.0, 100.0]],
        decile_edges: vec![0.3, 0.3, 0.5],
        log_loss: 0.9,
        fields: vec![
            FieldBaseline { name: "ses".into(), counts: vec![47.0, 95.0, 58.0], ..FieldBaseline::default() },
            FieldBaseline {
                name: "write".into(),
                edges: vec![45.0, 60.0],
                counts: vec![50.0, 100.0, 49.0],
                missing: 1.0,
                ..FieldBaseline::default()
            },
        ],
        term_means: vec![],
        term_covariance: vec![],
    });
    model
}

#[test]
fn figures_that_agree_have_no_faults() {
    assert_eq!(check(&with_figures()), []);
    let mut penalised = with_figures();
    let figures = penalised.fit.as_mut().unwrap();
    figures.effective_parameters = Some(6.5);
    figures.aic -= 3.0;
    figures.bic -= 1.5 * 200.0_f64.ln();
    assert_eq!(check(&penalised), [], "a penalised fit counts its effective parameters");
}

/// Every figure that the file itself determines, changed one at a time.
#[test]
fn each_figure_that_can_be_recomputed_is() {
    type Change = fn(&mut FitFigures, &mut Holdout, &mut Baseline);
    let cases: [(&str, &str, Change); 26] = [
        ("fit.parameters", "there are 8 coefficients", |fit, _, _| fit.parameters = 9),
        ("fit.weight", "above 0", |fit, _, _| fit.weight = 0.0),
        ("fit.aic", "log-likelihood and parameters give 375.9", |fit, _, _| fit.aic += 1e-5),
        ("fit.bic", "weight give", |fit, _, _| fit.bic += 1e-5),
        ("fit.mcfadden_r2", "the log-likelihoods give", |fit, _, _| fit.mcfadden_r2 += 1e-8),
        ("fit.log_likelihood_null", "the category weights give", |fit, _, _| fit.log_likelihood_null += 1e-5),
        ("fit.category_weights", "2 numbers, need 3", |fit, _, _| fit.category_weights.truncate(2)),
        ("fit.category_weights", "must be `fit.weight`, 200", |fit, _, _| fit.category_weights[0] = 106.0),
        ("fit.category_weights", "not below 0", |fit, _, _| fit.category_weights[0] = -1.0),
        ("holdout.observed_mix", "sum to 1.05", |_, holdout, _| holdout.observed_mix[0] = 0.55),
        ("holdout.predicted_mix", "need 3", |_, holdout, _| holdout.predicted_mix.clear()),
        ("holdout.predicted_mix", "-0.1 is no share", |_, holdout, _| holdout.predicted_mix[0] = -0.1),
        ("baseline.cases", "above 0", |_, _, baseline| baseline.cases = 0.0),
        ("baseline.mix", "sum to", |_, _, baseline| baseline.mix[0] = 0.5),
        ("baseline.mix[1]", "`fit.category_weights` give 0.225", |_, _, baseline| {
            baseline.mix = vec![0.525, 0.25, 0.225];
        }),
        ("baseline.mean_probability", "need 3", |_, _, baseline| baseline.mean_probability.push(0.0)),
        ("baseline.variance", "4 numbers, need 3", |_, _, baseline| baseline.variance.push(0.0)),
        ("baseline.probability_covariance", "need 9", |_, _, baseline| {
            baseline.probability_covariance.pop();
        }),
        ("baseline.probability_covariance", "row 1, column 0 differs", |_, _, baseline| {
            baseline.probability_covariance[1] = 0.5;
        }),
        ("baseline.probability_histogram", "2 lists, need 3", |_, _, baseline| {
            baseline.probability_histogram.pop();
        }),
        ("baseline.probability_histogram[1]", "1 numbers, need 2", |_, _, baseline| {
            baseline.probability_histogram[1] = vec![200.0];
        }),
        ("baseline.probability_histogram[2]", "sum to 199", |_, _, baseline| {
            baseline.probability_histogram[2][0] = 99.0;
        }),
        ("baseline.decile_edges", "ascend", |_, _, baseline| baseline.decile_edges[0] = 0.4),
        ("baseline.fields[1].counts", "2 numbers, need 3", |_, _, baseline| {
            baseline.fields[1].counts.pop();
        }),
        ("baseline.fields[0].name", "the field there is `ses`", |_, _, baseline| {
            baseline.fields[0].name = "class".into();
        }),
        ("baseline.term_means", "0 numbers, need 3", |_, _, baseline| baseline.term_covariance.push(1.0)),
    ];
    for (place, part, change) in cases {
        let mut model = with_figures();
        let (fit, holdout, baseline) = (&mut model.fit, &mut model.holdout, &mut model.baseline);
        change(fit.as_mut().unwrap(), holdout.as_mut().unwrap(), baseline.as_mut().unwrap());
        let faults = check(&model);
        let found = faults.iter().any(|fault| fault.place == place && fault.reason.contains(part));
        assert!(found, "{place}: {faults:?}");
    }
}

#[test]
fn the_list_of_faults_ends() {
    let mut model = programme();
    levels(&mut model).levels = vec!["low".into(); 10_000];
    assert_eq!(check(&model).len(), 100);
}
