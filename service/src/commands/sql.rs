//! `kilter sql`: the probabilities as standard SQL.

use anyhow::Context;
use kilter_model::{sql, sql_query};

use super::read_model;
use crate::cli::SqlArgs;
use crate::exit::Done;
use crate::terminal::say;

pub(crate) fn run(arguments: &SqlArgs) -> anyhow::Result<Done> {
    let model = read_model(&arguments.model)?;
    let text = match &arguments.from {
        Some(table) => sql_query(&model, table),
        None => sql(&model),
    };
    say(text.with_context(|| format!("model `{}` has no SQL", model.name))?)?;
    Ok(Done::Well)
}
