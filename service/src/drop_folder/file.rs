//! One file of a drop folder: scored, kept in the ledger, receipted.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

use anyhow::Context;
use kilter_ledger::{FileStart, Job, Records, Reply};
use kilter_model::cells::format_time;
use kilter_tables::{Format, ReadOptions, TableBatch, TableError, TableReader, TableWriter};
use serde::Serialize;

use super::hash::sha256_of;
use super::{Claim, DropFolder, MOST_ATTEMPTS};
use crate::clock::Clock;
use crate::durable::{sync_folder, write_durably};
use crate::metrics::Metrics;
use crate::registry::Registry;
use crate::scoring::{ScoredRecords, Version, refusal_in_a_word};
use crate::tables::{ScoredContent, ScoredTable, borrowed, refused_columns, refused_values};

/// What became of a file.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub(crate) enum FileState {
    /// It was scored.
    Scored,
    /// It was set aside as a whole.
    Refused,
    /// Its content was scored before.
    Repeated,
}

impl FileState {
    /// The state in one word.
    pub(crate) fn name(self) -> &'static str {
        match self {
            Self::Scored => "scored",
            Self::Refused => "refused",
            Self::Repeated => "repeated",
        }
    }
}

/// What a receipt says.
#[derive(Debug, Clone, Serialize)]
pub(crate) struct Receipt {
    /// Name of the file as it came.
    pub(crate) file: String,
    /// SHA-256 of its content, hexadecimal.
    pub(crate) sha256: String,
    /// What became of it.
    pub(crate) state: FileState,
    /// Name of the model.
    pub(crate) model: String,
    /// Fingerprint of the version that scored it.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub(crate) version: Option<String>,
    /// Name of the results in `scored` and `refused`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub(crate) result: Option<String>,
    /// Rows read.
    pub(crate) rows: u64,
    /// Rows scored.
    pub(crate) scored: u64,
    /// Rows whose ids the ledger had already: scored, and not counted again.
    pub(crate) repeated: u64,
    /// Rows refused.
    pub(crate) refused: u64,
    /// Why it was set aside as a whole.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub(crate) reason: Option<String>,
    /// The file that had the same content.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub(crate) repeats: Option<String>,
    /// When work on it began.
    pub(crate) started: String,
    /// When it was finished.
    pub(crate) finished: String,
}

/// A claimed file being worked on.
struct Work<'a> {
    folder: &'a DropFolder,
    claimed: &'a Path,
    registry: &'a Registry,
    metrics: &'a Metrics,
    clock: Clock,
    receipt: Receipt,
}

/// Deals with a claimed and locked file.
pub(super) fn process(
    folder: &DropFolder,
    claimed: &Path,
    registry: &Registry,
    metrics: &Metrics,
    clock: Clock,
) -> anyhow::Result<Receipt> {
    let started = clock.now();
    Work::new(folder, claimed, registry, metrics, clock)?.run(started)
}

/// Sets a file aside that brought its workers down.
pub(super) fn set_aside(
    folder: &DropFolder,
    claimed: &Path,
    registry: &Registry,
    metrics: &Metrics,
    clock: Clock,
) -> anyhow::Result<Receipt> {
    let reason = format!("work on it was begun {MOST_ATTEMPTS} times and never ended; it may be damaged");
    Work::new(folder, claimed, registry, metrics, clock)?.set_aside(reason)
}

impl<'a> Work<'a> {
    fn new(
        folder: &'a DropFolder,
        claimed: &'a Path,
        registry: &'a Registry,
        metrics: &'a Metrics,
        clock: Clock,
    ) -> anyhow::Result<Self> {
        let sha256 = sha256_of(claimed).with_context(|| format!("could not read `{}`", claimed.display()))?;
        let receipt = Receipt {
            file: Claim::of(claimed).original,
            sha256,
            state: FileState::Scored,
            model: folder.model.clone(),
            version: None,
            result: None,
            rows: 0,
            scored: 0,
            repeated: 0,
            refused: 0,
            reason: None,
            repeats: None,
            started: format_time(clock.now()),
            finished: String::new(),
        };
        Ok(Self { folder, claimed, registry, metrics, clock, receipt })
    }

