//! `kilter ledger`: looks after the ledger.

mod export;

pub(super) use export::is_version;

use std::path::Path;

use kilter_ledger::{Act, Job, LedgerUrl, Reply, Stream, restore};

use super::{ledger_url, open_ledger};
use crate::cli::{
    LedgerArgs, LedgerBackupArgs, LedgerCommand, LedgerDeleteArgs, LedgerPruneArgs, LedgerRestoreArgs,
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
    for difference in &differences {
        let stream = match &difference.stream {
            Stream::All => String::new(),
            Stream::Segment { field, value } => format!(", {field} {value}"),
        };
        let (version, day) = (&difference.version, date(difference.day));
        say(format_args!("{version}, {day}{stream}: {}", difference.reason))?;
    }
    if differences.is_empty() {
        say("the summaries are what the records give")?;
    }
    Ok(Done::found(!differences.is_empty()))
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
