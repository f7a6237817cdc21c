//! The only place that prints: results on standard output, messages on standard error.

use std::io::{self, ErrorKind, Write};

use super::failure::Failure;

/// Writes a result to standard output; a reader that has gone is no fault.
///
/// # Errors
/// `ClosedPipe` when the reader has gone, `InputOutput` for any other write error.
pub fn print(text: &str) -> Result<(), Failure> {
    let mut out = io::stdout().lock();
    out.write_all(text.as_bytes()).and_then(|()| out.flush()).map_err(|error| match error.kind() {
        ErrorKind::BrokenPipe => Failure::ClosedPipe,
        _ => Failure::InputOutput(format!("standard output: {error}")),
    })
}

/// Writes one line to standard error, in colour only where a terminal wants it.
pub fn say(line: &str) {
    // Nobody can be told when standard error itself fails.
    let _ = writeln!(anstream::stderr().lock(), "{line}");
}

/// Whether messages are wanted.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Voice {
    /// Say what is being done.
    Normal,
    /// Only failures.
    Quiet,
}

impl Voice {
    /// Returns the voice that `--quiet` asks for.
    #[must_use]
    pub fn from_quiet(quiet: bool) -> Self {
        if quiet { Self::Quiet } else { Self::Normal }
    }

    /// Says a line unless quiet.
    pub fn say(self, line: &str) {
        if self == Self::Normal {
            say(line);
        }
    }
}
