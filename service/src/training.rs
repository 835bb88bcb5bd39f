//! The rows of a fit: read from files for the fit, and once more for what drift will be measured
//! against.

use std::ops::ControlFlow;
use std::path::{Path, PathBuf};

use anyhow::Context;
use kilter_drift::{Detail, FieldLayout, FitFacts, Frame, ScoredRecord, Summary, baseline, deciles, holdout};
use kilter_fit::{ColumnPlaces, Fitted, Plan, RowSource};
use kilter_model::{Batch, Column, Field, MISSING_TIME, ModelFile, Scorer};
use kilter_tables::{ReadOptions, TableError, TableReader};
use sha2::{Digest, Sha256};

use crate::exit::Hint;

/// Rows from which quantiles are taken at most; they are spread evenly over the table.
const MOST_SAMPLED: usize = 200_000;

/// The files of a plan.
#[derive(Debug)]
pub(crate) struct TrainingRows {
    files: Vec<PathBuf>,
    plan: Plan,
}

impl TrainingRows {
    /// Finds the files of a plan, in the order of their names.
    ///
    /// # Errors
    /// A pattern that cannot be read, or that no file matches.
    pub(crate) fn open(plan: &Plan, folder: &Path) -> anyhow::Result<Self> {
        let mut files = Vec::new();
        for pattern in &plan.data.files {
            let place = folder.join(pattern);
            let found = glob::glob(&place.to_string_lossy())
                .with_context(|| format!("`data.files`: `{pattern}` is no pattern of file names"))?
                .collect::<Result<Vec<PathBuf>, _>>()
                .with_context(|| format!("could not look for `{pattern}`"))?;
            if found.is_empty() {
                let hint = format!(
                    "patterns start from the plan's folder, `{}`",
                    std::path::absolute(folder)?.display()
                );
                return Err(anyhow::Error::new(Hint(hint)).context(format!("no file matches `{pattern}`")));
            }
            files.extend(found);
        }
        files.sort();
        files.dedup();
        Ok(Self { files, plan: plan.clone() })
    }

    /// SHA-256 of the files' bytes, one after another.
    fn fingerprint(&self) -> anyhow::Result<String> {
        let mut hash = Sha256::new();
        for path in &self.files {
            let mut file =
                std::fs::File::open(path).with_context(|| format!("could not read `{}`", path.display()))?;
            std::io::copy(&mut file, &mut HashWriter(&mut hash))
                .with_context(|| format!("could not read `{}`", path.display()))?;
        }
        Ok(format!("sha256:{}", kilter_model::fingerprint::hexadecimal(&hash.finalize())))
    }
}

/// Lets `std::io::copy` feed a hash.
struct HashWriter<'a>(&'a mut Sha256);

impl std::io::Write for HashWriter<'_> {
    fn write(&mut self, bytes: &[u8]) -> std::io::Result<usize> {
        self.0.update(bytes);
        Ok(bytes.len())
    }

    fn flush(&mut self) -> std::io::Result<()> {
        Ok(())
    }
}

impl RowSource for TrainingRows {
    type Error = TableError;

    fn pass(&mut self, visit: &mut dyn FnMut(Batch) -> ControlFlow<()>) -> Result<(), TableError> {
        for path in &self.files {
            let options =
                ReadOptions { columns: self.plan.column_specs(), carry: false, ..ReadOptions::default() };
            for batch in TableReader::open(path, options)? {
                if visit(batch?.batch).is_break() {
                    return Ok(());
                }
            }
        }
        Ok(())
    }
}

/// Sums over the rows of a fit and over those kept out of it.
#[derive(Debug)]
pub(crate) struct Evaluated {
    /// Over the rows of the fit.
    pub(crate) fitted: Summary,
    /// Over the rows kept out of it.
    pub(crate) held_out: Summary,
    /// Number of rows kept out.
    pub(crate) held_out_rows: u64,
}

