//! `kilter publish`: makes a model file a version of its name.

use kilter_ledger::VersionState;

use crate::cli::{PublishArgs, Role};
use crate::clock::Clock;
use crate::commands::ledger::user;
use crate::commands::{open_registry, read_version};
use crate::config::Config;
use crate::exit::Done;
use crate::terminal::say;

pub(crate) fn run(arguments: &PublishArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config.config)?;
    let version = read_version(&arguments.model)?;
    let registry = open_registry(&config)?;
    let state = match arguments.role {
        Role::Live => VersionState::Live,
        Role::Shadow => VersionState::Shadow,
    };
    registry.publish(&version, state, &user(), Clock::System.now())?;
    let role = if state == VersionState::Live { "live" } else { "shadow" };
    say(format_args!("{} {} is {role}", version.model.name, version.fingerprint()))?;
    Ok(Done::Well)
}
