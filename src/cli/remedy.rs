//! `remedy`: cures of bad channels, sets of PFD frequencies, reference hunts, dense plans.

use std::path::PathBuf;

use crate::assess::Setup;
use crate::base::{Exact, Frequency};
use crate::decide::remedy::{Costs, Criterion, IntervalError, Kind, default_criterion, hunt, intervals, remedy, steps};
use crate::plan::Plan;
use crate::report::{
    add_files, check_target, hunt_json, hunt_text, intervals_json, intervals_text, remedy_files, remedy_json,
    remedy_text,
};

use super::arguments::{ByChoice, FailOn, RemedyArguments};
use super::channel::frequency;
use super::failure::Failure;
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;
use super::survey::{assess_failure, flagged, in_pool, report_failure};

/// References that one hunt tries at most.
const MOST_REFERENCES: i128 = 1_000_000;

/// Runs `remedy`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &RemedyArguments) -> Result<(), Failure> {
    if arguments.intervals {
        return run_intervals(arguments);
    }
    let plan = plan_file::read(&arguments.plan)?;
    match &arguments.hunt {
        Some(range) => run_hunt(&plan, range, arguments),
        None => run_cures(&plan, arguments),
    }
}

fn run_cures(plan: &Plan, arguments: &RemedyArguments) -> Result<(), Failure> {
    let costs = costs(&arguments.cost)?;
    let out = arguments.out.clone().unwrap_or_else(|| PathBuf::from("reports").join(&plan.stem));
    check_target(&out).map_err(report_failure)?;
    let criterion = match arguments.by {
        Some(ByChoice::Verdict) => Criterion::Verdict,
        Some(ByChoice::Guard) => Criterion::Guard,
        None => default_criterion(plan),
    };
    let voice = Voice::from_quiet(arguments.common.quiet);
    let bar = Bar::new(steps(plan, &costs), "changes", voice);
    let found = in_pool(arguments.common.jobs, || remedy(plan, &costs, criterion, &|| bar.advance(1)))?
        .map_err(|error| assess_failure(plan, &error))?;
    bar.finish();
    add_files(&out, &remedy_files(plan, &found).map_err(report_failure)?).map_err(report_failure)?;
    if arguments.common.json {
        output::print(&remedy_json(plan, &found).map_err(report_failure)?)?;
    } else {
        output::print(&remedy_text(plan, &found))?;
    }
    voice.say(&format!("remedy.html, remedy.csv and remedy.json are in {}", out.display()));
    let left = |verdict| {
        let stays = |channel: &&crate::decide::remedy::ChannelCures| {
            channel.cures.iter().map(|cure| cure.after.verdict).chain([channel.before.verdict]).min() == Some(verdict)
        };
        found.channels.iter().filter(stays).count() as u64
    };
    flagged(arguments.common.fail_on, left(crate::assess::Verdict::Bad), left(crate::assess::Verdict::Marginal))
}

/// Returns the costs with what was typed.
fn costs(typed: &[String]) -> Result<Costs, Failure> {
    typed.iter().try_fold(Costs::default(), |costs, typed| {
        let found = typed.split_once('=').and_then(|(word, cost)| {
            let kind = Kind::ALL.into_iter().find(|kind| kind.word() == word.trim())?;
            let cost = cost.trim().parse::<f64>().ok().filter(|cost| cost.is_finite() && *cost >= 0.0)?;
            Some((kind, cost))
        });
        let (kind, cost) = found.ok_or_else(|| {
            let words: Vec<&str> = Kind::ALL.iter().map(|kind| kind.word()).collect();
            Failure::Content(format!(
                "error: --cost \"{typed}\": expected KIND=COST with a cost of at least 0 and one of {}",
                words.join(", ")
            ))
        })?;
        Ok(costs.with(kind, cost))
    })
}

fn run_hunt(plan: &Plan, range: &str, arguments: &RemedyArguments) -> Result<(), Failure> {
    let references = references(range, arguments.step.as_deref())?;
    let voice = Voice::from_quiet(arguments.common.quiet);
    let bar = Bar::new(references.len() as u64, "references", voice);
    let ranked = in_pool(arguments.common.jobs, || {
        let board = Setup::new(plan)?;
        hunt(plan, &board, &references, &|| bar.advance(1))
    })?
    .map_err(|error| assess_failure(plan, &error))?;
    bar.finish();
    if arguments.common.json {
        output::print(&hunt_json(plan, &ranked).map_err(report_failure)?)?;
    } else {
        output::print(&hunt_text(plan, &ranked))?;
    }
    flagged(arguments.common.fail_on, ranked.first().and_then(|best| best.bad).unwrap_or(1), 0)
}

/// Returns the references of a range with its step, or of a list.
fn references(range: &str, step: Option<&str>) -> Result<Vec<Frequency>, Failure> {
    let Some((first, last)) = range.split_once("..") else {
        if step.is_some() {
            return Err(Failure::Content("error: --step needs a range, \"10 MHz..52 MHz\"".to_owned()));
        }
        return range.split(',').map(|typed| frequency("--hunt", typed.trim())).collect();
    };
    let Some(step) = step else {
        return Err(Failure::Content(
            "error: --hunt with a range needs --step, for example --step \"100 kHz\"".to_owned(),
        ));
    };
    let (first, last) = (frequency("--hunt", first.trim())?.hz(), frequency("--hunt", last.trim())?.hz());
    let step = frequency("--step", step)?.hz();
    let too_long = || Failure::Content("error: --hunt: the numbers need more than 127 bits to be exact".to_owned());
    let count = last.minus(&first).and_then(|width| width.over(&step)).map_err(|_| too_long())?.floor();
    if !(0..MOST_REFERENCES).contains(&count) {
        return Err(Failure::Content(format!(
            "error: --hunt \"{range}\": expected a rising range of at most {MOST_REFERENCES} steps"
        )));
    }
    (0..=count)
        .map(|i| {
            let shift = step.times(&Exact::from_integer(i)).and_then(|shift| first.plus(&shift));
            shift.map(Frequency::from_hz).map_err(|_| too_long())
        })
        .collect()
}

fn run_intervals(arguments: &RemedyArguments) -> Result<(), Failure> {
    let plan = plan_file::read_dense(&arguments.plan)?;
    let losses = in_pool(arguments.common.jobs, || intervals(&plan))?.map_err(|error| match error {
        IntervalError::Assess(error) => assess_failure(&plan, &error),
        error @ IntervalError::NoClosedForm { .. } => Failure::Content(format!("error: {error}")),
    })?;
    if arguments.common.json {
        output::print(&intervals_json(&plan, &losses).map_err(report_failure)?)?;
    } else {
        output::print(&intervals_text(&plan, &losses))?;
    }
    let lost: u64 = losses.iter().map(|loss| loss.near + loss.illegal).sum();
    match (arguments.common.fail_on, lost) {
        (None, _) | (_, 0) => Ok(()),
        (Some(FailOn::Bad | FailOn::Marginal), _) => flagged(arguments.common.fail_on, lost, 0),
    }
}