    fn run(mut self, started: i64) -> anyhow::Result<Receipt> {
        let Some(version) = self.registry.live(&self.folder.model) else {
            let reason = format!("no model named `{}` is published", self.folder.model);
            return self.set_aside(reason);
        };
        self.receipt.version = Some(version.fingerprint().to_owned());
        let reader = match self.open(&version) {
            Ok(reader) => reader,
            Err(error) => {
                let reason = self.in_own_words(&error);
                return self.set_aside(reason);
            }
        };
        let claim = Claim::of(self.claimed).mark;
        let start = FileStart {
            model: self.folder.model.clone(),
            sha256: self.receipt.sha256.clone(),
            name: self.receipt.file.clone(),
            claim: claim.clone(),
            result: self.free_result_name(),
            started,
        };
        let mut result = start.result.clone();
        if let Reply::File(Some(known)) = self.registry.ledger().write(Job::BeginFile(start))? {
            if known.claim != claim && (known.finished.is_some() || self.is_claimed(&known.claim)?) {
                self.receipt.repeats = Some(known.name);
                return self.set_repeated_aside();
            }
            // This very file, left by a worker that died: its results get the name they were to have.
            result = known.result;
        }
        self.receipt.result = Some(result.clone());
        match self.score(&version, reader, &result) {
            Ok(()) => {}
            Err(ScoringError::Table(error)) => {
                let reason = self.in_own_words(&error);
                return self.set_aside(reason);
            }
            Err(ScoringError::Other(error)) => return Err(error),
        }
        self.finish()?;
        let job = Job::FinishFile {
            model: self.folder.model.clone(),
            sha256: self.receipt.sha256.clone(),
            finished: self.clock.now(),
        };
        self.registry.ledger().write(job)?;
        fs::remove_file(self.claimed)
            .with_context(|| format!("could not remove `{}`", self.claimed.display()))?;
        Ok(self.receipt)
    }

    fn open(&self, version: &Version) -> Result<TableReader, TableError> {
        // By the name it came under: the claimed name may hide the extension.
        Format::of_path(Path::new(&self.receipt.file))?;
        let columns = version.layout.specs().to_vec();
        TableReader::open(self.claimed, ReadOptions { columns, carry: true, ..ReadOptions::default() })
    }

    /// An error that names the file as it came, not as it was claimed.
    fn in_own_words(&self, error: &TableError) -> String {
        error.to_string().replace(&*self.claimed.to_string_lossy(), &self.receipt.file)
    }

    /// Whether a worker's mark is on a file that is still being worked on.
    fn is_claimed(&self, mark: &str) -> anyhow::Result<bool> {
        Ok(self.folder.files("working")?.iter().any(|path| Claim::of(path).mark == mark))
    }

    /// A name for the results that none in the folder has yet: the file's own, or with a number.
    fn free_result_name(&self) -> String {
        let name = &self.receipt.file;
        let (stem, extension) = name.split_once('.').map_or((name.as_str(), ""), |(stem, rest)| (stem, rest));
        let numbered = |number: u32| match (number, extension) {
            (1, _) => name.clone(),
            (_, "") => format!("{stem}-{number}"),
            _ => format!("{stem}-{number}.{extension}"),
        };
        let taken =
            |name: &String| ["scored", "refused"].iter().any(|sub| self.folder.sub(sub).join(name).exists());
        (1..=u32::MAX).map(numbered).find(|name| !taken(name)).unwrap_or_default()
    }

    fn score(&mut self, version: &Version, reader: TableReader, result: &str) -> Result<(), ScoringError> {
        let scored = self.folder.sub("scored").join(result);
        let refused = self.folder.sub("refused").join(result);
        let table = ScoredTable::new(version, &ScoredContent::default())?;
        let mut writer = TableWriter::create(&scored, &reader, &borrowed(&table.columns()))?;
        let mut refused_writer = TableWriter::create(&refused, &reader, &borrowed(&refused_columns()))?;
        for batch in reader {
            let batch = batch?;
            let records = version.score(&batch.batch);
            let rows: Vec<usize> = records.rows().collect();
            let given_ids = self.given_ids(&batch, &records, &rows);
            self.keep(version, &records, &rows, &given_ids)?;
            writer.write(&batch, &rows, &table.values(&records, &rows, &given_ids))?;
            let refusals = records.refused();
            let refused_rows: Vec<usize> = refusals.iter().map(|refusal| refusal.row).collect();
            refused_writer.write(&batch, &refused_rows, &refused_values(&batch, refusals))?;
            self.count(version, &records, &batch);
        }
        if self.receipt.refused > 0 {
            refused_writer.finish()?;
        }
        writer.finish()?;
        Ok(())
    }

