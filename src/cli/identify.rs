//! `identify`: what makes a tone.

use crate::decide::identify::{IdentifyError, default_window, identify};
use crate::report::{identification_json, identification_text};

use super::arguments::IdentifyArguments;
use super::channel::{frequency, not_held};
use super::failure::Failure;
use super::output;
use super::plan_file;
use super::survey::report_failure;

/// Runs `identify`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &IdentifyArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let channel = frequency("FREQUENCY", &arguments.frequency)?;
    let offset = frequency("OFFSET", &arguments.offset)?;
    let refused = |error: IdentifyError| Failure::Content(format!("error: {error}"));
    let within = match &arguments.within {
        Some(typed) => frequency("--within", typed)?,
        None => default_window(offset).map_err(|error| refused(error.into()))?,
    };
    let group = arguments.group.as_deref();
    let Some((group_index, _)) = plan.locate(channel, group) else {
        return Err(Failure::Content(not_held(&plan, channel, group)));
    };
    let found = identify(&plan, group_index, channel, offset, within).map_err(refused)?;
    if arguments.json {
        output::print(&identification_json(&plan, &found).map_err(report_failure)?)
    } else {
        output::print(&identification_text(&plan, &found))
    }
}
