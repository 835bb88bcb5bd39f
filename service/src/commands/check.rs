//! `kilter check`: whether model files agree with schema, arithmetic and fingerprint.

use anyhow::Context;
use kilter_model::{ModelFile, ModelFileError};

use crate::cli::CheckArgs;
use crate::exit::Done;
use crate::terminal::say;

pub(crate) fn run(arguments: &CheckArgs) -> anyhow::Result<Done> {
    let mut bad = false;
    for path in &arguments.models {
        let text = std::fs::read_to_string(path)
            .with_context(|| format!("could not read model file `{}`", path.display()))?;
        match ModelFile::from_json(&text) {
            Ok(model) => {
                say(format_args!("{}: sound, {} {}", path.display(), model.name, model.fingerprint))?;
            }
            Err(ModelFileError::Faults(faults)) => {
                bad = true;
                for fault in faults {
                    say(format_args!("{}: {fault}", path.display()))?;
                }
            }
            Err(error) => {
                bad = true;
                say(format_args!("{}: {error}", path.display()))?;
            }
        }
    }
    Ok(Done::found(bad))
}
