//! `simulate`: a channel in time beside its prediction, or its settling after a step.

use crate::assess::{DEFAULT_CYCLES, Setup, SimulateError, simulate_channel, simulate_step};
use crate::base::{Dimension, parse_quantity};
use crate::report::{
    add_files, check_target, settling_files, settling_json, settling_text, simulation_files, simulation_json,
    simulation_text,
};

use super::arguments::SimulateArguments;
use super::channel::{frequency, not_held};
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;
use super::survey::{assess_failure, report_failure};

/// Tolerance of settling when none is given: a ten-thousandth of the step.
const DEFAULT_TOLERANCE: f64 = 1e-4;

/// Runs `simulate`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &SimulateArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let channel = frequency("FREQUENCY", &arguments.frequency)?;
    let named = arguments.group.as_deref();
    let Some((group, _)) = plan.locate(channel, named) else {
        return Err(Failure::Content(not_held(&plan, channel, named)));
    };
    if let Some(out) = &arguments.out {
        check_target(out).map_err(report_failure)?;
    }
    let setup = Setup::new(&plan).map_err(|error| assess_failure(&plan, &error))?;
    let refused = |error: SimulateError| match error {
        SimulateError::Assess(error) => assess_failure(&plan, &error),
        error => Failure::Content(format!("error: {error}")),
    };
    let voice = Voice::from_quiet(arguments.quiet);
    let (text, json, files) = match &arguments.step {
        None => {
            let cycles = arguments.cycles.unwrap_or(DEFAULT_CYCLES);
            let bar = Bar::new(cycles, "cycles", voice);
            let found =
                simulate_channel(&setup, group, channel, Some(cycles), &|done| bar.advance(done)).map_err(refused)?;
            bar.finish();
            let json = simulation_json(&plan, setup.pfd().to_f64_hz(), &found, &setup.assumptions());
            (simulation_text(&plan, &found), json, simulation_files(&found))
        }
        Some(typed) => {
            let step_hz = parse_quantity(typed, Dimension::Frequency)
                .map_err(|error| Failure::Content(format!("error: --step \"{typed}\": {error}")))?
                .to_f64();
            if step_hz == 0.0 {
                return Err(Failure::Content(format!("error: --step \"{typed}\": a step of zero settles at once")));
            }
            let tolerance_hz = match &arguments.tolerance {
                Some(typed) => frequency("--tolerance", typed)?.to_f64_hz(),
                None => step_hz.abs() * DEFAULT_TOLERANCE,
            };
            let found =
                simulate_step(&setup, group, channel, (step_hz, tolerance_hz), arguments.cycles).map_err(refused)?;
            let json = settling_json(&plan, &found, &setup.assumptions());
            (settling_text(&plan, &found), json, settling_files(&found))
        }
    };
    if let Some(out) = &arguments.out {
        let mut files = files.map_err(report_failure)?;
        let bytes = json.as_ref().map(|text| text.clone().into_bytes());
        if let Ok(bytes) = bytes {
            let path = if arguments.step.is_some() { "settling.json" } else { "simulation.json" };
            files.push(crate::report::ReportFile { path: path.into(), bytes });
        }
        add_files(out, &files).map_err(report_failure)?;
        voice.say(&format!("the picture and the figures are in {}", out.display()));
    }
    if arguments.json { output::print(&json.map_err(report_failure)?) } else { output::print(&text) }
}
