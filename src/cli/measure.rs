//! `measure`: the shortest list of things to measure.

use std::path::PathBuf;

use crate::decide::measure_list::{Classes, measure_list};
use crate::report::{add_files, check_target, measure_files, measure_json, measure_text};
use crate::survey::survey;

use super::arguments::{ClassChoice, MeasureArguments};
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;
use super::survey::{assess_failure, flagged, in_pool, report_failure};

/// Runs `measure`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &MeasureArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let out = arguments.out.clone().unwrap_or_else(|| PathBuf::from("reports").join(&plan.stem));
    check_target(&out).map_err(report_failure)?;
    let voice = Voice::from_quiet(arguments.common.quiet);
    let bar = Bar::new(plan.channel_count(), "channels", voice);
    let classes = match arguments.each {
        ClassChoice::Fraction => Classes::Fraction,
        ClassChoice::Denominator => Classes::Denominator,
    };
    let (result, list) = in_pool(arguments.common.jobs, || {
        let result = survey(&plan, &|items| bar.advance(items))?;
        let list = measure_list(&result, classes)?;
        Ok((result, list))
    })?
    .map_err(|error| assess_failure(&plan, &error))?;
    bar.finish();
    add_files(&out, &measure_files(&list).map_err(report_failure)?).map_err(report_failure)?;
    if arguments.common.json {
        output::print(&measure_json(&list).map_err(report_failure)?)?;
    } else {
        output::print(&measure_text(&list))?;
    }
    voice.say(&format!("measure.html, measure.csv and measure.json are in {}", out.display()));
    flagged(arguments.common.fail_on, result.summary.bad, result.summary.marginal)
}
