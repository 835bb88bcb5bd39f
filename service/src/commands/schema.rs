//! `kilter schema`: prints a JSON Schema.

use crate::cli::{SchemaArgs, SchemaOf};
use crate::config::Config;
use crate::exit::Done;
use crate::terminal::say;

pub(crate) fn run(arguments: &SchemaArgs) -> anyhow::Result<Done> {
    let schema = match arguments.of {
        SchemaOf::Model => kilter_model::schema(),
        SchemaOf::Plan => kilter_fit::plan_schema(),
        SchemaOf::Config => schemars::schema_for!(Config).to_value(),
    };
    say(serde_json::to_string_pretty(&schema)?)?;
    Ok(Done::Well)
}
