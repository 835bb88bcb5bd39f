//! `kilter sweep`: scores what lies in the drop folders once, and ends.

use crate::cli::ConfigArgs;
use crate::clock::Clock;
use crate::commands::open_registry;
use crate::config::Config;
use crate::drop_folder::DropFolder;
use crate::exit::{Done, WrongUse};
use crate::metrics::Metrics;
use crate::terminal::say;

pub(crate) fn run(arguments: &ConfigArgs) -> anyhow::Result<Done> {
    let config = Config::read(&arguments.config)?;
    if config.drop.is_empty() {
        let path = arguments.config.display();
        return Err(WrongUse(format!("configuration `{path}` names no drop folder; add a [[drop]]")).into());
    }
    let registry = open_registry(&config)?;
    let metrics = Metrics::new()?;
    let mut findings = false;
    for drop in &config.drop {
        let folder = DropFolder::new(drop, config.resolve(&drop.folder));
        let swept = folder.sweep(&registry, &metrics, Clock::System)?;
        say(format_args!(
            "{}: {} files, {} of them not scored; {} rows scored, {} refused",
            drop.model, swept.files, swept.not_scored, swept.scored_rows, swept.refused_rows
        ))?;
        findings |= swept.not_scored > 0 || swept.refused_rows > 0;
    }
    Ok(Done::found(findings))
}
