//! `kilter sign`: signs model files, and makes the key for it.

use std::fs::OpenOptions;
use std::io::Write;
use std::os::unix::fs::OpenOptionsExt;
use std::path::Path;

use anyhow::Context;
use kilter_model::fingerprint::hexadecimal;
use kilter_model::{public_key, sign};
use rand::TryRng;
use rand::rngs::SysRng;

use super::{read_key, read_model};
use crate::cli::SignArgs;
use crate::durable::write_durably;
use crate::exit::{Done, WrongUse};
use crate::terminal::say;

pub(crate) fn run(arguments: &SignArgs) -> anyhow::Result<Done> {
    if arguments.new_key {
        if !arguments.models.is_empty() {
            return Err(WrongUse(
                "--new-key makes a key and signs nothing: leave the model files out".into(),
            )
            .into());
        }
        make_key(&arguments.key)?;
        return Ok(Done::Well);
    }
    if arguments.models.is_empty() {
        return Err(WrongUse("no model file to sign".into()).into());
    }
    let secret = read_key(&arguments.key)?;
    for path in &arguments.models {
        let mut model = read_model(path)?;
        sign(&mut model, &secret)?;
        write_durably(path, model.to_json()?.as_bytes())
            .with_context(|| format!("could not write model file `{}`", path.display()))?;
        say(format_args!("{}: signed, {} {}", path.display(), model.name, model.fingerprint))?;
    }
    Ok(Done::Well)
}

/// Writes a new secret key that only its owner can read, and the public key beside it.
fn make_key(path: &Path) -> anyhow::Result<()> {
    let mut secret = [0; 32];
    SysRng.try_fill_bytes(&mut secret).context("the system gives no random numbers")?;
    // A key is never written over: what it signed could not be renewed.
    OpenOptions::new()
        .write(true)
        .create_new(true)
        .mode(0o600)
        .open(path)
        .and_then(|mut file| {
            writeln!(file, "{}", hexadecimal(&secret))?;
            file.sync_all()
        })
        .with_context(|| format!("could not write key file `{}`", path.display()))?;
    let mut public_path = path.as_os_str().to_owned();
    public_path.push(".public");
    let public = hexadecimal(&public_key(&secret));
    write_durably(Path::new(&public_path), format!("{public}\n").as_bytes())
        .with_context(|| format!("could not write key file `{}`", Path::new(&public_path).display()))?;
    say(format_args!(
        "secret key in {}, keep it to yourself; public key in {}: {public}",
        path.display(),
        Path::new(&public_path).display()
    ))?;
    Ok(())
}
