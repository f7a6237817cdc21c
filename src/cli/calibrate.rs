//! `calibrate`: measured tones fed back.

use std::fs;

use crate::assess::Setup;
use crate::decide::calibrate::calibrate;
use crate::plan::parse_measurements;
use crate::report::{calibrated_plan, calibration_json, calibration_text};

use super::arguments::CalibrateArguments;
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::survey::{assess_failure, report_failure};

/// Runs `calibrate`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &CalibrateArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let path = &arguments.measured;
    let read = |path: &std::path::Path| {
        fs::read(path)
            .map_err(|error| Failure::InputOutput(format!("error: {} cannot be read: {error}", path.display())))
            .and_then(|bytes| {
                String::from_utf8(bytes)
                    .map_err(|_| Failure::Content(format!("error: {} is not UTF-8 text", path.display())))
            })
    };
    let rows = parse_measurements(&read(path)?).map_err(|problems| {
        let lines: Vec<String> =
            problems.iter().map(|problem| format!("error: {}: {problem}", path.display())).collect();
        Failure::Content(lines.join("\n"))
    })?;
    if rows.is_empty() {
        return Err(Failure::Content(format!("error: {}: no row has a level", path.display())));
    }
    let failed = |error| assess_failure(&plan, &error);
    let found = calibrate(&plan, &rows).map_err(failed)?;
    if let Some(target) = &arguments.write_plan {
        let text = calibrated_plan(&read(&arguments.plan)?, &found);
        fs::write(target, text)
            .map_err(|error| Failure::InputOutput(format!("error: {} cannot be written: {error}", target.display())))?;
        Voice::from_quiet(arguments.quiet).say(&format!(
            "plan with {} fitted figures written to {}",
            found.fitted.len(),
            target.display()
        ));
    }
    if arguments.json {
        let assumptions = Setup::new(&plan).map_err(failed)?.assumptions();
        output::print(&calibration_json(&plan, &found, &assumptions).map_err(report_failure)?)
    } else {
        output::print(&calibration_text(&plan, &found))
    }
}
