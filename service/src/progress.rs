//! Progress on standard error: bars on a terminal, plain lines elsewhere.

use std::io::IsTerminal;
use std::time::{Duration, Instant};

use indicatif::{ProgressBar, ProgressStyle};
use kilter_fit::Progress;

use crate::numbers::whole;

/// Least time between two plain lines about the same thing.
const QUIET: Duration = Duration::from_secs(10);

/// Shows how far a fit has come.
pub(crate) struct FitProgress {
    bar: Option<ProgressBar>,
    started: Instant,
    said: Instant,
}

impl FitProgress {
    /// Nothing is shown yet.
    pub(crate) fn new() -> Self {
        let bar = std::io::stderr().is_terminal().then(ProgressBar::new_spinner);
        if let Some(bar) = &bar {
            bar.set_style(spinner());
            bar.enable_steady_tick(Duration::from_millis(200));
        }
        let now = Instant::now();
        Self { bar, started: now, said: now }
    }

    /// Takes a message of the fit.
    pub(crate) fn show(&mut self, progress: &Progress) {
        let (line, important) = match *progress {
            Progress::Surveying { rows } => (self.rows_in_words(rows), false),
            Progress::Step { number, log_likelihood, decrement } => (
                format!(
                    "step {number}: log-likelihood {log_likelihood:.6}, {decrement:.1e} standard errors to go"
                ),
                true,
            ),
            _ => return,
        };
        match &self.bar {
            Some(bar) => bar.set_message(line),
            None if important || self.said.elapsed() >= QUIET => {
                self.said = Instant::now();
                eprintln!("{line}");
            }
            None => {}
        }
    }

    /// Says what is being done after the fit.
    pub(crate) fn say(&self, what: &str) {
        if let Some(bar) = &self.bar {
            bar.set_message(what.to_owned());
        }
    }

    fn rows_in_words(&self, rows: u64) -> String {
        let speed = rows as f64 / self.started.elapsed().as_secs_f64().max(1e-3);
        format!("reading: {} rows, {} rows per second", whole(rows as f64), whole(speed))
    }
}

impl Drop for FitProgress {
    fn drop(&mut self) {
        if let Some(bar) = &self.bar {
            bar.finish_and_clear();
        }
    }
}

fn spinner() -> ProgressStyle {
    ProgressStyle::default_spinner()
        .template("{spinner} {msg} ({elapsed})")
        .unwrap_or_else(|_| ProgressStyle::default_spinner())
}
