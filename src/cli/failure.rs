//! How a failed command ends: one message, one exit status with a meaning.

use std::process::ExitCode;

/// Exit status for a path that cannot be opened, read or written, and for internal faults.
const STATUS_INPUT_OUTPUT: u8 = 1;
/// Exit status for arguments or content that cannot be used.
const STATUS_CONTENT: u8 = 2;
/// Exit status when everything was written and `--fail-on` is met.
const STATUS_FLAGGED: u8 = 3;

/// Why a command stops; the text is printed on standard error.
#[derive(Debug)]
pub enum Failure {
    /// A path cannot be opened, read or written, or the program is at fault.
    InputOutput(String),
    /// Arguments or plan unusable.
    Content(String),
    /// Everything was done, and `--fail-on` is met.
    Flagged,
    /// The reader of standard output has gone: end quietly.
    ClosedPipe,
}

impl Failure {
    /// Returns the exit status that belongs to the failure.
    #[must_use]
    pub fn exit_code(&self) -> ExitCode {
        match self {
            Self::InputOutput(_) => ExitCode::from(STATUS_INPUT_OUTPUT),
            Self::Content(_) => ExitCode::from(STATUS_CONTENT),
            Self::Flagged => ExitCode::from(STATUS_FLAGGED),
            Self::ClosedPipe => ExitCode::SUCCESS,
        }
    }

    /// Returns the message, or `None` where silence is due.
    #[must_use]
    pub fn message(&self) -> Option<&str> {
        match self {
            Self::InputOutput(text) | Self::Content(text) => Some(text),
            Self::Flagged | Self::ClosedPipe => None,
        }
    }
}
