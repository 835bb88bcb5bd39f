//! The worked example: every figure beside an independent computation.

use kilter_fit::analysis::{Change, Distribution, Effect, FieldTest, Tested, fit_statistics};
use kilter_fit::inference::{ProbabilityInterval, ProbabilityIntervals, coefficients as estimates, contrast};
use kilter_fit::{Fitted, Plan};
use kilter_model::{ModelFile, Scorer};
use serde_json::Value;

use crate::support::{
    G, Table, X1, X2, analysed, assert_all_close, assert_close, coefficients, fitted, json, numbers, plan,
    standard_errors, worked_plan,
};

/// The worked numbers are given to this relative precision.
const DIGITS: f64 = 1e-8;

fn expected() -> Value {
    json("worked/fitting.json")["ml_and_inference"].clone()
}

fn tiny() -> Table {
    Table::read("worked/tiny.csv")
}

fn full_fit() -> Fitted {
    fitted(&worked_plan("", &format!("{X1}{X2}{G}")), &tiny())
}

/// Plain coefficients as coefficients of z = (x - centre) / scale, for terms 1, x1, x2, l, m.
fn standardised(model: &ModelFile, expected: &Value) -> Vec<f64> {
    let scales = numbers(&expected["m1,s1,m2,s2"]);
    let mut all = coefficients(model);
    for b in all.chunks_exact_mut(5) {
        b[0] += scales[0] * b[1] + scales[2] * b[2];
        b[1] *= scales[1];
        b[2] *= scales[3];
    }
    all
}

#[test]
fn coefficients_errors_tests_and_intervals() {
    let (fit, expected) = (full_fit(), expected());
    let model = &fit.model;
    assert_all_close("plain", &coefficients(model), &numbers(&expected["beta_raw"]), 0.0, DIGITS);
    assert_all_close("z scale", &standardised(model, &expected), &numbers(&expected["beta_z"]), 0.0, DIGITS);
    assert_all_close("errors", &standard_errors(model), &numbers(&expected["se_raw"]), 0.0, DIGITS);
    let all = estimates(model, 0.95).unwrap();
    let of = |pick: &dyn Fn(&kilter_fit::inference::Uncertainty) -> f64| -> Vec<f64> {
        all.iter().map(|estimate| pick(&estimate.uncertainty.unwrap())).collect()
    };
    assert_all_close("z", &of(&|u| u.significance.unwrap().z), &numbers(&expected["z"]), 0.0, DIGITS);
    assert_all_close("p", &of(&|u| u.significance.unwrap().p), &numbers(&expected["p"]), 0.0, DIGITS);
    assert_all_close("low", &of(&|u| u.interval[0]), &numbers(&expected["ci lo"]), 0.0, DIGITS);
    assert_all_close("high", &of(&|u| u.interval[1]), &numbers(&expected["ci hi"]), 0.0, DIGITS);
    let ratios = numbers(&expected["rrr"]);
    for (estimate, ratio) in all.iter().zip(ratios) {
        if let Some(found) = estimate.ratio() {
            assert_close(&estimate.term, found, ratio, 0.0, DIGITS);
        }
    }
}

#[test]
fn contrast_of_two_categories_that_are_not_the_reference() {
    let (fit, expected) = (full_fit(), expected());
    let found = contrast(&fit.model, "b", "c", 0.95).unwrap();
    let estimate: Vec<f64> = found.iter().map(|e| e.estimate).collect();
    let error: Vec<f64> = found.iter().map(|e| e.uncertainty.unwrap().standard_error).collect();
    assert_all_close("b - c", &estimate, &numbers(&expected["b-c"]), 0.0, DIGITS);
    assert_all_close("its errors", &error, &numbers(&expected["b-c se"]), 0.0, DIGITS);
    let error = contrast(&fit.model, "b", "d", 0.95).unwrap_err();
    assert_eq!(error.to_string(), "`d` is no category of the model; it has `a`, `b`, `c`");
}

