//! How a command ends: exit codes, and errors as one sentence with a hint.

use std::fmt;
use std::process::ExitCode;

/// How a command ended, when it did not fail.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Done {
    /// All is well.
    Well,
    /// It did its work and found what the caller should know: rows refused, a bad file.
    WithFindings,
}

impl Done {
    /// `WithFindings` where something was found.
    pub(crate) fn found(something: bool) -> Self {
        if something { Self::WithFindings } else { Self::Well }
    }
}

impl From<Done> for ExitCode {
    fn from(done: Done) -> Self {
        match done {
            Done::Well => Self::from(0),
            Done::WithFindings => Self::from(1),
        }
    }
}

/// Exit code of a command that failed: input unreadable, fit impossible, disk, ledger or network.
pub(crate) const FAILED: u8 = 2;
/// Exit code for wrong arguments, plan or configuration, found before anything was touched.
pub(crate) const WRONG_USE: u8 = 64;

/// Wrong arguments, plan or configuration, found before anything was touched.
#[derive(Debug)]
pub(crate) struct WrongUse(pub(crate) String);

impl fmt::Display for WrongUse {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        f.write_str(&self.0)
    }
}

impl std::error::Error for WrongUse {}

/// A hint that is printed on a line of its own below the error.
#[derive(Debug)]
pub(crate) struct Hint(pub(crate) String);

impl fmt::Display for Hint {
    fn fmt(&self, f: &mut fmt::Formatter) -> fmt::Result {
        write!(f, "hint: {}", self.0)
    }
}

impl std::error::Error for Hint {}

/// Prints a failure to standard error and gives its exit code. A broken pipe is no failure.
pub(crate) fn report(error: &anyhow::Error) -> ExitCode {
    let broken_pipe = error
        .chain()
        .filter_map(|cause| cause.downcast_ref::<std::io::Error>())
        .any(|io| io.kind() == std::io::ErrorKind::BrokenPipe);
    if broken_pipe {
        return ExitCode::from(0);
    }
    let mut hints = Vec::new();
    let mut sentences: Vec<String> = Vec::new();
    for cause in error.chain() {
        let text = cause.to_string();
        if cause.downcast_ref::<Hint>().is_some() {
            hints.push(text);
        } else if sentences.last().is_none_or(|last| !last.ends_with(&text)) {
            sentences.push(text);
        }
    }
    eprintln!("error: {}", sentences.join(": "));
    for hint in hints {
        eprintln!("{hint}");
    }
    // The chain shows what was wrapped; the error itself knows what it was wrapped in.
    let wrong_use = error.is::<WrongUse>() || error.chain().any(<dyn std::error::Error>::is::<WrongUse>);
    ExitCode::from(if wrong_use { WRONG_USE } else { FAILED })
}
