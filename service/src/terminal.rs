//! What commands say on standard output.

use std::fmt::Display;
use std::io::{self, Write};

/// Writes a text to standard output, ended by a line break.
///
/// # Errors
/// Where standard output cannot be written to. A closed pipe is such an error, and no failure of
/// the command: see [`crate::exit::report`].
pub(crate) fn say(text: impl Display) -> io::Result<()> {
    let text = text.to_string();
    let mut out = io::stdout().lock();
    out.write_all(text.trim_end_matches('\n').as_bytes())?;
    out.write_all(b"\n")?;
    out.flush()
}