#[test]
fn figures_and_the_path_of_newton() {
    let (fit, expected) = (full_fit(), expected());
    let figures = fit.model.fit.as_ref().unwrap();
    assert_close("log-likelihood", figures.log_likelihood, expected["ll"].as_f64().unwrap(), 0.0, 1e-14);
    assert_close("null", figures.log_likelihood_null, expected["ll0"].as_f64().unwrap(), 0.0, 1e-14);
    let wanted = numbers(&expected["AIC,BIC,McF,McFadj,CS,Nag"]);
    assert_all_close(
        "AIC, BIC, R2",
        &[figures.aic, figures.bic, figures.mcfadden_r2],
        &wanted[..3],
        0.0,
        DIGITS,
    );
    // Log-likelihood and squared decrement from the intercepts-only start.
    let path = [
        (-65.866_716_465_9, 20.402_10),
        (-54.698_744_379_4, 2.342_759),
        (-53.346_277_895_5, 0.216_381_2),
        (-53.230_360_062_5, 3.024_333e-3),
        (-53.228_833_000_8, 6.783_418e-7),
        (-53.228_832_661_6, 3.487_839e-14),
    ];
    assert_eq!(figures.iterations, 6);
    for (found, (value, squared)) in fit.trace.iter().zip(path) {
        assert_close("path", found[0], value, 0.0, 1e-11);
        // Printed to seven digits; the last one is near the rounding of the gradient.
        assert_close("decrement", found[1] * found[1], squared, 1e-18, 1e-5);
    }
    // The gradient of the standardised problem is zero but for rounding.
    assert!(figures.gradient_norm < 1e-12, "{}", figures.gradient_norm);
    assert!(figures.certificate < 1e-10);
}

#[test]
fn probabilities_of_the_first_rows() {
    let scorer = Scorer::new(&full_fit().model).unwrap();
    let scored = scorer.score(&tiny().batch(&scorer.column_specs()));
    let wanted = [
        [0.220_437_953_7, 0.102_138_423_5, 0.677_423_622_9],
        [0.445_526_085_8, 0.532_056_734_3, 0.022_417_179_9],
        [0.416_355_892_4, 0.248_242_649_2, 0.335_401_458_3],
    ];
    for (row, wanted) in wanted.iter().enumerate() {
        assert_all_close("probabilities", scored.probabilities_of(row), wanted, 1e-10, 0.0);
    }
}

/// Counts: each row stands for `w` equal cases.
#[test]
fn rows_with_counts() {
    let expected = expected();
    let fit = fitted(&worked_plan("count = \"w\"", &format!("{X1}{X2}{G}")), &tiny());
    let figures = fit.model.fit.as_ref().unwrap();
    assert_eq!((figures.rows, figures.weight), (60, 108.0));
    assert_close("log-likelihood", figures.log_likelihood, expected["w ll"].as_f64().unwrap(), 0.0, 1e-13);
    assert_close("null", figures.log_likelihood_null, expected["w ll0"].as_f64().unwrap(), 0.0, 1e-13);
    let found = standardised(&fit.model, &expected);
    assert_all_close("counts", &found, &numbers(&expected["w beta_z"]), 0.0, DIGITS);
}

/// Two rows of a table with one flag: the estimates are logarithms of ratios of counts.
#[test]
fn closed_form_of_a_two_by_three_table() {
    let table = Table::parse("y,x,n\na,0,10\nb,0,5\nc,0,5\na,1,4\nb,1,12\nc,1,8");
    let toml = "name = \"table\"\n[data]\nfiles = [\"x\"]\ncount = \"n\"\n[outcome]\nfield = \"y\"\nreference = \"a\"\n\
                [[field]]\nname = \"x\"\nkind = \"flag\"";
    let model = fitted(&plan(toml), &table).model;
    let log = f64::ln;
    assert_all_close("beta", &coefficients(&model), &[log(0.5), log(6.0), log(0.5), log(4.0)], 0.0, 1e-12);
    let slope = |a: f64, b: f64| (0.2 + 0.1 + 1.0 / a + 1.0 / b).sqrt();
    let wanted = [0.3f64.sqrt(), slope(12.0, 4.0), 0.3f64.sqrt(), slope(8.0, 4.0)];
    assert_all_close("errors", &standard_errors(&model), &wanted, 0.0, 1e-12);
    let log_likelihood = model.fit.unwrap().log_likelihood;
    assert_close("log-likelihood", log_likelihood, -45.068_117_769_8, 1e-10, 0.0);
}

