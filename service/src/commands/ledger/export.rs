//! `kilter ledger export`: one row per record, for analysis elsewhere.

use std::ops::ControlFlow;

use anyhow::Context;
use kilter_ledger::{Ledger, RawRecord};
use kilter_model::cells::format_time;
use kilter_model::{ModelFile, probabilities_from_log_odds};
use kilter_tables::{Appended, AppendedKind, TableWriter};

use crate::cli::LedgerExportArgs;
use crate::commands::open_ledger;
use crate::config::Config;
use crate::exit::{Done, Hint, WrongUse};
use crate::monitor::{MICROS_PER_DAY, Span};
use crate::numbers::whole;
use crate::tables::borrowed;
use crate::terminal::say;

/// Rows that are written at a time.
const ROWS_AT_ONCE: usize = 50_000;

pub(super) fn run(config: &Config, arguments: &LedgerExportArgs) -> anyhow::Result<Done> {
    let span = Span::parse(arguments.from.as_deref(), arguments.to.as_deref())
        .map_err(|(name, reason)| WrongUse(format!("`--{name}`: {reason}")))?;
    let ledger = open_ledger(config)?;
    let versions = versions_of(&ledger, arguments)?;
    let categories = all_categories(&versions);
    let first = span.from.map_or(i64::MIN, |day| day.saturating_mul(MICROS_PER_DAY));
    let end = span.to.map_or(i64::MAX, |day| (day + 1).saturating_mul(MICROS_PER_DAY));
    let mut table = Table::create(arguments, categories)?;
    for model in &versions {
        let columns = table.columns_of(model);
        let mut failed = None;
        ledger.records(&model.name, &model.fingerprint, [first, end], |record| {
            match table.add(model, &columns, record) {
                Ok(()) => ControlFlow::Continue(()),
                Err(error) => {
                    failed = Some(error);
                    ControlFlow::Break(())
                }
            }
        })?;
        failed.map_or(Ok(()), Err)?;
    }
    let rows = table.finish()?;
    say(format_args!("{} records written to {}", whole(rows as f64), arguments.output.display()))?;
    Ok(Done::Well)
}

/// The versions of the model, or the one that was asked for.
fn versions_of(ledger: &Ledger, arguments: &LedgerExportArgs) -> anyhow::Result<Vec<ModelFile>> {
    let rows = ledger.versions(None)?;
    let names: Vec<String> = rows.iter().map(|row| row.model.clone()).collect();
    let own = rows.into_iter().filter(|row| row.model == arguments.name);
    let asked = |fingerprint: &str| arguments.version.as_ref().is_none_or(|v| is_version(fingerprint, v));
    let files: Vec<String> = own.filter(|row| asked(&row.fingerprint)).map(|row| row.file).collect();
    if files.is_empty() {
        let refusal = WrongUse(format!("the ledger holds no such version of `{}`", arguments.name));
        return Err(match kilter_model::near_miss(&arguments.name, &names) {
            Some(near) => anyhow::Error::new(Hint(format!("did you mean `{near}`?"))).context(refusal),
            None => refusal.into(),
        });
    }
    files
        .iter()
        .map(|text| ModelFile::from_json(text).context("a model file in the ledger cannot be read"))
        .collect()
}

/// Whether a fingerprint is the one that was meant by its beginning.
pub(crate) fn is_version(fingerprint: &str, beginning: &str) -> bool {
    let digits = fingerprint.trim_start_matches("sha256:");
    digits.starts_with(beginning.trim_start_matches("sha256:"))
}

/// The categories of all versions, each once, in the order in which they first come.
fn all_categories(versions: &[ModelFile]) -> Vec<String> {
    let mut all: Vec<String> = Vec::new();
    for category in versions.iter().flat_map(|model| &model.outcome.categories) {
        if !all.contains(category) {
            all.push(category.clone());
        }
    }
    all
}

/// The table being written.
struct Table {
    writer: TableWriter,
    categories: Vec<String>,
    rows: u64,
    texts: [Vec<String>; 5],
    probabilities: Vec<Vec<f64>>,
}

impl Table {
    fn create(arguments: &LedgerExportArgs, categories: Vec<String>) -> anyhow::Result<Self> {
        let text = |name: &str| (name.to_owned(), AppendedKind::Text);
        let mut head = ["id", "version", "time"].map(text).to_vec();
        head.extend(categories.iter().map(|category| (format!("p_{category}"), AppendedKind::Number)));
        head.extend(["outcome", "observed_at"].map(text));
        let writer = TableWriter::create_new(&arguments.output, &borrowed(&head))?;
        let probabilities = vec![Vec::new(); categories.len()];
        Ok(Self { writer, categories, rows: 0, texts: Default::default(), probabilities })
    }

    /// For each column of probabilities the category of a version, where it has one.
    fn columns_of(&self, model: &ModelFile) -> Vec<Option<usize>> {
        let place = |name: &String| model.outcome.categories.iter().position(|own| own == name);
        self.categories.iter().map(place).collect()
    }

    fn add(&mut self, model: &ModelFile, columns: &[Option<usize>], record: RawRecord) -> anyhow::Result<()> {
        let mut probabilities = vec![0.0; model.outcome.categories.len()];
        probabilities_from_log_odds(&record.log_odds, model.reference_index(), &mut probabilities);
        for (column, category) in self.probabilities.iter_mut().zip(columns) {
            column.push(category.map_or(f64::NAN, |category| probabilities[category]));
        }
        let (outcome, observed_at) = match record.outcome {
            Some(outcome) => (outcome.category, format_time(outcome.observed_at)),
            None => (String::new(), String::new()),
        };
        let row = [record.id, model.fingerprint.clone(), format_time(record.time), outcome, observed_at];
        for (column, text) in self.texts.iter_mut().zip(row) {
            column.push(text);
        }
        if self.texts[0].len() == ROWS_AT_ONCE { self.flush() } else { Ok(()) }
    }

    fn flush(&mut self) -> anyhow::Result<()> {
        let rows = self.texts[0].len();
        let [id, version, time, outcome, observed_at] = std::mem::take(&mut self.texts);
        let mut columns = vec![Appended::Text(id), Appended::Text(version), Appended::Text(time)];
        columns.extend(self.probabilities.iter_mut().map(|column| Appended::Number(std::mem::take(column))));
        columns.extend([Appended::Text(outcome), Appended::Text(observed_at)]);
        self.writer.write_new(rows, &columns)?;
        self.rows += rows as u64;
        Ok(())
    }

    fn finish(mut self) -> anyhow::Result<u64> {
        self.flush()?;
        self.writer.finish()?;
        Ok(self.rows)
    }
}
