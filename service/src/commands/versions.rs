//! `kilter versions`, `promote` and `rollback`: which version does what.

use anyhow::Context;
use kilter_ledger::{Act, VersionChange, VersionRow, VersionState};
use kilter_model::cells::format_time;

use super::ledger::{is_version, user};
use super::{open_ledger, open_registry};
use crate::cli::{PromoteArgs, RollbackArgs, VersionsArgs};
use crate::clock::Clock;
use crate::config::Config;
use crate::exit::{Done, WrongUse};
use crate::pages::short_version;
use crate::terminal::say;
use crate::text_table::{Align, Table};

pub(crate) fn list(arguments: &VersionsArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    let ledger = open_ledger(&config)?;
    let versions = versions_of(ledger.versions(None)?, &arguments.name)?;
    let mut table =
        Table::new(&[("version", Align::Left), ("state", Align::Left), ("published", Align::Left)]);
    for version in &versions {
        let state = state_in_words(version.state).to_owned();
        table.row(vec![short_version(&version.fingerprint), state, format_time(version.published_at)]);
    }
    let mut trail = Table::new(&[
        ("when", Align::Left),
        ("who", Align::Left),
        ("what", Align::Left),
        ("live before", Align::Left),
        ("version", Align::Left),
        ("why", Align::Left),
    ]);
    for entry in ledger.audit(&arguments.name)? {
        let short = |version: Option<String>| version.map_or_else(|| "–".into(), |v| short_version(&v));
        let when = format_time(entry.act.at);
        trail.row(vec![when, entry.act.who, entry.what, short(entry.from), short(entry.to), entry.act.why]);
    }
    say(format_args!("{table}\n{trail}"))?;
    Ok(Done::Well)
}

pub(crate) fn promote(arguments: &PromoteArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    let registry = open_registry(&config)?;
    let known = versions_of(registry.ledger().versions(None)?, &arguments.name)?;
    let mut meant = known.iter().filter(|version| is_version(&version.fingerprint, &arguments.version));
    let version = match (meant.next(), meant.next()) {
        (Some(version), None) => version.fingerprint.clone(),
        (None, _) => {
            return Err(WrongUse(format!(
                "no version of `{}` begins with `{}`",
                arguments.name, arguments.version
            ))
            .into());
        }
        _ => {
            return Err(WrongUse(format!("more than one version begins with `{}`", arguments.version)).into());
        }
    };
    change(&registry, &arguments.name, VersionChange::Promote(version), &arguments.why)
}

pub(crate) fn rollback(arguments: &RollbackArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    let registry = open_registry(&config)?;
    versions_of(registry.ledger().versions(None)?, &arguments.name)?;
    change(&registry, &arguments.name, VersionChange::Rollback, &arguments.why)
}

fn change(
    registry: &crate::registry::Registry,
    model: &str,
    change: VersionChange,
    why: &str,
) -> anyhow::Result<Done> {
    let act = Act { at: Clock::System.now(), who: user(), why: why.to_owned() };
    let now = registry.change(model, change, act).with_context(|| format!("versions of `{model}`"))?;
    say(format_args!("{model} {} is {}", now.fingerprint, state_in_words(now.state)))?;
    Ok(Done::Well)
}

fn versions_of(rows: Vec<VersionRow>, model: &str) -> anyhow::Result<Vec<VersionRow>> {
    let own: Vec<VersionRow> = rows.into_iter().filter(|row| row.model == model).collect();
    if own.is_empty() {
        return Err(WrongUse(format!("no model named `{model}` was ever published here")).into());
    }
    Ok(own)
}

fn state_in_words(state: VersionState) -> &'static str {
    match state {
        VersionState::Live => "live",
        VersionState::Shadow => "shadow",
        VersionState::Retired => "retired",
    }
}