/// Standard errors of z coefficients from those of plain ones: the slopes only, whose scale is a
/// factor.
fn slope_errors(model: &ModelFile, expected: &Value) -> Vec<f64> {
    let scales = numbers(&expected["m1,s1,m2,s2"]);
    let mut errors = standard_errors(model);
    for block in errors.chunks_exact_mut(5) {
        block[1] *= scales[1];
        block[2] *= scales[3];
    }
    errors.chunks_exact(5).flat_map(|block| block[1..].to_vec()).collect()
}

fn slopes(all: &[f64]) -> Vec<f64> {
    all.chunks_exact(5).flat_map(|block| block[1..].to_vec()).collect()
}

/// Robust errors against sandwich formulas of two other programs, with the factor n / (n - 1).
#[test]
fn robust_errors() {
    let expected = expected();
    for (data, key, factor) in [
        ("", "se HC0", 60.0 / 59.0f64),
        ("count = \"w\"\n", "w se freq HC0", 108.0 / 107.0),
        ("weight = \"w\"\n", "w se pweight HC0", 60.0 / 59.0),
    ] {
        let plan = worked_plan(data, &format!("{X1}{X2}{G}[fit]\nstandard_errors = \"robust\""));
        let fit = fitted(&plan, &tiny());
        let wanted: Vec<f64> =
            slopes(&numbers(&expected[key])).iter().map(|error| error * factor.sqrt()).collect();
        assert_all_close(key, &slope_errors(&fit.model, &expected), &wanted, 0.0, DIGITS);
    }
}

/// Sampling weights: coefficients as with counts, cases as without weights.
#[test]
fn sampling_weights_are_relative() {
    let expected = expected();
    let plan = worked_plan("weight = \"w\"", &format!("{X1}{X2}{G}"));
    let fit = fitted(&plan, &tiny());
    let found = standardised(&fit.model, &expected);
    assert_all_close("coefficients", &found, &numbers(&expected["w beta_z"]), 0.0, DIGITS);
    let figures = fit.model.fit.as_ref().unwrap();
    assert_close("weight", figures.weight, 60.0, 0.0, 1e-14);
    let wanted = expected["w ll"].as_f64().unwrap() * 60.0 / 108.0;
    assert_close("pseudo log-likelihood", figures.log_likelihood, wanted, 0.0, 1e-12);
    assert_close("cases", fit.effective_cases, expected["Kish neff"].as_f64().unwrap(), 0.0, 1e-12);
    let mut heavier = tiny();
    let w = heavier.column("w");
    for row in &mut heavier.rows {
        row[w] = format!("{}", row[w].parse::<f64>().unwrap() * 3.5);
    }
    let again = fitted(&plan, &heavier);
    assert_all_close("heavier", &standard_errors(&again.model), &standard_errors(&fit.model), 0.0, 1e-10);
}

/// Fifteen clusters: the one-step jackknife, and Student's t with 14 degrees of freedom.
#[test]
fn errors_of_few_clusters() {
    let expected = expected();
    let plan = worked_plan("cluster = \"cl\"", &format!("{X1}{X2}{G}[fit]\nstandard_errors = \"cluster\""));
    let fit = fitted(&plan, &tiny());
    let wanted = [
        0.487_038_182_9,
        0.461_584_173_1,
        0.298_462_553_5,
        0.865_250_816_6,
        1.139_005_393_6,
        0.776_725_295_8,
        0.500_898_645_4,
        0.245_826_254_5,
        1.196_911_339,
        0.907_557_458_2,
    ];
    assert_all_close("jackknife", &slope_errors(&fit.model, &expected), &slopes(&wanted), 0.0, DIGITS);
    assert_eq!(fit.model.fit.as_ref().unwrap().clusters, Some(15));
    let estimate = &estimates(&fit.model, 0.95).unwrap()[1];
    let Some(found) = estimate.uncertainty else { panic!("an error") };
    // Quantile of t with 14 degrees of freedom, scipy 1.17.
    let half = 2.144_786_687_916_927_7 * found.standard_error;
    assert_close("interval", found.interval[1] - estimate.estimate, half, 0.0, 1e-9);
}

