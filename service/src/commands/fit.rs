//! `kilter fit`: fits a plan and writes a model file.

use std::io::IsTerminal;
use std::path::Path;

use anyhow::Context;
use kilter_fit::{FitSettings, Fitted, Plan, Progress, fit};

use crate::cli::FitArgs;
use crate::durable::write_durably;
use crate::exit::{Done, Hint, WrongUse};
use crate::terminal::say;
use crate::training::{TrainingRows, complete};

/// Refused rows that are told on standard error.
const MOST_TOLD: usize = 10;

pub(crate) fn run(arguments: &FitArgs) -> anyhow::Result<Done> {
    let plan = read_plan(&arguments.plan)?;
    let folder = arguments.plan.parent().filter(|folder| *folder != Path::new("")).unwrap_or(Path::new("."));
    let output = arguments.output.clone().unwrap_or_else(|| folder.join(format!("{}.model.json", plan.name)));
    let mut rows = TrainingRows::open(&plan, folder)?;
    let mut fitted = fit(&plan, &mut rows, FitSettings::default(), &mut |progress| tell(&progress))?;
    end_progress();
    complete(&plan, &mut rows, &mut fitted)?;
    write_model(&fitted, &output)?;
    tell_result(&fitted, &output)?;
    Ok(Done::found(fitted.refused_rows > 0))
}

/// Reads a plan; what is wrong with it is found before anything is touched.
fn read_plan(path: &Path) -> anyhow::Result<Plan> {
    let text = std::fs::read_to_string(path)
        .map_err(|error| WrongUse(format!("could not read plan `{}`: {error}", path.display())))?;
    Plan::from_toml(&text).map_err(|error| {
        let refusal = WrongUse(format!("plan `{}`: {error}", path.display()));
        match &error.hint {
            Some(hint) => anyhow::Error::new(Hint(hint.clone())).context(refusal),
            None => refusal.into(),
        }
    })
}

fn write_model(fitted: &Fitted, output: &Path) -> anyhow::Result<()> {
    let mut model = fitted.model.clone();
    model.seal()?;
    write_durably(output, model.to_json()?.as_bytes())
        .with_context(|| format!("could not write model file `{}`", output.display()))
}

/// On a terminal one line that is written over, elsewhere a line per step.
fn tell(progress: &Progress) {
    let line = match progress {
        Progress::Surveying { rows } => format!("reading: {rows} rows"),
        Progress::Step { number, log_likelihood, decrement } => {
            format!(
                "step {number}: log-likelihood {log_likelihood:.6}, {decrement:.1e} standard errors to go"
            )
        }
        _ => return,
    };
    if std::io::stderr().is_terminal() {
        eprint!("\r\u{1b}[2K{line}");
    } else if matches!(progress, Progress::Step { .. }) {
        eprintln!("{line}");
    }
}

fn end_progress() {
    if std::io::stderr().is_terminal() {
        eprint!("\r\u{1b}[2K");
    }
}

fn tell_result(fitted: &Fitted, output: &Path) -> std::io::Result<()> {
    for refused in fitted.refused.iter().take(MOST_TOLD) {
        let field = if refused.field.is_empty() { String::new() } else { format!("`{}` ", refused.field) };
        eprintln!("row {}: {field}{}", refused.row + 1, refused.reason);
    }
    if fitted.refused_rows > 0 {
        eprintln!("{} of {} rows were refused", fitted.refused_rows, fitted.rows_read);
    }
    for warning in &fitted.warnings {
        eprintln!("warning: {warning}");
    }
    if let Some(fit) = &fitted.model.fit {
        say(format_args!(
            "{}: log-likelihood {:.4} on {} rows, {} steps; written to {}",
            fitted.model.name,
            fit.log_likelihood,
            fit.rows,
            fit.iterations,
            output.display()
        ))?;
    }
    Ok(())
}
