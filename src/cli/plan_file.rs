//! Reading a plan for a command, and `check`.

use std::io::IsTerminal;
use std::path::Path;

use crate::plan::{Colour, Plan, PlanFailure, read_dense_plan_file, read_plan_file, render_problems};

use super::failure::Failure;
use super::output;

/// Reads and checks a plan.
///
/// # Errors
/// `InputOutput` when the file cannot be read, `Content` with every problem of the plan under its line.
pub fn read(path: &Path) -> Result<Plan, Failure> {
    read_plan_file(path).map_err(explained)
}

/// Reads and checks a plan of which no channel will be enumerated.
///
/// # Errors
/// As `read`.
pub fn read_dense(path: &Path) -> Result<Plan, Failure> {
    read_dense_plan_file(path).map_err(explained)
}

fn explained(failure: PlanFailure) -> Failure {
    match failure {
        PlanFailure::Io { .. } => Failure::InputOutput(format!("error: {failure}")),
        PlanFailure::Content { problems, source_name, text } => {
            let in_colour = std::io::stderr().is_terminal() && std::env::var_os("NO_COLOR").is_none();
            let colour = if in_colour { Colour::Styled } else { Colour::Plain };
            Failure::Content(render_problems(&problems, &source_name, &text, colour))
        }
    }
}

/// Runs `check`: says what a valid plan holds.
///
/// # Errors
/// As `read`.
pub fn check(path: &Path) -> Result<(), Failure> {
    let plan = read(path)?;
    let channels = plan.channel_count();
    let groups = plan.groups.len();
    let mut text = format!(
        "{}: valid plan \"{}\", {channels} channel{} in {groups} group{}\n",
        path.display(),
        plan.identity.title,
        if channels == 1 { "" } else { "s" },
        if groups == 1 { "" } else { "s" },
    );
    let defaults = plan.assumptions.iter().filter(|a| a.basis == crate::base::Basis::Default).count();
    text.push_str(&format!("{defaults} defaults apply; every output lists them\n"));
    for warning in &plan.warnings {
        text.push_str(&format!("warning: {warning}\n"));
    }
    output::print(&text)
}