/// Completes a fitted model: data fingerprint, baseline and holdout figures, computed with the one
/// scorer from the rows of the fit.
pub(crate) fn complete(
    plan: &Plan,
    rows: &mut TrainingRows,
    fitted: &mut Fitted,
) -> anyhow::Result<Evaluated> {
    if let Some(fit) = &mut fitted.model.fit {
        fit.data_fingerprint = Some(rows.fingerprint()?);
    }
    let mut evaluation = Evaluation::new(plan, fitted)?;
    evaluation.sample(rows)?;
    let frame = evaluation.frame()?;
    let sums = evaluation.sums(rows, &frame)?;
    let (mix, slopes) = (sums.mix(), slopes_of(&fitted.model));
    let facts = FitFacts {
        cases: sums.cases,
        slopes,
        penalised: fitted.model.fit.as_ref().is_some_and(|fit| fit.ridge > 0.0),
        term_means: sums.terms.means(),
        term_covariance: sums.terms.covariance(),
        ..FitFacts::default()
    };
    fitted.model.baseline = Some(baseline(&frame, &sums.fitted, facts)?);
    if sums.held_out_rows > 0 {
        fitted.model.holdout = Some(holdout(&sums.held_out, &mix, sums.held_out_rows)?);
    }
    let Sums { fitted, held_out, held_out_rows, .. } = sums;
    Ok(Evaluated { fitted, held_out, held_out_rows })
}

/// Number of coefficients that are no intercepts, those of terms left out not counted.
fn slopes_of(model: &ModelFile) -> u64 {
    let intercepts = model.outcome.categories.len() as u64 - 1;
    model.fit.as_ref().map_or(0, |fit| fit.parameters.saturating_sub(intercepts))
}

/// Scores the rows of the fit again.
struct Evaluation<'a> {
    fitted: &'a Fitted,
    scorer: Scorer,
    places: ColumnPlaces,
    /// For each field a sample of its numbers; empty for levels and flags.
    samples: Vec<Vec<f64>>,
    /// A sample of one minus the probability of the reference category.
    unlike_reference: Vec<f64>,
    /// What a weight of one counts for: sampling weights only matter in proportion, and all of
    /// them together count for as many cases as the fit was worth.
    cases_per_weight: f64,
}

/// A row of the fit, scored.
struct EvaluatedRow<'a> {
    record: ScoredRecord<'a>,
    category: usize,
    cases: f64,
    held_out: bool,
}

/// Sums over the rows of the fit and over those kept out of it.
struct Sums {
    fitted: Summary,
    held_out: Summary,
    held_out_rows: u64,
    terms: TermSums,
    /// Number of cases N.
    cases: f64,
}

impl Sums {
    /// Observed shares of the categories.
    fn mix(&self) -> Vec<f64> {
        self.fitted.observed().iter().map(|count| count / self.cases).collect()
    }
}

impl<'a> Evaluation<'a> {
    fn new(plan: &Plan, fitted: &'a Fitted) -> anyhow::Result<Self> {
        let scorer = Scorer::new(&fitted.model)?;
        Ok(Self {
            fitted,
            scorer,
            places: plan.column_places(),
            samples: vec![Vec::new(); fitted.model.fields.len()],
            unlike_reference: Vec::new(),
            cases_per_weight: 1.0,
        })
    }

    /// First pass: samples for the bins.
    fn sample(&mut self, rows: &mut TrainingRows) -> anyhow::Result<()> {
        let every = (self.fitted.rows_read as usize).div_ceil(MOST_SAMPLED).max(1);
        let (mut samples, mut unlike) = (std::mem::take(&mut self.samples), Vec::new());
        let reference = self.scorer.reference();
        let (mut number, mut weight) = (0, 0.0);
        self.visit(rows, |row, probabilities| {
            if row.held_out {
                return Ok(());
            }
            if number % every == 0 {
                for (sample, input) in samples.iter_mut().zip(row.record.inputs) {
                    sample.push(*input);
                }
                unlike.push(
                    probabilities.iter().enumerate().filter(|(j, _)| *j != reference).map(|(_, p)| p).sum(),
                );
            }
            number += 1;
            weight += row.cases;
            Ok(())
        })?;
        if self.places.weight.is_some() {
            self.cases_per_weight = self.fitted.effective_cases / weight;
        }
        (self.samples, self.unlike_reference) = (samples, unlike);
        Ok(())
    }