/// Many clusters: the sandwich with the factor G / (G - 1). Four copies of the table, each with
/// clusters of its own, have four times the information and the meat of the one.
#[test]
fn errors_of_many_clusters() {
    let (expected, tiny) = (expected(), tiny());
    let cl = tiny.column("cl");
    let rows = (0..4).flat_map(|copy| {
        tiny.rows.iter().map(move |row| {
            let mut row = row.clone();
            row[cl] = format!("{copy}-{}", row[cl]);
            row
        })
    });
    let table = Table { header: tiny.header.clone(), rows: rows.collect() };
    for (data, key) in [("", "se CL0"), ("count = \"w\"\n", "w se cluster0")] {
        let plan = worked_plan(
            &format!("{data}cluster = \"cl\""),
            &format!("{X1}{X2}{G}[fit]\nstandard_errors = \"cluster\""),
        );
        let fit = fitted(&plan, &table);
        let factor = (60.0 / 59.0 / 4.0f64).sqrt();
        let wanted: Vec<f64> = slopes(&numbers(&expected[key])).iter().map(|error| error * factor).collect();
        assert_all_close(key, &slope_errors(&fit.model, &expected), &wanted, 0.0, DIGITS);
    }
}

#[test]
fn four_clusters_are_too_few() {
    let table = tiny().filtered("cl", |cluster| cluster.len() == 1 && cluster < "5");
    let plan = worked_plan("cluster = \"cl\"", &format!("{X2}[fit]\nstandard_errors = \"cluster\""));
    let error = crate::support::try_fit(&plan, &table).unwrap_err();
    assert!(error.to_string().starts_with("`cl` has 4 clusters"), "{error}");
}

fn field_tests(plan: &Plan, table: &Table) -> Vec<FieldTest> {
    analysed(plan, table, |mut analysis| analysis.field_tests().unwrap())
}

fn effects(plan: &Plan, table: &Table) -> Vec<Effect> {
    analysed(plan, table, |mut analysis| analysis.effects().unwrap())
}

#[test]
fn tests_of_fields() {
    let expected = expected();
    let tests = field_tests(&worked_plan("", &format!("{X1}{X2}{G}")), &tiny());
    let names = ["x1", "x2", "g"].map(|name| Tested::Field(name.into()));
    for (test, (name, key)) in tests.iter().zip(
        names.iter().zip(["x1", "x2", "g"].map(|f| format!("field {f} df,Wald,p,LR,p,robustWald,score"))),
    ) {
        assert_eq!(&test.tested, name);
        let found = [test.wald.unwrap(), test.likelihood_ratio.unwrap()];
        let found = [found[0].statistic, found[0].p, found[1].statistic, found[1].p];
        let wanted = numbers(&expected[&key]);
        assert_eq!(test.degrees_of_freedom as f64, wanted[0]);
        assert_all_close(&key, &found, &wanted[1..5], 0.0, DIGITS);
    }
    let all = tests.last().unwrap();
    assert_eq!(all.tested, Tested::Everything);
    let (wald, ratio) = (all.wald.unwrap(), all.likelihood_ratio.unwrap());
    let wanted = numbers(&expected["joint df,Wald,p,LR,p"]);
    assert_all_close("all", &[wald.statistic, wald.p, ratio.statistic, ratio.p], &wanted[1..], 0.0, DIGITS);
    assert!(all.wald_collapses() && !tests[1].wald_collapses());
}

