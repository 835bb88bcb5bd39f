//! `kilter ledger`: looks after the ledger.

mod export;

pub(super) use export::is_version;

use std::path::Path;

use kilter_ledger::{Act, Job, LedgerUrl, Reply, Stream, VerifyDifference, move_from_sqlite, restore};

use super::{ledger_url, open_ledger};
use crate::cli::{
    LedgerArgs, LedgerBackupArgs, LedgerCommand, LedgerDeleteArgs, LedgerMoveArgs, LedgerPruneArgs,
    LedgerRestoreArgs,
};
use crate::clock::Clock;
use crate::config::Config;
use crate::exit::{Done, Hint, WrongUse};
use crate::monitor::date;
use crate::numbers::whole;
use crate::retention::first_day_kept;
use crate::terminal::say;

pub(crate) fn run(arguments: &LedgerArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    match &arguments.command {
        LedgerCommand::Verify => verify(&config),
        LedgerCommand::Backup(own) => backup(&config, own),
        LedgerCommand::Restore(own) => restore_copy(&config, own),
        LedgerCommand::Move(own) => move_ledger(&config, own),
        LedgerCommand::Prune(own) => prune(&config, own),
        LedgerCommand::Export(own) => export::run(&config, own),
        LedgerCommand::Delete(own) => delete(&config, own),
    }
}

/// Who acts on the command line, for the audit trail.
pub(crate) fn user() -> String {
    std::env::var("USER").unwrap_or_else(|_| "command line".into())
}

fn verify(config: &Config) -> anyhow::Result<Done> {
    let differences = open_ledger(config)?.verify()?;
    tell_differences(&differences)?;
    if differences.is_empty() {
        say("the summaries are what the records give")?;
    }
    Ok(Done::found(!differences.is_empty()))
}

fn tell_differences(differences: &[VerifyDifference]) -> std::io::Result<()> {
    for difference in differences {
        let stream = match &difference.stream {
            Stream::All => String::new(),
            Stream::Segment { field, value } => format!(", {field} {value}"),
        };
        let (version, day) = (&difference.version, date(difference.day));
        say(format_args!("{version}, {day}{stream}: {}", difference.reason))?;
    }
    Ok(())
}

fn backup(config: &Config, arguments: &LedgerBackupArgs) -> anyhow::Result<Done> {
    open_ledger(config)?.backup(&arguments.output)?;
    say(format_args!("copied to {}", arguments.output.display()))?;
    Ok(Done::Well)
}

fn restore_copy(config: &Config, arguments: &LedgerRestoreArgs) -> anyhow::Result<Done> {
    let LedgerUrl::Sqlite(path) = ledger_url(config)? else {
        return Err(kilter_ledger::LedgerError::CopiedOtherwise.into());
    };
    restore(&arguments.copy, &path)?;
    say(format_args!("restored to {}", path.display()))?;
    Ok(Done::Well)
}

/// Moves the ledger of the configuration to a PostgreSQL data base; the file stays as it is.
fn move_ledger(config: &Config, arguments: &LedgerMoveArgs) -> anyhow::Result<Done> {
    let LedgerUrl::Sqlite(from) = ledger_url(config)? else {
        return Err(WrongUse("the ledger of this configuration is in PostgreSQL already".into()).into());
    };
    let to = LedgerUrl::parse(&arguments.to, &config.base).map_err(|error| WrongUse(error.to_string()))?;
    let LedgerUrl::Postgres(address) = to else {
        return Err(
            WrongUse("a ledger moves to an address such as `postgres://user@host/name`".into()).into()
        );
    };
    let moved = move_from_sqlite(&from, &address)?;
    say(format_args!(
        "moved {} records, {} outcomes, {} versions and {} summaries; now set `url` under [ledger]",
        whole(moved.records as f64),
        whole(moved.outcomes as f64),
        moved.versions,
        whole(moved.summaries as f64),
    ))?;
    tell_differences(&moved.differences)?;
    Ok(Done::found(!moved.differences.is_empty()))
}

fn prune(config: &Config, arguments: &LedgerPruneArgs) -> anyhow::Result<Done> {
    let kept = match &arguments.keep {
        Some(text) => {
            crate::duration::parse(text).map_err(|reason| WrongUse(format!("`--keep`: {reason}")))?
        }
        None => config.ledger.keep.map(|span| span.0).ok_or_else(|| {
            let refusal = WrongUse("nothing says how long raw records are kept".into());
            anyhow::Error::new(Hint("set `keep` under [ledger], or give --keep".into())).context(refusal)
        })?,
    };
    let before = first_day_kept(Clock::System.now(), kept);
    let pruned = open_ledger(config)?.prune(before)?;
    say(format_args!(
        "removed {} records and {} outcomes of days before {}; summaries stay",
        whole(pruned.records as f64),
        whole(pruned.outcomes as f64),
        date(before)
    ))?;
    Ok(Done::Well)
}

fn delete(config: &Config, arguments: &LedgerDeleteArgs) -> anyhow::Result<Done> {
    let act = Act { at: Clock::System.now(), who: user(), why: arguments.why.clone() };
    let ids = ids_of(arguments)?;
    let job = Job::Delete { model: arguments.name.clone(), ids: ids.clone(), act };
    let Reply::Deleted(deleted) = open_ledger(config)?.write(job)? else {
        anyhow::bail!("the ledger gave no answer to the deletion");
    };
    let missing: Vec<&str> =
        ids.iter().zip(&deleted).filter(|(_, there)| !**there).map(|(id, _)| id.as_str()).collect();
    say(format_args!("deleted {} of {} ids", ids.len() - missing.len(), ids.len()))?;
    for id in &missing {
        eprintln!("nothing is known under id {id}");
    }
    Ok(Done::found(!missing.is_empty()))
}

/// The ids that are given, or those in a file, one per line.
fn ids_of(arguments: &LedgerDeleteArgs) -> anyhow::Result<Vec<String>> {
    let mut ids = arguments.ids.clone();
    if let Some(path) = &arguments.ids_from {
        ids.extend(read_lines(path)?);
    }
    if ids.is_empty() {
        return Err(WrongUse("no ids: name them, or give a file with --ids-from".into()).into());
    }
    Ok(ids)
}

fn read_lines(path: &Path) -> anyhow::Result<Vec<String>> {
    let text = std::fs::read_to_string(path)
        .map_err(|error| WrongUse(format!("could not read `{}`: {error}", path.display())))?;
    Ok(text.lines().map(str::trim).filter(|line| !line.is_empty()).map(str::to_owned).collect())
}
