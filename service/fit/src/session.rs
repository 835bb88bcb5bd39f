//! A fit from plan and rows to model file.

use kilter_model::StandardErrors;

use crate::analysis::Analysis;
use crate::bias_reduction::estimate_bias_reduced;
use crate::chunk::Chunk;
use crate::covariance::{LEAST_CLUSTERS, clustered, robust};
use crate::cross_validation::{CrossValidation, cross_validate, drawn_fold, grid, number_of_folds};
use crate::error::FitError;
use crate::estimate::{Method, Solution, estimate};
use crate::fitted::{Fitted, RidgeFigures};
use crate::model::{Outcomes, model_file};
use crate::newton::Iterate;
use crate::plan::{BiasReductionPlan, HoldoutPlan, Plan, RidgePlan};
use crate::raw::{BackTransform, describe};
use crate::reader::{ReadStatistics, Reader};
use crate::resolve::{Resolved, resolve};
use crate::ridge::estimate_ridge;
use crate::separation::SeparationReport;
use crate::source::RowSource;
use crate::split::Split;
use crate::survey::{Survey, Surveyor};
use crate::table::{Rows, Table, last_fitted_time, read_chunks};
use crate::trouble::{Decision, check_separation};

/// How a fit may use the machine.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct FitSettings {
    /// Threads that sum over rows. The result does not depend on it.
    pub threads: usize,
    /// Coded rows are kept in memory as long as they take at most this many bytes; beyond it each
    /// pass reads the source again. The result does not depend on it.
    pub keep_bytes: usize,
}

impl Default for FitSettings {
    fn default() -> Self {
        let threads = std::thread::available_parallelism().map_or(1, std::num::NonZero::get);
        Self { threads, keep_bytes: 1 << 30 }
    }
}

/// How far a fit has come.
#[derive(Debug, Clone, Copy, PartialEq)]
#[non_exhaustive]
pub enum Progress {
    /// The rows are being surveyed.
    Surveying {
        /// Rows of the fit so far.
        rows: u64,
    },
    /// A step of the optimiser begins.
    Step {
        /// Number of the step, counted from 0.
        number: u64,
        /// Log-likelihood at this point.
        log_likelihood: f64,
        /// Distance to the optimum, in standard errors.
        decrement: f64,
    },
}

/// Fits a plan to rows.
///
/// # Errors
/// [`FitError`] says what is wrong with rows or plan, or why there is no estimate. No model is
/// returned unless the optimiser converged and the optimum is finite and unique.
pub fn fit(
    plan: &Plan,
    rows: &mut impl RowSource,
    settings: FitSettings,
    progress: &mut dyn FnMut(Progress),
) -> Result<Fitted, FitError> {
    Ok(Session::open(plan, rows, settings, progress)?.fit(progress)?.fitted)
}

/// Rows that were surveyed and can be fitted.
pub struct Session<'a> {
    plan: Plan,
    split: Split,
    table: Table<'a>,
    survey: Survey,
    resolved: Resolved,
    statistics: ReadStatistics,
    clusters: u64,
}

impl<'a> Session<'a> {
    /// Reads the rows once: decides categories, levels and scales.
    ///
    /// # Errors
    /// [`FitError`] where the source fails, no row is left, or categories or levels are not what
    /// the plan says.
    pub fn open(
        plan: &Plan,
        rows: &'a mut impl RowSource,
        settings: FitSettings,
        progress: &mut dyn FnMut(Progress),
    ) -> Result<Self, FitError> {
        let rows: &mut dyn Rows = rows;
        let split = split_of(plan, rows)?;
        let mut reader = Reader::new(plan, split);
        let mut surveyor = Surveyor::new(plan);
        let mut keeper = Keeper { chunks: Some(Vec::new()), bytes: 0, allowance: settings.keep_bytes };
        let mut rows_so_far = 0;
        let mut window = Vec::with_capacity(settings.threads);
        read_chunks(rows, &mut reader, &mut |chunk| {
            rows_so_far += chunk.rows() as u64;
            window.push(chunk);
            if window.len() >= settings.threads {
                surveyor.add(&window);
                keeper.keep(&mut window);
            }
            progress(Progress::Surveying { rows: rows_so_far });
            Ok(())
        })?;
        surveyor.add(&window);
        keeper.keep(&mut window);
        let statistics = reader.statistics().clone();
        let clusters = surveyor.clusters();
        let (survey, samples) = surveyor.finish();
        let survey = survey.ok_or_else(|| no_rows(&statistics))?;
        let mut resolved = resolve(plan, &reader, &survey, &samples)?;
        if statistics.fractional_counts {
            resolved.warnings.push("some counts are no whole numbers; they are used as they are".to_owned());
        }
        let table = if let Some(mut chunks) = keeper.chunks {
            for chunk in &mut chunks {
                resolved.relabel.apply(chunk);
            }
            Table::in_memory(chunks, settings.threads)
        } else {
            let relabel = resolved.relabel.clone();
            Table::at_source(rows, reader, relabel, settings.threads, survey.total.rows)
        };
        Ok(Self { plan: plan.clone(), split, table, survey, resolved, statistics, clusters })
    }