/// A field that copies a level of another one: with the other gone the copy comes in, and the test
/// counts only what is really lost.
#[test]
fn tests_count_the_coefficients_that_are_lost() {
    let mut table = tiny();
    let g = table.column("g");
    table.header.push("copy".into());
    for row in &mut table.rows {
        let copy = if row[g] == "m" { "yes" } else { "no" };
        row.push(copy.into());
    }
    let copy = "[[field]]\nname = \"copy\"\nkind = \"levels\"\nreference = \"no\"\n";
    let tests = field_tests(&worked_plan("", &format!("{X1}{G}{copy}")), &table);
    let freedom: Vec<_> = tests.iter().map(|test| (&test.tested, test.degrees_of_freedom)).collect();
    let field = |name: &str| Tested::Field(name.into());
    assert_eq!(freedom, [(&field("x1"), 2), (&field("g"), 2), (&Tested::Everything, 6)]);
}

#[test]
fn with_few_clusters_fields_are_tested_by_f() {
    let plan = worked_plan("cluster = \"cl\"", &format!("{X1}{X2}{G}[fit]\nstandard_errors = \"cluster\""));
    let tests = field_tests(&plan, &tiny());
    let test = &tests[0];
    let wald = test.wald.unwrap();
    assert_eq!(wald.distribution, Distribution::F { numerator: 2.0, denominator: 13.0 });
    assert!(test.likelihood_ratio.is_none() && test.approximate);
    // The same from the covariance in the model file.
    let model = fitted(&plan, &tiny()).model;
    let covariance = model.covariance.as_ref().unwrap();
    let (b, c) = (model.coefficients["b"][1], model.coefficients["c"][1]);
    let (vb, vc, vbc) = (covariance.at(1, 1), covariance.at(6, 6), covariance.at(6, 1));
    let chi2 = (b * b * vc - 2.0 * b * c * vbc + c * c * vb) / (vb * vc - vbc * vbc);
    assert_close("F", wald.statistic, chi2 * 13.0 / (2.0 * 14.0), 0.0, 1e-9);
}

#[test]
fn average_marginal_effects() {
    let expected = expected();
    let effects = effects(&worked_plan("", &format!("{X1}{X2}{G}")), &tiny());
    let rows = |key: &str| expected[key].as_array().unwrap().iter().flat_map(numbers).collect::<Vec<_>>();
    let found: Vec<f64> = effects.iter().map(|effect| effect.effect).collect();
    assert_all_close("effects", &found, &rows("AME x1,x2,l,m x (a,b,c)"), 0.0, DIGITS);
    let found: Vec<f64> = effects.iter().map(|effect| effect.standard_error).collect();
    assert_all_close("errors", &found, &rows("AME se"), 0.0, DIGITS);
    let last = effects.last().unwrap();
    assert_eq!(last.change, Change::Switch { to: "m".into(), from: "k".into() });
}

#[test]
fn intervals_of_probabilities() {
    let (fit, expected) = (full_fit(), expected());
    let found = ProbabilityIntervals::new(&fit.model, 0.95).unwrap().of_record(&[3.0, 2005.0, 1.0]);
    let of = |pick: &dyn Fn(&ProbabilityInterval) -> f64| found.iter().map(pick).collect::<Vec<_>>();
    assert_all_close("p", &of(&|i| i.probability), &numbers(&expected["p at x0"]), 0.0, DIGITS);
    assert_all_close("error", &of(&|i| i.log_odds_error), &numbers(&expected["logit se"]), 0.0, DIGITS);
    assert_all_close("low", &of(&|i| i.interval[0]), &numbers(&expected["plo"]), 0.0, DIGITS);
    assert_all_close("high", &of(&|i| i.interval[1]), &numbers(&expected["phi"]), 0.0, DIGITS);
    // A million draws of the coefficients: the intervals agree to a few hundredths at 60 rows.
    assert_all_close("draws", &of(&|i| i.interval[0]), &numbers(&expected["sim 2.5%"]), 0.014, 0.0);
    assert_all_close("draws", &of(&|i| i.interval[1]), &numbers(&expected["sim 97.5%"]), 0.014, 0.0);
}

#[test]
fn measures_of_fit() {
    let found = fit_statistics(full_fit().model.fit.as_ref().unwrap());
    let found =
        [found.aic, found.bic, found.mcfadden, found.mcfadden_adjusted, found.cox_snell, found.nagelkerke];
    assert_all_close("measures", &found, &numbers(&expected()["AIC,BIC,McF,McFadj,CS,Nag"]), 0.0, DIGITS);
}