    /// The frame that the baseline is computed in.
    fn frame(&mut self) -> anyhow::Result<Frame> {
        let model = &self.fitted.model;
        let layouts = model.fields.iter().zip(&mut self.samples).map(|(field, sample)| match field {
            Field::Number(number) => FieldLayout::new(field, &deciles(sample), number.observed),
            Field::Levels(_) | Field::Flag(_) => FieldLayout::new(field, &[], None),
        });
        Ok(Frame::for_fit(
            model.outcome.categories.clone(),
            model.reference_index(),
            layouts.collect(),
            deciles(&mut self.unlike_reference),
            model.terms.len() - 1,
        )?)
    }

    /// Second pass: sums.
    fn sums(&self, rows: &mut TrainingRows, frame: &Frame) -> anyhow::Result<Sums> {
        let mut sums = Sums {
            fitted: Summary::new(frame, Detail::Full),
            held_out: Summary::new(frame, Detail::Full),
            held_out_rows: 0,
            terms: TermSums::new(self.fitted.model.terms.len() - 1),
            cases: 0.0,
        };
        self.visit(rows, |row, _| {
            let summary = if row.held_out { &mut sums.held_out } else { &mut sums.fitted };
            summary.add_scored(frame, &row.record, row.cases)?;
            summary.add_outcome(frame, &row.record, row.category, f64::NAN, row.cases)?;
            if row.held_out {
                sums.held_out_rows += 1;
            } else {
                sums.terms.add(row.record.terms, row.cases);
                sums.cases += row.cases;
            }
            Ok(())
        })?;
        Ok(sums)
    }

    /// Visits all rows that were fitted or held out.
    fn visit(
        &self,
        rows: &mut TrainingRows,
        mut visit: impl FnMut(&EvaluatedRow, &[f64]) -> anyhow::Result<()>,
    ) -> anyhow::Result<()> {
        let mut first_row = 0;
        let mut failure = None;
        rows.pass(&mut |batch| {
            let visited = self.visit_batch(&batch, first_row, &mut visit);
            first_row += batch.rows as u64;
            match visited {
                Ok(()) => ControlFlow::Continue(()),
                Err(error) => {
                    failure = Some(error);
                    ControlFlow::Break(())
                }
            }
        })?;
        failure.map_or(Ok(()), Err)
    }

    fn visit_batch(
        &self,
        batch: &Batch,
        first_row: u64,
        visit: &mut impl FnMut(&EvaluatedRow, &[f64]) -> anyhow::Result<()>,
    ) -> anyhow::Result<()> {
        let scored = self.scorer.score(batch);
        let usable = scored.coded.usable();
        let design = self.scorer.design();
        let (mut dense, mut terms) = (vec![0.0; design.dense().len()], vec![0.0; design.terms().len()]);
        let mut values = vec![0.0; scored.coded.values.len()];
        let columns = RowColumns::new(batch, &self.places);
        for row in (0..batch.rows).filter(|&row| usable[row]) {
            let (Some(category), Some(weight)) = (self.category(&columns, row), columns.weight(row)) else {
                continue;
            };
            for (slot, column) in values.iter_mut().zip(&scored.coded.values) {
                *slot = column[row];
            }
            design.fill_row(&values, &mut dense, &mut terms);
            let inputs = scored.coded.input_row(row);
            let record =
                ScoredRecord { log_odds: scored.log_odds_of(row), inputs: &inputs, terms: &terms[1..] };
            let number = first_row + row as u64;
            let held_out = self.fitted.split.holds_out(number, columns.id(row), columns.time(row));
            let cases = weight * self.cases_per_weight;
            visit(&EvaluatedRow { record, category, cases, held_out }, scored.probabilities_of(row))?;
        }
        Ok(())
    }