    /// Fits as the plan says: by maximum likelihood, or with a ridge penalty.
    ///
    /// # Errors
    /// As [`fit`].
    pub fn fit(mut self, progress: &mut dyn FnMut(Progress)) -> Result<Analysis<'a>, FitError> {
        let mut trace = Vec::new();
        let mut watch = |number, iterate| {
            let Iterate { value: log_likelihood, decrement } = iterate;
            trace.push([log_likelihood, decrement]);
            progress(Progress::Step { number, log_likelihood, decrement });
        };
        let (table, resolved) = (&mut self.table, &self.resolved);
        let mut validation = None;
        let solution = match self.plan.fit.ridge {
            RidgePlan::Penalty(0.0) => match self.plan.fit.bias_reduction {
                BiasReductionPlan::Always => estimate_bias_reduced(table, resolved, &mut watch)?,
                reduction => match estimate(table, resolved, &mut watch) {
                    Err(FitError::Separated(_)) if reduction == BiasReductionPlan::IfSeparated => {
                        estimate_bias_reduced(table, resolved, &mut watch)?
                    }
                    estimated => estimated?,
                },
            },
            RidgePlan::Penalty(rho) => estimate_ridge(table, resolved, rho, &mut watch)?,
            RidgePlan::CrossValidate => {
                let folds = number_of_folds(resolved);
                let found = cross_validate(table, resolved, &grid(), folds, &drawn_fold(folds))?;
                let rho = found.chosen;
                validation = Some(found);
                estimate_ridge(table, resolved, rho, &mut watch)?
            }
        };
        let covariance = self.covariance(&solution)?;
        let fitted = self.fitted(&solution, &covariance, trace, validation);
        let Self { plan, table, resolved, .. } = self;
        Ok(Analysis { fitted, plan, table, resolved, solution, covariance })
    }

    /// Decides whether the data separate the categories, so that there is no maximum likelihood
    /// estimate: by the optimiser, and by linear programme where it finds none. `None` where the
    /// estimate exists.
    ///
    /// # Errors
    /// [`FitError`] where the rows cannot be read, or the linear programme could not be solved
    /// well enough to say.
    pub fn check_separation(&mut self) -> Result<Option<SeparationReport>, FitError> {
        match check_separation(&mut self.table, &self.resolved)? {
            Decision::Finite => Ok(None),
            Decision::Separated(report) => Ok(Some(report)),
            Decision::Undecided => Err(FitError::Undecided),
        }
    }

    fn covariance(&mut self, solution: &Solution) -> Result<ErrorKind, FitError> {
        let model = || solution.optimum.covariance.clone();
        let column = self
            .plan
            .data
            .cluster
            .clone()
            .filter(|_| self.plan.fit.standard_errors == StandardErrors::Cluster);
        let (matrix, clusters) = match (self.plan.fit.standard_errors, column) {
            (StandardErrors::Cluster, Some(column)) => {
                let (found, least) = (self.clusters, LEAST_CLUSTERS);
                if found < least {
                    return Err(FitError::TooFewClusters { column, found, least });
                }
                let matrix = clustered(&mut self.table, solution)?.ok_or(FitError::LoneCluster { column })?;
                (matrix, Some(found))
            }
            (StandardErrors::Robust, _) => (robust(&mut self.table, solution)?, None),
            _ => (model(), None),
        };
        Ok(ErrorKind { matrix, clusters })
    }

    fn fitted(
        &self,
        solution: &Solution,
        covariance: &ErrorKind,
        trace: Vec<[f64; 2]>,
        validation: Option<CrossValidation>,
    ) -> Fitted {
        let resolved = &self.resolved;
        let names = resolved.design.term_names();
        let Solution { layout, swept, .. } = solution;
        let (back, left_out) =
            BackTransform::new(&resolved.design, &resolved.scaling, layout.order(), &swept.aliased);
        let aliased: Vec<String> = left_out
            .iter()
            .map(|term| format!("{} = {}", names[term.term], describe(term, &names)))
            .collect();
        let mut warnings = resolved.warnings.clone();
        warnings.extend(swept.nearly.iter().map(|&term| {
            format!(
                "`{}` is almost a combination of the terms before it: its coefficient is hardly determined",
                names[term]
            )
        }));
        if matches!(solution.method, Method::BiasReduced) {
            warnings
                .push("the estimate is bias-reduced (Firth 1993), not one of maximum likelihood".to_owned());
        }
        if validation.as_ref().is_some_and(|validation| validation.at_end) {
            warnings.push(
                "the smallest loss of the cross-validation lies at an end of the penalties tried".to_owned(),
            );
        }
        let outcomes = Outcomes {
            plan: &self.plan,
            resolved,
            statistics: &self.statistics,
            total: &self.survey.total,
            aliased: &aliased,
            warnings: &warnings,
            covariance,
        };
        let total = &self.survey.total;
        Fitted {
            model: model_file(&outcomes, &back, solution),
            split: self.split,
            rows_read: self.statistics.rows_read,
            held_out_rows: self.statistics.held_out_rows,
            refused_rows: self.statistics.refused_rows,
            refused: self.statistics.refused.clone(),
            effective_cases: total.weight.value().powi(2) / total.squares.value(),
            ridge: self.ridge_figures(solution, &back, validation),
            warnings,
            aliased,
            trace,
        }
    }

    fn ridge_figures(
        &self,
        solution: &Solution,
        back: &BackTransform,
        cross_validation: Option<CrossValidation>,
    ) -> Option<RidgeFigures> {
        let Method::Ridge { rho, effective, sampling } = &solution.method else { return None };
        let order = solution.layout.order();
        let mut by_field = vec![0.0; 1 + self.resolved.fields.len()];
        for (index, effective) in effective.iter().enumerate() {
            let fields = &self.resolved.design.terms()[order[index % order.len()]].fields;
            for field in fields {
                by_field[1 + field] += effective / fields.len() as f64;
            }
            if fields.is_empty() {
                by_field[0] += effective;
            }
        }
        let sampling = back.covariance(sampling.as_ref());
        let terms = self.resolved.design.terms().len();
        let errors = |block: usize| {
            (0..terms)
                .map(|term| {
                    let place = block * terms + term;
                    sampling[(place, place)].max(0.0).sqrt()
                })
                .collect()
        };
        let categories = self.resolved.category_names();
        Some(RidgeFigures {
            ridge: *rho,
            effective_parameters: by_field,
            sampling_errors: categories[1..]
                .iter()
                .enumerate()
                .map(|(block, name)| ((*name).to_owned(), errors(block)))
                .collect(),
            cross_validation,
        })
    }
}