    /// Ids for rows that carry none: from the file's content and the row, so that the same file
    /// gives the same ids again.
    fn given_ids(
        &self,
        batch: &TableBatch,
        records: &ScoredRecords,
        rows: &[usize],
    ) -> BTreeMap<usize, String> {
        let id = |row: usize| format!("{}-{}", &self.receipt.sha256[..16], batch.first_row + row as u64);
        rows.iter().filter(|&&row| records.heads[row].id.is_none()).map(|&row| (row, id(row))).collect()
    }

    fn keep(
        &mut self,
        version: &Version,
        records: &ScoredRecords,
        rows: &[usize],
        given_ids: &BTreeMap<usize, String>,
    ) -> anyhow::Result<()> {
        if rows.is_empty() {
            return Ok(());
        }
        let now = self.clock.now();
        let id = |row: usize| {
            records.heads[row].id.clone().or_else(|| given_ids.get(&row).cloned()).unwrap_or_default()
        };
        let job = Job::Records(Records {
            model: version.model.name.clone(),
            version: version.fingerprint().to_owned(),
            received: now,
            records: rows.iter().map(|&row| records.new_record(row, id(row), now)).collect(),
        });
        if let Reply::Records(repeated) = self.registry.ledger().write(job)? {
            self.receipt.repeated += repeated.into_iter().filter(|repeated| *repeated).count() as u64;
        }
        Ok(())
    }

    fn count(&mut self, version: &Version, records: &ScoredRecords, batch: &TableBatch) {
        let scored = records.rows().count() as u64;
        self.receipt.rows += batch.batch.rows as u64;
        self.receipt.scored += scored;
        self.receipt.refused += records.refused().len() as u64;
        let model = version.model.name.as_str();
        self.metrics.records_scored.with_label_values(&[model, version.fingerprint(), "drop"]).inc_by(scored);
        for refusal in records.refused() {
            self.metrics.records_refused.with_label_values(&[model, refusal_in_a_word(refusal)]).inc();
        }
    }

    /// Sets a file that was scored before aside, whole.
    fn set_repeated_aside(mut self) -> anyhow::Result<Receipt> {
        self.receipt.state = FileState::Repeated;
        self.move_to_refused()
    }

    /// Sets a file aside, whole, with the reason.
    fn set_aside(mut self, reason: String) -> anyhow::Result<Receipt> {
        self.receipt.state = FileState::Refused;
        self.receipt.reason = Some(reason);
        self.move_to_refused()
    }

    fn move_to_refused(mut self) -> anyhow::Result<Receipt> {
        let target = self.folder.sub("refused").join(self.free_result_name());
        self.receipt.result = target.file_name().map(|name| name.to_string_lossy().into_owned());
        self.finish()?;
        fs::rename(self.claimed, &target)
            .and_then(|()| sync_folder(&self.folder.sub("refused")))
            .with_context(|| format!("could not set `{}` aside", self.receipt.file))?;
        Ok(self.receipt)
    }

    /// Writes the receipt.
    fn finish(&mut self) -> anyhow::Result<()> {
        self.receipt.finished = format_time(self.clock.now());
        let path = self.receipt_path();
        let text = serde_json::to_string_pretty(&self.receipt)?;
        write_durably(&path, text.as_bytes())
            .with_context(|| format!("could not write receipt `{}`", path.display()))
    }

    /// The receipt of a scored file is named as its results; that of another as the file.
    fn receipt_path(&self) -> PathBuf {
        let name = match (&self.receipt.result, self.receipt.state) {
            (Some(result), FileState::Scored) => result,
            _ => &self.receipt.file,
        };
        self.folder.sub("receipts").join(format!("{name}.json"))
    }
}

/// Why scoring stopped: the table is to blame, or something else is.
enum ScoringError {
    Table(TableError),
    Other(anyhow::Error),
}

impl From<TableError> for ScoringError {
    fn from(error: TableError) -> Self {
        if error.is_about_input() { Self::Table(error) } else { Self::Other(error.into()) }
    }
}

impl From<anyhow::Error> for ScoringError {
    fn from(error: anyhow::Error) -> Self {
        Self::Other(error)
    }
}
