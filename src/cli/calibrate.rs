//! `calibrate`: measured tones fed back.

use std::path::Path;

use crate::assess::Setup;
use crate::decide::calibrate::calibrate;
use crate::plan::parse_measurements;
use crate::report::{calibrated_plan, calibration_json, calibration_text, read_file, write_file};

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
    let read = |path: &Path| {
        let bytes = read_file(path).map_err(report_failure)?;
        String::from_utf8(bytes).map_err(|_| Failure::Content(format!("error: {} is not UTF-8 text", path.display())))
    };
    // Asked before the work: the plan that the rows were held against must not be lost.
    if let Some(target) = &arguments.write_plan
        && [&arguments.plan, path].into_iter().any(|input| is_same_file(input, target))
    {
        return Err(Failure::Content(format!(
            "error: --write-plan {} is one of the files read: name another",
            target.display()
        )));
    }
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
        let written = calibrated_plan(&read(&arguments.plan)?, &found);
        write_file(target, written.text.as_bytes()).map_err(report_failure)?;
        let voice = Voice::from_quiet(arguments.quiet);
        voice.say(&format!("plan written to {}, places with a fitted figure: {}", target.display(), written.written));
        for key in &written.missed {
            voice.say(&format!("warning: {key} has no place in {} and is not in it", arguments.plan.display()));
        }
    }
    if arguments.json {
        let assumptions = Setup::new(&plan).map_err(failed)?.assumptions();
        output::print(&calibration_json(&plan, &found, &assumptions).map_err(report_failure)?)
    } else {
        output::print(&calibration_text(&plan, &found))
    }
}

fn is_same_file(a: &Path, b: &Path) -> bool {
    match (a.canonicalize(), b.canonicalize()) {
        (Ok(a), Ok(b)) => a == b,
        // A path that does not lead anywhere yet is not the same as one that does.
        _ => false,
    }
}
