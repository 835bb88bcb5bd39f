//! `kilter drift`: the drift report of a model.

use crate::cli::DriftArgs;
use crate::clock::Clock;
use crate::commands::{live_version, open_registry};
use crate::config::Config;
use crate::drift_text;
use crate::exit::{Done, WrongUse};
use crate::monitor::{Question, Span, drift};
use crate::terminal::say;

pub(crate) fn run(arguments: &DriftArgs) -> anyhow::Result<Done> {
    let span = Span::parse(arguments.from.as_deref(), arguments.to.as_deref())
        .map_err(|(name, reason)| WrongUse(format!("`--{name}`: {reason}")))?;
    let config = Config::read(&arguments.config.config)?;
    let registry = open_registry(&config)?;
    let version = live_version(&registry, &arguments.name)?;
    let segments = &version.model.monitor.segments;
    if let Some(by) = arguments.by.as_ref().filter(|by| !segments.contains(by)) {
        let known = segments.join("`, `");
        return Err(
            WrongUse(format!("`--by`: `{by}` is no segment field of the model; it has `{known}`")).into()
        );
    }
    let now = Clock::System.now();
    let question = Question { model: &version.model, span, by: arguments.by.as_deref(), now };
    let report = drift(registry.ledger(), &question)?;
    if arguments.json {
        say(serde_json::to_string_pretty(&report)?)?;
    } else {
        say(drift_text::report(&report))?;
    }
    Ok(Done::Well)
}
