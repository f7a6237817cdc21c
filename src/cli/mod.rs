//! Arguments and printing; the work is done by the stages before.

mod arguments;
mod calibrate;
mod channel;
mod compare;
mod diff;
mod export;
mod failure;
mod identify;
mod measure;
mod modulator_words;
mod output;
mod plan_file;
mod progress;
mod remedy;
mod sequence;
mod simulate;
mod survey;

use std::process::ExitCode;

use clap::{CommandFactory, Parser};

use arguments::{Arguments, Command};
use failure::Failure;

/// Runs the program and returns its exit status.
#[must_use]
pub fn run() -> ExitCode {
    let arguments = Arguments::parse();
    match dispatch(&arguments.command) {
        Ok(()) => ExitCode::SUCCESS,
        Err(failure) => {
            if let Some(message) = failure.message() {
                output::say(message);
            }
            failure.exit_code()
        }
    }
}

fn dispatch(command: &Command) -> Result<(), Failure> {
    match command {
        Command::Survey(arguments) => survey::run(arguments),
        Command::Channel(arguments) => channel::run(arguments),
        Command::Sequence(arguments) => sequence::run(arguments),
        Command::Compare(arguments) => compare::run(arguments),
        Command::Remedy(arguments) => remedy::run(arguments),
        Command::Simulate(arguments) => simulate::run(arguments),
        Command::Calibrate(arguments) => calibrate::run(arguments),
        Command::Identify(arguments) => identify::run(arguments),
        Command::Diff(arguments) => diff::run(arguments),
        Command::Measure(arguments) => measure::run(arguments),
        Command::Export(arguments) => export::run(arguments),
        Command::Check(arguments) => plan_file::check(&arguments.plan),
        Command::Example => output::print(&crate::plan::example_plan()),
        Command::Schema => {
            let text = serde_json::to_string_pretty(&crate::plan::json_schema())
                .map_err(|error| Failure::InputOutput(format!("schema: {error}")))?;
            output::print(&format!("{text}\n"))
        }
        Command::Completions { shell } => {
            let mut bytes = Vec::new();
            clap_complete::generate(*shell, &mut Arguments::command(), "thornmap", &mut bytes);
            output::print(&String::from_utf8_lossy(&bytes))
        }
        Command::Man => {
            let mut bytes = Vec::new();
            clap_mangen::Man::new(Arguments::command())
                .render(&mut bytes)
                .map_err(|error| Failure::InputOutput(format!("manual page: {error}")))?;
            output::print(&String::from_utf8_lossy(&bytes))
        }
    }
}