/// The covariance that goes into the model file, on the scale of the optimiser.
#[derive(Debug)]
pub(crate) struct ErrorKind {
    pub(crate) matrix: faer::Mat<f64>,
    /// Number of clusters, where it is robust to them.
    pub(crate) clusters: Option<u64>,
}

fn split_of(plan: &Plan, rows: &mut dyn Rows) -> Result<Split, FitError> {
    match plan.data.holdout {
        None => Ok(Split::None),
        Some(HoldoutPlan::Share { share, seed }) => Ok(Split::Share { share, seed }),
        Some(HoldoutPlan::Latest(latest)) => {
            let last_fitted = last_fitted_time(rows, &plan.column_places(), latest)?;
            Ok(Split::Latest { last_fitted })
        }
    }
}

fn no_rows(statistics: &ReadStatistics) -> FitError {
    FitError::NoRows {
        refused: statistics.refused_rows,
        held_out: statistics.held_out_rows,
        first: statistics.refused.first().map(|refused| (refused.field.clone(), refused.reason.clone())),
    }
}

/// Chunks kept up to an allowance.
struct Keeper {
    chunks: Option<Vec<Chunk>>,
    bytes: usize,
    allowance: usize,
}

impl Keeper {
    /// Takes chunks over.
    fn keep(&mut self, taken: &mut Vec<Chunk>) {
        self.bytes += taken.iter().map(Chunk::bytes).sum::<usize>();
        if self.bytes > self.allowance {
            self.chunks = None;
            taken.clear();
        } else if let Some(chunks) = &mut self.chunks {
            chunks.append(taken);
        }
    }
}

/// The rows of a session and what was decided about them.
#[cfg(test)]
pub(crate) fn opened(session: Session) -> (Table, Resolved) {
    (session.table, session.resolved)
}
