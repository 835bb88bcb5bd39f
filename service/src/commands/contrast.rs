//! `kilter contrast`: any two categories compared.

use kilter_fit::inference::{Estimate, contrast};
use serde_json::json;

use super::show::{LEVEL, estimate_as_json, estimates_as_table};
use crate::cli::ContrastArgs;
use crate::commands::read_model;
use crate::exit::{Done, WrongUse};
use crate::terminal::say;

pub(crate) fn run(arguments: &ContrastArgs) -> anyhow::Result<Done> {
    let model = read_model(&arguments.model)?;
    let (category, against) = (&arguments.category, &arguments.against);
    for name in [category, against] {
        if !model.outcome.categories.contains(name) {
            let known = model.outcome.categories.join("`, `");
            return Err(WrongUse(format!("`{name}` is no category of the model; it has `{known}`")).into());
        }
    }
    if category == against {
        return Err(WrongUse(format!("`{category}` cannot be compared with itself")).into());
    }
    let estimates = contrast(&model, category, against, LEVEL)?;
    if arguments.json {
        let terms: Vec<_> = estimates.iter().map(estimate_as_json).collect();
        let document = json!({ "category": category, "against": against, "terms": terms });
        say(serde_json::to_string_pretty(&document)?)?;
    } else {
        say(format_args!("{category} against {against}"))?;
        say(estimates_as_table(&estimates.iter().collect::<Vec<&Estimate>>()))?;
    }
    Ok(Done::Well)
}