#[test]
fn goodness_of_fit_in_groups() {
    let expected = json("worked/fitting.json")["firth_ridge_gof_iia_terms"].clone();
    let plan = worked_plan("", &format!("{X1}{X2}{G}"));
    let (six, ten, chosen) = analysed(&plan, &tiny(), |mut analysis| {
        let mut of = |groups| analysis.goodness_of_fit_in(groups).unwrap().unwrap();
        (of(6), of(10), analysis.goodness_of_fit().unwrap())
    });
    for (found, key) in [(&six, "FHB G=6 stat,df,p"), (&ten, "FHB G=10 stat,df,p")] {
        let [statistic, freedom, p] = numbers(&expected[key])[..] else { panic!("three") };
        assert_eq!(found.test.distribution, Distribution::ChiSquared { freedom });
        assert_all_close(key, &[found.test.statistic, found.test.p], &[statistic, p], 0.0, DIGITS);
        assert!(!found.valid, "60 cases are too few for {key}");
    }
    let (first, last) = (&six.groups[0], &six.groups[5]);
    assert_eq!((&first.observed, &last.observed), (&vec![5.0, 4.0, 1.0], &vec![1.0, 0.0, 9.0]));
    assert_all_close(
        "first",
        &first.expected,
        &[4.573_058_447_1, 4.356_856_426, 1.070_085_126_9],
        0.0,
        DIGITS,
    );
    assert_all_close(
        "last",
        &last.expected,
        &[1.193_330_782_1, 0.556_530_417_3, 8.250_138_800_6],
        0.0,
        DIGITS,
    );
    assert!(chosen.is_none_or(|found| found.groups.len() == 5));
}

/// A flag and levels: six distinct rows.
#[test]
fn goodness_of_fit_of_a_table() {
    let expected = json("worked/fitting.json")["firth_ridge_gof_iia_terms"].clone();
    let mut table = tiny();
    let x1 = table.column("x1");
    table.header.push("h".into());
    for row in &mut table.rows {
        let high = row[x1].parse::<f64>().unwrap() > 2.4;
        row.push(high.to_string());
    }
    let plan = worked_plan("", &format!("[[field]]\nname = \"h\"\nkind = \"flag\"\n{G}"));
    let (beta, found) = analysed(&plan, &table, |mut analysis| {
        (coefficients(&analysis.fitted.model), analysis.grouped_fit().unwrap().unwrap())
    });
    assert_all_close("beta", &beta, &numbers(&expected["grouped beta"]), 0.0, DIGITS);
    let [_, deviance, pearson, freedom, p_deviance, p_pearson] = numbers(&expected["ll,dev,X2,df,pD,pX"])[..]
    else {
        panic!("six")
    };
    assert_eq!(found.patterns, 6);
    assert_eq!(found.deviance.distribution, Distribution::ChiSquared { freedom });
    let figures = [found.deviance.statistic, found.pearson.statistic, found.deviance.p, found.pearson.p];
    assert_all_close("table", &figures, &[deviance, pearson, p_deviance, p_pearson], 0.0, DIGITS);
}

/// Spline columns, products and missing flags.
mod terms {
    use super::*;
    use kilter_model::{Field, Form, MissingNumber};

    fn terms() -> Value {
        json("worked/fitting.json")["firth_ridge_gof_iia_terms"].clone()
    }

