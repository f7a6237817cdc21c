//! `channel`: one channel in full.

use std::path::Path;

use crate::assess::{ChannelResult, Setup, SpectrumView, budget_of, offset_sweep, spectrum_view};
use crate::base::{Assumption, Dimension, Frequency, parse_quantity};
use crate::plan::Plan;
use crate::report::{add_files, channel_files, channel_json, channel_text, check_target, offset_text};

use super::arguments::ChannelArguments;
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::survey::{assess_failure, flagged, in_pool, report_failure};

/// Runs `channel`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &ChannelArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let channel = frequency("FREQUENCY", &arguments.frequency)?;
    let (result, view, assumptions) =
        in_pool(arguments.common.jobs, || assess(&plan, channel, arguments.group.as_deref()))??;
    if let Some(out) = &arguments.out {
        write_pictures(
            &plan,
            &result,
            out,
            &channel_json(&result, view.as_ref(), &assumptions).map_err(report_failure)?,
        )?;
    }
    if arguments.common.json {
        output::print(&channel_json(&result, view.as_ref(), &assumptions).map_err(report_failure)?)?;
    } else {
        output::print(&channel_text(&plan, &result, &assumptions))?;
    }
    let voice = Voice::from_quiet(arguments.common.quiet);
    for warning in &result.warnings {
        voice.say(&format!("warning: {warning}"));
    }
    let (bad, marginal) = match result.verdict {
        crate::assess::Verdict::Bad => (1, 0),
        crate::assess::Verdict::Marginal => (0, 1),
        crate::assess::Verdict::Clear => (0, 0),
    };
    flagged(arguments.common.fail_on, bad, marginal)
}

/// Writes the pictures of a channel and its figures, and says what an offset current would do.
fn write_pictures(plan: &Plan, result: &ChannelResult, out: &Path, json: &str) -> Result<(), Failure> {
    check_target(out).map_err(report_failure)?;
    let setup = Setup::new(plan).map_err(|error| assess_failure(plan, &error))?;
    let failed = |error| assess_failure(plan, &error);
    let budget = budget_of(&setup, result.group_index, result.channel).map_err(failed)?;
    let sweep = offset_sweep(&setup, result.group_index, result.channel).map_err(failed)?;
    let files = channel_files(result, budget.as_ref(), sweep.as_ref(), json).map_err(report_failure)?;
    add_files(out, &files).map_err(report_failure)?;
    let said = sweep.map_or_else(String::new, |sweep| offset_text(&sweep));
    output::say(format!("{}pictures and figures are in {}", said, out.display()).trim_start());
    Ok(())
}

/// Reads a frequency argument; `argument` names it in messages.
///
/// # Errors
/// `Content` naming what was typed and the units that are accepted.
pub fn frequency(argument: &str, typed: &str) -> Result<Frequency, Failure> {
    match parse_quantity(typed, Dimension::Frequency) {
        Ok(hz) if hz.sign() > 0 => Ok(Frequency::from_hz(hz)),
        Ok(_) => Err(Failure::Content(format!("error: {argument} \"{typed}\" must be above zero"))),
        Err(error) => Err(Failure::Content(format!("error: {argument}: {error}"))),
    }
}

fn assess(
    plan: &Plan,
    channel: Frequency,
    group: Option<&str>,
) -> Result<(ChannelResult, Option<SpectrumView>, Vec<Assumption>), Failure> {
    let Some((group_index, place)) = plan.locate(channel, group) else {
        return Err(Failure::Content(not_held(plan, channel, group)));
    };
    let setup = Setup::new(plan).map_err(|error| assess_failure(plan, &error))?;
    let mut scratch = setup.scratch();
    let index = place.unwrap_or_else(|| plan.groups[group_index].channels.len());
    let mut result =
        setup.assess(group_index, index, channel, &mut scratch).map_err(|error| assess_failure(plan, &error))?;
    if place.is_none() {
        result.warnings.push(format!("{channel} is not on the raster of group \"{}\"", result.group));
    }
    let view =
        spectrum_view(&setup, group_index, channel, &mut scratch).map_err(|error| assess_failure(plan, &error))?;
    Ok((result, view, setup.assumptions()))
}

/// Returns why no group holds a channel, with the ranges there are.
pub fn not_held(plan: &Plan, channel: Frequency, group: Option<&str>) -> String {
    let ranges: Vec<String> = plan
        .groups
        .iter()
        .filter_map(|candidate| {
            let (low, high) = candidate.channels.range()?;
            Some(format!("  \"{}\": {low} to {high}", candidate.name))
        })
        .collect();
    let what = match group {
        Some(name) if !plan.groups.iter().any(|candidate| candidate.name == name) => {
            format!("the plan has no group \"{name}\"")
        }
        Some(name) => format!("group \"{name}\" does not hold channel {channel}"),
        None => format!("no group holds channel {channel}"),
    };
    format!(
        "error: {what}; the groups and their ranges (channel frequencies, before injection):\n{}",
        ranges.join("\n")
    )
}
