//! Wald tests of whole fields, from coefficients and their covariance alone.

use faer::Mat;
use kilter_model::{Design, DesignError, ModelFile};

use crate::analysis::field_tests::{Distribution, FieldTest, TestResult, hypotheses};
use crate::covariance::FEW_CLUSTERS;
use crate::linear::{Factor, dot};

/// `b' V^-1 b` of some coefficients `b` with their covariance `V`; with few clusters Hotelling's
/// T-squared as an F. `None` where the covariance has too small a rank.
pub(super) fn wald(point: &[f64], covariance: &Mat<f64>, clusters: Option<u64>) -> Option<TestResult> {
    let freedom = point.len() as f64;
    if freedom == 0.0 || clusters.is_some_and(|clusters| clusters as f64 - 1.0 < freedom) {
        return None;
    }
    let statistic = dot(point, &Factor::new(covariance.as_ref()).ok()?.solve(point));
    Some(match clusters.filter(|&clusters| clusters < FEW_CLUSTERS) {
        Some(clusters) => {
            let denominator = clusters as f64 - freedom;
            let statistic = statistic * denominator / (freedom * (clusters as f64 - 1.0));
            TestResult::new(statistic, Distribution::F { numerator: freedom, denominator })
        }
        None => TestResult::new(statistic, Distribution::ChiSquared { freedom }),
    })
}

/// Whether there are too few clusters for the F distribution to be more than a rough guide.
pub(super) fn too_few_clusters(clusters: Option<u64>, freedom: usize) -> bool {
    clusters.filter(|&clusters| clusters < FEW_CLUSTERS).is_some_and(|c| c < 10 * freedom as u64)
}

/// Wald tests of each field, each curved form, each interaction and everything together, from a
/// model file. Empty for a penalised fit and for a file without covariance.
///
/// # Errors
/// [`DesignError`] where the fields of the file make no design.
pub fn wald_tests(model: &ModelFile) -> Result<Vec<FieldTest>, DesignError> {
    let design = Design::of_model(model)?;
    let penalised = model.fit.as_ref().is_some_and(|fit| fit.ridge > 0.0);
    let Some(covariance) = model.covariance.as_ref().filter(|_| !penalised) else { return Ok(Vec::new()) };
    let clusters = model.fit.as_ref().and_then(|fit| fit.clusters);
    let coefficients: Vec<f64> = model
        .compared_categories()
        .filter_map(|category| model.coefficients.get(category))
        .flatten()
        .copied()
        .collect();
    let terms = design.terms().len();
    let test = |(tested, gone): (_, Vec<bool>)| {
        // Terms that were left out have no variance.
        let tested_places: Vec<usize> = (0..coefficients.len())
            .filter(|&place| gone[place % terms] && covariance.at(place, place) > 0.0)
            .collect();
        let size = tested_places.len();
        let point: Vec<f64> = tested_places.iter().map(|&place| coefficients[place]).collect();
        let part =
            Mat::from_fn(size, size, |row, column| covariance.at(tested_places[row], tested_places[column]));
        (size > 0).then(|| FieldTest {
            tested,
            degrees_of_freedom: size as u64,
            wald: wald(&point, &part, clusters),
            likelihood_ratio: None,
            approximate: too_few_clusters(clusters, size),
        })
    };
    Ok(hypotheses(&design, &model.interactions).into_iter().filter_map(test).collect())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::worked::{G, X1, X2, plan, rows};
    use crate::{FitSettings, Session};

    /// The file holds coefficients and covariance on the scale of the fields, the optimiser has
    /// them standardised; a Wald statistic does not depend on the scale.
    #[test]
    fn the_model_file_gives_the_tests_of_the_fit() {
        let plan = plan(&[X1, X2, G].concat());
        let mut rows = rows(&plan, |_| true);
        let session = Session::open(&plan, &mut rows, FitSettings::default(), &mut |_| {}).unwrap();
        let mut analysis = session.fit(&mut |_| {}).unwrap();
        let of_fit = analysis.field_tests().unwrap();
        let of_file = wald_tests(&analysis.fitted.model).unwrap();
        assert_eq!(of_fit.len(), 4);
        assert_eq!(of_file.len(), 4);
        for (fit, file) in of_fit.iter().zip(&of_file) {
            assert_eq!((&fit.tested, fit.degrees_of_freedom), (&file.tested, file.degrees_of_freedom));
            let (fit, file) = (fit.wald.unwrap(), file.wald.unwrap());
            assert!((fit.statistic / file.statistic - 1.0).abs() < 1e-9, "{fit:?} {file:?}");
        }
        analysis.fitted.model.covariance = None;
        assert_eq!(wald_tests(&analysis.fitted.model).unwrap(), []);
    }
}
