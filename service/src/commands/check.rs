//! `kilter check`: whether model files agree with schema, arithmetic, fingerprint and signature.

use std::path::Path;

use kilter_model::{ModelFile, ModelFileError, verify_signature};

use super::{read_key, read_text};
use crate::cli::CheckArgs;
use crate::exit::Done;
use crate::terminal::say;

pub(crate) fn run(arguments: &CheckArgs) -> anyhow::Result<Done> {
    let key = arguments.key.as_deref().map(read_key).transpose()?;
    let mut bad = false;
    for path in &arguments.models {
        let faults = faults_of(path, key.as_ref())?;
        bad |= faults.is_err();
        match faults {
            Ok(words) => say(format_args!("{}: sound, {words}", path.display()))?,
            Err(faults) => {
                for fault in faults {
                    say(format_args!("{}: {fault}", path.display()))?;
                }
            }
        }
    }
    Ok(Done::found(bad))
}

/// What the file is, or its faults.
fn faults_of(path: &Path, key: Option<&[u8; 32]>) -> anyhow::Result<Result<String, Vec<String>>> {
    let text = read_text(path)?;
    let model = match ModelFile::from_json(&text) {
        Ok(model) => model,
        Err(ModelFileError::Faults(faults)) => {
            return Ok(Err(faults.iter().map(ToString::to_string).collect()));
        }
        Err(error) => return Ok(Err(vec![error.to_string()])),
    };
    let words = format!("{} {}", model.name, model.fingerprint);
    let Some(key) = key else { return Ok(Ok(words)) };
    Ok(match verify_signature(&serde_json::from_str(&text)?, key) {
        Ok(()) => Ok(format!("{words}, signed with the key")),
        Err(reason) => Err(vec![reason.to_string()]),
    })
}
