//! `kilter score`: scores a file in bounded memory.

use std::collections::BTreeMap;
use std::io;
use std::path::Path;
use std::sync::mpsc::{Receiver, sync_channel};

use anyhow::Context;
use kilter_tables::{Appended, Format, ReadOptions, TableBatch, TableError, TableReader, TableWriter};

use crate::cli::ScoreArgs;
use crate::commands::read_version;
use crate::exit::{Done, WrongUse};
use crate::scoring::Version;
use crate::tables::{ScoredContent, ScoredTable, borrowed, refused_columns, refused_values};

/// Refused rows that are told on standard error where no file was asked for.
const MOST_TOLD: u64 = 10;
/// Scored batches that wait to be written.
const BATCHES_WAITING: usize = 2;

pub(crate) fn run(arguments: &ScoreArgs) -> anyhow::Result<Done> {
    let version = read_version(&arguments.model)?;
    let table =
        ScoredTable::new(&version, &content(arguments)?).map_err(|error| WrongUse(error.to_string()))?;
    let options =
        ReadOptions { columns: version.layout.specs().to_vec(), carry: true, ..ReadOptions::default() };
    let reader = if arguments.input == Path::new("-") {
        TableReader::from_stream(Box::new(io::stdin()), Format::Csv, options)?
    } else {
        TableReader::open(&arguments.input, options)?
    };
    let columns = table.columns();
    let writer = match &arguments.output {
        Some(path) if path != Path::new("-") => TableWriter::create(path, &reader, &borrowed(&columns))?,
        _ => TableWriter::to_stream(Box::new(io::stdout()), Format::Csv, &reader, &borrowed(&columns))?,
    };
    let refused = match &arguments.refused {
        Some(path) => Some(TableWriter::create(path, &reader, &borrowed(&refused_columns()))?),
        None => None,
    };
    let counts = score_all(&version, &table, reader, writer, refused)?;
    if counts.refused > 0 {
        let place = match &arguments.refused {
            Some(path) => format!("see `{}`", path.display()),
            None => "--refused FILE keeps them".into(),
        };
        eprintln!("{} of {} rows were refused; {place}", counts.refused, counts.rows);
    }
    Ok(Done::found(counts.refused > 0))
}

fn content(arguments: &ScoreArgs) -> Result<ScoredContent, WrongUse> {
    let pair = |text: &String| match text.split_once(',') {
        Some((category, against)) => Ok([category.trim().to_owned(), against.trim().to_owned()]),
        None => Err(WrongUse(format!("`--explain {text}`: expected two categories with a comma between"))),
    };
    let explain = arguments.explain.as_ref().map(pair).transpose()?;
    Ok(ScoredContent { intervals: arguments.intervals, explain, top_only: arguments.top_only })
}

/// Rows that were read and refused.
#[derive(Debug, Default)]
struct Counts {
    rows: u64,
    refused: u64,
}

/// Rows of a batch to be written, with the columns that are appended to them.
struct ToWrite {
    batch: TableBatch,
    scored: (Vec<usize>, Vec<Appended>),
    refused: (Vec<usize>, Vec<Appended>),
}

/// Scores batch after batch while the one before is written and the next one is read.
fn score_all(
    version: &Version,
    table: &ScoredTable,
    reader: TableReader,
    writer: TableWriter,
    refused: Option<TableWriter>,
) -> anyhow::Result<Counts> {
    let telling = refused.is_none();
    std::thread::scope(|threads| {
        let (to_write, batches) = sync_channel(BATCHES_WAITING);
        let writing = threads.spawn(move || write_all(&batches, writer, refused));
        let mut counts = Counts::default();
        let mut failed = None;
        for batch in reader {
            match batch {
                Ok(batch) => {
                    let scored = score(version, table, batch, &mut counts, telling);
                    // Where the writer has ended, it says itself why.
                    if to_write.send(Some(scored)).is_err() {
                        break;
                    }
                }
                Err(error) => {
                    failed = Some(error);
                    break;
                }
            }
        }
        if failed.is_none() {
            // The end of the table: without it nothing appears.
            let _ = to_write.send(None);
        }
        drop(to_write);
        let written = writing.join().map_err(|_| anyhow::anyhow!("the writer failed"))?;
        match failed {
            Some(error) => Err(error.into()),
            None => written.map(|()| counts),
        }
    })
}

fn score(
    version: &Version,
    table: &ScoredTable,
    batch: TableBatch,
    counts: &mut Counts,
    telling: bool,
) -> ToWrite {
    let records = version.score(&batch.batch);
    let rows: Vec<usize> = records.rows().collect();
    let values = table.values(&records, &rows, &BTreeMap::new());
    let refusals = records.refused();
    if telling {
        for refusal in refusals.iter().take(MOST_TOLD.saturating_sub(counts.refused) as usize) {
            let field =
                if refusal.field.is_empty() { String::new() } else { format!("`{}` ", refusal.field) };
            eprintln!("line {}: {field}{}", batch.line(refusal.row), refusal.reason);
        }
    }
    counts.rows += batch.batch.rows as u64;
    counts.refused += refusals.len() as u64;
    let refused = (refusals.iter().map(|refusal| refusal.row).collect(), refused_values(&batch, refusals));
    ToWrite { batch, scored: (rows, values), refused }
}

/// Writes batches until the end of the table comes. Where it does not come, nothing appears.
fn write_all(
    batches: &Receiver<Option<ToWrite>>,
    mut writer: TableWriter,
    mut refused: Option<TableWriter>,
) -> anyhow::Result<()> {
    // A channel that closes before the end of the table comes: reading has failed.
    while let Ok(part) = batches.recv() {
        let Some(ToWrite { batch, scored, refused: refusals }) = part else {
            return finish(writer, refused).map_err(Into::into);
        };
        writer.write(&batch, &scored.0, &scored.1).context("could not write the scored table")?;
        if let Some(refused) = &mut refused {
            refused.write(&batch, &refusals.0, &refusals.1).context("could not write the refused rows")?;
        }
    }
    Ok(())
}

/// The refused rows first: where they cannot be kept, nothing appears as done.
fn finish(writer: TableWriter, refused: Option<TableWriter>) -> Result<(), TableError> {
    if let Some(refused) = refused {
        refused.finish()?;
    }
    writer.finish()
}
