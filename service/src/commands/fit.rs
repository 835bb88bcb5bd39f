//! `kilter fit`: fits a plan and writes a model file.

use std::path::Path;

use anyhow::Context;
use kilter_fit::{FitSettings, Fitted, Plan, Session};

use crate::analysis::{FitAnalysis, as_text};
use crate::cli::FitArgs;
use crate::durable::write_durably;
use crate::exit::{Done, Hint, WrongUse};
use crate::progress::FitProgress;
use crate::report::{FitReport, fit_report};
use crate::terminal::say;
use crate::training::{TrainingRows, complete};

/// Refused rows that are told on standard error.
const MOST_TOLD: usize = 10;

pub(crate) fn run(arguments: &FitArgs) -> anyhow::Result<Done> {
    let analysing = arguments.report.is_some() || arguments.analysis.is_some();
    if arguments.diagnose && !analysing {
        return Err(WrongUse(
            "--diagnose goes into a report or an analysis: add --report or --analysis".into(),
        )
        .into());
    }
    let plan = read_plan(&arguments.plan)?;
    let folder = arguments.plan.parent().filter(|folder| *folder != Path::new("")).unwrap_or(Path::new("."));
    let output = arguments.output.clone().unwrap_or_else(|| folder.join(format!("{}.model.json", plan.name)));
    let mut rows = TrainingRows::open(&plan, folder)?;
    let mut progress = FitProgress::new();
    let (mut fitted, analysis) = {
        let mut show = |step| progress.show(&step);
        let session = Session::open(&plan, &mut rows, FitSettings::default(), &mut show)?;
        let mut fit = session.fit(&mut show)?;
        let analysis = if analysing {
            progress.say("testing fields, averaging effects");
            Some(FitAnalysis::of(&mut fit, arguments.diagnose)?)
        } else {
            None
        };
        (fit.fitted, analysis)
    };
    progress.say("scoring the rows of the fit");
    let evaluated = complete(&plan, &mut rows, &mut fitted)?;
    drop(progress);
    fitted.model.seal()?;
    let model = &fitted.model;
    write(&output, "model file", &model.to_json()?)?;
    if let (Some(path), Some(analysis)) = (&arguments.report, &analysis) {
        let report = FitReport { model, analysis, evaluated: &evaluated };
        write(path, "report", &fit_report(&report)?)?;
    }
    tell_result(&fitted, &output)?;
    if let (Some(path), Some(analysis)) = (&arguments.analysis, &analysis) {
        if path == Path::new("-") {
            say(format_args!("\n{}", as_text(analysis)))?;
        } else {
            write(path, "analysis", &(serde_json::to_string_pretty(analysis)? + "\n"))?;
        }
    }
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

fn write(path: &Path, what: &str, text: &str) -> anyhow::Result<()> {
    write_durably(path, text.as_bytes())
        .with_context(|| format!("could not write {what} `{}`", path.display()))
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
