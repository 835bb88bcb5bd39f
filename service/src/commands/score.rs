//! `kilter score`: scores a file in bounded memory.

use std::collections::BTreeMap;
use std::io;
use std::path::Path;

use anyhow::Context;
use kilter_tables::{Format, ReadOptions, TableReader, TableWriter};

use crate::cli::ScoreArgs;
use crate::commands::read_version;
use crate::exit::Done;
use crate::scoring::Version;
use crate::tables::{borrowed, refused_columns, refused_values, scored_columns, scored_values};

/// Refused rows that are told on standard error where no file was asked for.
const MOST_TOLD: u64 = 10;

pub(crate) fn run(arguments: &ScoreArgs) -> anyhow::Result<Done> {
    let version = read_version(&arguments.model)?;
    let options =
        ReadOptions { columns: version.layout.specs().to_vec(), carry: true, ..ReadOptions::default() };
    let reader = if arguments.input == Path::new("-") {
        TableReader::from_stream(Box::new(io::stdin()), Format::Csv, options)?
    } else {
        TableReader::open(&arguments.input, options)?
    };
    let scored = scored_columns(&version);
    let writer = match &arguments.output {
        Some(path) if path != Path::new("-") => TableWriter::create(path, &reader, &borrowed(&scored))?,
        _ => TableWriter::to_stream(Box::new(io::stdout()), Format::Csv, &reader, &borrowed(&scored))?,
    };
    let refused = match &arguments.refused {
        Some(path) => Some(TableWriter::create(path, &reader, &borrowed(&refused_columns()))?),
        None => None,
    };
    let counts = score_all(&version, reader, writer, refused)?;
    if counts.refused > 0 {
        let place = match &arguments.refused {
            Some(path) => format!("see `{}`", path.display()),
            None => "--refused FILE keeps them".into(),
        };
        eprintln!("{} of {} rows were refused; {place}", counts.refused, counts.rows);
    }
    Ok(Done::found(counts.refused > 0))
}

/// Rows that were read and refused.
#[derive(Debug, Default)]
struct Counts {
    rows: u64,
    refused: u64,
}

fn score_all(
    version: &Version,
    reader: TableReader,
    mut writer: TableWriter,
    mut refused: Option<TableWriter>,
) -> anyhow::Result<Counts> {
    let mut counts = Counts::default();
    for batch in reader {
        let batch = batch?;
        let records = version.score(&batch.batch);
        let rows: Vec<usize> = records.rows().collect();
        writer
            .write(&batch, &rows, &scored_values(version, &records, &rows, &BTreeMap::new()))
            .context("could not write the scored table")?;
        let refusals = records.refused();
        match &mut refused {
            Some(writer) => {
                let rows: Vec<usize> = refusals.iter().map(|refusal| refusal.row).collect();
                writer
                    .write(&batch, &rows, &refused_values(&batch, refusals))
                    .context("could not write the refused rows")?;
            }
            None => {
                for refusal in refusals.iter().take(MOST_TOLD.saturating_sub(counts.refused) as usize) {
                    let field = if refusal.field.is_empty() {
                        String::new()
                    } else {
                        format!("`{}` ", refusal.field)
                    };
                    eprintln!("line {}: {field}{}", batch.line(refusal.row), refusal.reason);
                }
            }
        }
        counts.rows += batch.batch.rows as u64;
        counts.refused += refusals.len() as u64;
    }
    // The refused rows first: where they cannot be kept, nothing appears as done.
    if let Some(refused) = refused {
        refused.finish()?;
    }
    writer.finish()?;
    Ok(counts)
}
