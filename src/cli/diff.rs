//! `diff`: what changed between two surveys.

use std::path::Path;

use crate::assess::Verdict;
use crate::decide::diff::{SurveyFile, compare_surveys, parse_survey};
use crate::report::{difference_html, difference_json, difference_text, read_file, write_file};

use super::arguments::{DiffArguments, FailOn};
use super::failure::Failure;
use super::output::{self, Voice};
use super::survey::report_failure;

/// Runs `diff`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &DiffArguments) -> Result<(), Failure> {
    let (old, new) = (read(&arguments.old)?, read(&arguments.new)?);
    let found = compare_surveys(&old, &new);
    if let Some(path) = &arguments.html {
        write_file(path, difference_html(&found).map_err(report_failure)?.as_bytes()).map_err(report_failure)?;
    }
    if arguments.json {
        let voice = Voice::from_quiet(arguments.quiet);
        for warning in &found.warnings {
            voice.say(&format!("warning: {warning}"));
        }
        output::print(&difference_json(&found).map_err(report_failure)?)?;
    } else {
        output::print(&difference_text(&found))?;
    }
    let worse = match arguments.fail_on {
        None => 0,
        Some(FailOn::Bad) => found.worse_to(Verdict::Bad),
        Some(FailOn::Marginal) => found.worse_to(Verdict::Marginal),
    };
    if worse > 0 { Err(Failure::Flagged) } else { Ok(()) }
}

/// Reads a survey.
fn read(path: &Path) -> Result<SurveyFile, Failure> {
    let bytes = read_file(path).map_err(report_failure)?;
    parse_survey(&bytes).map_err(|error| Failure::Content(format!("error: {} {error}", path.display())))
}
