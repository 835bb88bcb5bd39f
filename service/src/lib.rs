//! kilter: fit, serve and watch category models.
//!
//! This crate joins the others to one program. It holds no formulas: those are in `kilter-model`
//! (scoring), `kilter-fit` (likelihood and inference) and `kilter-drift` (drift statistics).

mod analysis;
mod cli;
mod clock;
mod commands;
mod config;
mod demo;
mod drift_text;
mod drop_folder;
mod durable;
mod duration;
mod exit;
mod http;
mod layout;
mod metrics;
mod monitor;
mod monitored;
mod numbers;
mod observing;
mod pages;
mod progress;
mod registry;
mod report;
mod retention;
mod scoring;
mod tables;
mod terminal;
mod text_table;
mod training;

use std::ffi::OsString;
use std::process::ExitCode;

use clap::Parser;

use crate::cli::{Cli, Command};
use crate::exit::{Done, WRONG_USE};

/// Runs the program with the given arguments, the program's name first, and gives its exit code:
/// 0 done; 1 done with findings; 2 failed; 64 wrong arguments, plan or configuration.
pub fn run(arguments: impl IntoIterator<Item = OsString>) -> ExitCode {
    let cli = match Cli::try_parse_from(arguments) {
        Ok(cli) => cli,
        Err(refusal) => {
            let asked_for = !refusal.use_stderr();
            if refusal.print().is_err() {
                return ExitCode::from(exit::FAILED);
            }
            return ExitCode::from(if asked_for { 0 } else { WRONG_USE });
        }
    };
    match dispatch(cli.command) {
        Ok(done) => done.into(),
        Err(error) => exit::report(&error),
    }
}

fn dispatch(command: Command) -> anyhow::Result<Done> {
    match command {
        Command::Demo(arguments) => commands::demo::run(&arguments),
        Command::Fit(arguments) => commands::fit::run(&arguments),
        Command::Show(arguments) => commands::show::run(&arguments),
        Command::Contrast(arguments) => commands::contrast::run(&arguments),
        Command::Score(arguments) => commands::score::run(&arguments),
        Command::Serve(arguments) => commands::serve::run(&arguments),
        Command::Sweep(arguments) => commands::sweep::run(&arguments),
        Command::Observe(arguments) => commands::observe::run(&arguments),
        Command::Drift(arguments) => commands::drift::run(&arguments),
        Command::Versions(arguments) => commands::versions::list(&arguments),
        Command::Promote(arguments) => commands::versions::promote(&arguments),
        Command::Rollback(arguments) => commands::versions::rollback(&arguments),
        Command::Ledger(arguments) => commands::ledger::run(&arguments),
        Command::Publish(arguments) => commands::publish::run(&arguments),
        Command::Check(arguments) => commands::check::run(&arguments),
        Command::Sign(arguments) => commands::sign::run(&arguments),
        Command::Sql(arguments) => commands::sql::run(&arguments),
        Command::Schema(arguments) => commands::schema::run(&arguments),
    }
}
