//! One module per command.

pub(crate) mod check;
pub(crate) mod contrast;
pub(crate) mod demo;
pub(crate) mod drift;
pub(crate) mod fit;
pub(crate) mod ledger;
pub(crate) mod observe;
pub(crate) mod publish;
pub(crate) mod schema;
pub(crate) mod score;
pub(crate) mod serve;
pub(crate) mod show;
pub(crate) mod sign;
pub(crate) mod sql;
pub(crate) mod sweep;
pub(crate) mod versions;

use std::path::Path;

use anyhow::Context;
use kilter_ledger::{Ledger, LedgerUrl, Settings};
use kilter_model::ModelFile;

use crate::config::Config;
use crate::exit::{Hint, WrongUse};
use crate::registry::Registry;
use crate::scoring::Version;

/// Reads a model file from disk, checked.
fn read_model(path: &Path) -> anyhow::Result<ModelFile> {
    let text = read_text(path)?;
    ModelFile::from_json(&text).with_context(|| format!("model file `{}` cannot be used", path.display()))
}

/// Reads a model file from disk, ready to score.
fn read_version(path: &Path) -> anyhow::Result<Version> {
    let text = read_text(path)?;
    Version::new(text).with_context(|| format!("model file `{}` cannot be used", path.display()))
}

fn read_text(path: &Path) -> anyhow::Result<String> {
    let read = || kilter_model::read_limited(std::fs::File::open(path)?);
    read().with_context(|| format!("could not read model file `{}`", path.display()))
}

/// Reads a key of 64 hexadecimal digits from a file.
fn read_key(path: &Path) -> anyhow::Result<[u8; 32]> {
    let wrong = |reason: String| WrongUse(format!("key file `{}`: {reason}", path.display()));
    let text = std::fs::read_to_string(path).map_err(|error| wrong(error.to_string()))?;
    Ok(kilter_model::key_from_hexadecimal(&text).map_err(|error| wrong(error.to_string()))?)
}

/// Opens the ledger of a configuration.
fn open_ledger(config: &Config) -> anyhow::Result<Ledger> {
    let url = ledger_url(config)?;
    Ok(Ledger::open(&url, Settings::default())?)
}

/// The address of the ledger, read before anything is touched.
fn ledger_url(config: &Config) -> anyhow::Result<LedgerUrl> {
    LedgerUrl::parse(&config.ledger.url, &config.base)
        .map_err(|error| anyhow::Error::new(WrongUse(format!("`ledger.url`: {error}"))))
}

/// Opens ledger and live versions of a configuration.
pub(crate) fn open_registry(config: &Config) -> anyhow::Result<Registry> {
    Registry::open(open_ledger(config)?, config.resolve(&config.models.folder))
}

/// The live version of a model that a command names.
fn live_version(registry: &Registry, name: &str) -> anyhow::Result<std::sync::Arc<Version>> {
    registry.live(name).ok_or_else(|| {
        let names: Vec<String> =
            registry.all_live().iter().map(|version| version.model.name.clone()).collect();
        let hint = match kilter_model::near_miss(name, &names) {
            Some(near) => format!("did you mean `{near}`?"),
            None if names.is_empty() => "no model is published; `kilter publish MODEL` does it".into(),
            None => format!("published are `{}`", names.join("`, `")),
        };
        anyhow::Error::new(Hint(hint)).context(format!("no model named `{name}` is published"))
    })
}
