//! `kilter observe`: takes outcomes from a file into the ledger.

use std::io;
use std::path::Path;

use kilter_ledger::{Job, Outcomes, Reply};
use kilter_tables::{Format, ReadOptions, TableReader};

use crate::cli::ObserveArgs;
use crate::clock::Clock;
use crate::commands::{live_version, open_registry};
use crate::config::Config;
use crate::exit::Done;
use crate::observing::{ReadOutcomes, Tally, outcome_specs};
use crate::terminal::say;

/// Refused rows that are told on standard error.
const MOST_TOLD: usize = 10;

pub(crate) fn run(arguments: &ObserveArgs) -> anyhow::Result<Done> {
    let total = take_in(arguments)?;
    say(format_args!(
        "{} outcomes matched, {} wait for their record, {} known already, {} corrected, {} refused",
        total.matched,
        total.waiting,
        total.repeated,
        total.corrected,
        total.refused.len()
    ))?;
    Ok(Done::found(!total.refused.is_empty()))
}

/// Takes all outcomes of the file in and says what became of them; refused ones are told on
/// standard error.
pub(crate) fn take_in(arguments: &ObserveArgs) -> anyhow::Result<Tally> {
    let config = Config::read(&arguments.config.config)?;
    let registry = open_registry(&config)?;
    let version = live_version(&registry, &arguments.name)?;
    let options = ReadOptions { columns: outcome_specs(), carry: false, ..ReadOptions::default() };
    let reader = if arguments.input == Path::new("-") {
        TableReader::from_stream(Box::new(io::stdin()), Format::Csv, options)?
    } else {
        TableReader::open(&arguments.input, options)?
    };
    let mut total = Tally::default();
    for batch in reader {
        let batch = batch?;
        let read = ReadOutcomes::of(&batch.batch);
        let mut tally = Tally::default();
        tally.refuse_unread(&read);
        if !read.outcomes.is_empty() {
            let job = Job::Outcomes(Outcomes {
                model: version.model.name.clone(),
                received: Clock::System.now(),
                outcomes: read.outcomes.clone(),
            });
            if let Reply::Outcomes(states) = registry.ledger().write(job)? {
                tally.add(&read, &states);
            }
        }
        for refusal in tally.refused.iter().take(MOST_TOLD.saturating_sub(total.refused.len())) {
            eprintln!("line {}: `{}` {}", batch.line(refusal.row), refusal.field, refusal.reason);
        }
        total.merge(tally);
    }
    Ok(total)
}