    #[test]
    fn a_restricted_cubic_spline() {
        let (expected, fields) = (terms(), format!("{X1}form = {{ spline = 4 }}\n{G}"));
        let fit = fitted(&worked_plan("", &fields), &tiny());
        let Field::Number(x1) = &fit.model.fields[0] else { panic!("a number") };
        let Form::Spline(spline) = &x1.form else { panic!("a spline") };
        assert_all_close("knots", &spline.knots, &numbers(&expected["knots"]), 0.0, 1e-14);
        let log_likelihood = fit.model.fit.as_ref().unwrap().log_likelihood;
        assert_close("log-likelihood", log_likelihood, expected["spline ll"].as_f64().unwrap(), 0.0, 1e-12);
        let found = coefficients(&fit.model);
        assert_all_close("plain", &found, &numbers(&expected["spline beta raw"]), 0.0, DIGITS);
        // Errors of the slopes, which were given for standardised columns.
        let scale: Vec<f64> = numbers(&expected["spline mean,sd"][1]);
        let wanted = numbers(&expected["se#4"]);
        for (index, found) in
            standard_errors(&fit.model).iter().enumerate().filter(|(index, _)| index % 6 != 0)
        {
            let factor = scale.get(index % 6 - 1).copied().unwrap_or(1.0);
            assert_close("error", found * factor, wanted[index], 0.0, DIGITS);
        }
    }

    #[test]
    fn a_number_times_levels() {
        let (expected, scales) = (terms(), numbers(&super::expected()["m1,s1,m2,s2"]));
        let fit =
            fitted(&worked_plan("", &format!("{X1}{G}[[interaction]]\nfields = [\"x1\", \"g\"]")), &tiny());
        assert_eq!(fit.model.terms, ["(intercept)", "x1", "g=l", "g=m", "x1:g=l", "x1:g=m"]);
        let log_likelihood = fit.model.fit.as_ref().unwrap().log_likelihood;
        assert_close(
            "log-likelihood",
            log_likelihood,
            expected["interaction ll"].as_f64().unwrap(),
            0.0,
            1e-12,
        );
        let wanted = numbers(&expected["beta"]);
        for (found, wanted) in coefficients(&fit.model).chunks_exact(6).zip(wanted.chunks_exact(6)) {
            // Main effects of levels are at the mean of x1 in the standardised model.
            let (mean, deviation) = (scales[0], scales[1]);
            let standardised = [
                found[0] + mean * found[1],
                deviation * found[1],
                found[2] + mean * found[4],
                found[3] + mean * found[5],
                deviation * found[4],
                deviation * found[5],
            ];
            assert_all_close("coefficients", &standardised, wanted, 0.0, DIGITS);
        }
        let found = standard_errors(&fit.model);
        let wanted = numbers(&expected["se#5"]);
        for index in [1, 4, 5, 7, 10, 11] {
            assert_close("error", found[index] * scales[1], wanted[index], 0.0, DIGITS);
        }
    }

    #[test]
    fn a_missing_number_takes_the_mean_and_a_flag() {
        let expected = terms();
        let x3 = "[[field]]\nname = \"x3\"\nkind = \"number\"\nmissing = \"mean-and-flag\"\n";
        let fit = fitted(&worked_plan("", &format!("{X1}{x3}")), &tiny());
        assert_eq!(fit.model.terms, ["(intercept)", "x1", "x3", "missing(x3)"]);
        let [mean, deviation, log_likelihood] = numbers(&expected["meanflag m,s,ll"])[..] else {
            panic!("three")
        };
        let Field::Number(field) = &fit.model.fields[1] else { panic!("a number") };
        let MissingNumber::MeanAndFlag(means) = &field.missing else { panic!("a flag") };
        assert_all_close("mean", &means.means, &[mean], 0.0, 1e-14);
        let found = fit.model.fit.as_ref().unwrap().log_likelihood;
        assert_close("log-likelihood", found, log_likelihood, 0.0, 1e-12);
        let wanted = numbers(&expected["beta#2"]);
        for (found, wanted) in coefficients(&fit.model).chunks_exact(4).zip(wanted.chunks_exact(4)) {
            assert_close("x3", found[2] * deviation, wanted[2], 0.0, DIGITS);
            assert_close("missing(x3)", found[3], wanted[3], 0.0, DIGITS);
        }
        let (found, wanted) = (standard_errors(&fit.model), numbers(&expected["se#6"]));
        for index in [3, 7] {
            assert_close("error of the flag", found[index], wanted[index], 0.0, DIGITS);
        }
        assert_eq!(fit.refused_rows, 0);
    }
}