    fn category(&self, columns: &RowColumns, row: usize) -> Option<usize> {
        let name = columns.outcome(row)?;
        self.fitted.model.outcome.categories.iter().position(|category| category == name)
    }
}

/// The columns of a batch beside its fields.
struct RowColumns<'a> {
    batch: &'a Batch,
    places: &'a ColumnPlaces,
}

impl<'a> RowColumns<'a> {
    fn new(batch: &'a Batch, places: &'a ColumnPlaces) -> Self {
        Self { batch, places }
    }

    fn text(&self, column: usize, row: usize) -> Option<&'a str> {
        self.batch.columns.get(column).and_then(Column::texts).and_then(|texts| texts.get(row))
    }

    fn outcome(&self, row: usize) -> Option<&'a str> {
        self.text(self.places.outcome, row)
    }

    fn id(&self, row: usize) -> Option<&'a str> {
        self.places.id.and_then(|column| self.text(column, row))
    }

    fn time(&self, row: usize) -> Option<i64> {
        let times = self.batch.columns.get(self.places.time?).and_then(Column::times)?;
        Some(times[row]).filter(|time| *time != MISSING_TIME)
    }

    /// Cases that a row stands for, times its sampling weight; `None` where that is nothing.
    fn weight(&self, row: usize) -> Option<f64> {
        let number = |place: Option<usize>| match place {
            None => Some(1.0),
            Some(column) => self.batch.columns.get(column).and_then(Column::numbers).map(|cells| cells[row]),
        };
        let weight = number(self.places.count)? * number(self.places.weight)?;
        (weight > 0.0).then_some(weight)
    }
}

/// Weighted means and covariance of the terms, one pass (Welford 1962, with weights West 1979).
struct TermSums {
    weight: f64,
    means: Vec<f64>,
    /// Rows of the lower triangle of the summed products of deviations.
    products: Vec<f64>,
    deviations: Vec<f64>,
}

impl TermSums {
    fn new(terms: usize) -> Self {
        Self {
            weight: 0.0,
            means: vec![0.0; terms],
            products: vec![0.0; terms * (terms + 1) / 2],
            deviations: vec![0.0; terms],
        }
    }

    fn add(&mut self, terms: &[f64], weight: f64) {
        self.weight += weight;
        for ((deviation, mean), term) in self.deviations.iter_mut().zip(&mut self.means).zip(terms) {
            *deviation = term - *mean;
            *mean += *deviation * weight / self.weight;
        }
        // A deviation from the former means times one from the new means.
        let shrink = weight * (1.0 - weight / self.weight);
        let mut place = 0;
        for (row, left) in self.deviations.iter().enumerate() {
            for right in &self.deviations[..=row] {
                self.products[place] += shrink * left * right;
                place += 1;
            }
        }
    }

    fn means(&self) -> Vec<f64> {
        self.means.clone()
    }

    fn covariance(&self) -> Vec<f64> {
        self.products.iter().map(|product| product / self.weight).collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Against the plain definition, with rows of weight 2 repeated.
    #[test]
    fn term_sums_equal_the_definition() {
        let rows = [([1.0, 1e6], 1.0), ([2.0, 1e6 + 3.0], 2.0), ([5.0, 1e6 - 1.0], 1.0)];
        let mut sums = TermSums::new(2);
        for (terms, weight) in &rows {
            sums.add(terms, *weight);
        }
        let all: Vec<[f64; 2]> =
            rows.iter().flat_map(|(terms, w)| std::iter::repeat_n(*terms, *w as usize)).collect();
        let mean = |k: usize| all.iter().map(|row| row[k]).sum::<f64>() / 4.0;
        let covariance = |j: usize, k: usize| {
            all.iter().map(|row| (row[j] - mean(j)) * (row[k] - mean(k))).sum::<f64>() / 4.0
        };
        assert_eq!(sums.means(), [mean(0), mean(1)]);
        for (found, wanted) in
            sums.covariance().iter().zip([covariance(0, 0), covariance(1, 0), covariance(1, 1)])
        {
            assert!((found - wanted).abs() < 1e-9, "{found} {wanted}");
        }
    }
}
