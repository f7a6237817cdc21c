//! `compare`: modulators weighed on one plan.

use std::path::PathBuf;

use crate::decide::compare::{ModulatorOption, compare, default_options};
use crate::modulator::{Dither, ModulatorSettings, Modulus, ModulusRule, Structure};
use crate::plan::Plan;
use crate::report::{add_files, check_target, comparison_files, comparison_json, comparison_text};

use super::arguments::CompareArguments;
use super::failure::Failure;
use super::modulator_words::{dither, modulus, structure};
use super::output::{self, Voice};
use super::plan_file;
use super::progress::Bar;
use super::survey::{assess_failure, flagged, in_pool, report_failure};

/// Runs `compare`.
///
/// # Errors
/// `Failure` with the exit status that fits.
pub fn run(arguments: &CompareArguments) -> Result<(), Failure> {
    let plan = plan_file::read(&arguments.plan)?;
    let options = options(&plan, arguments)?;
    let out = arguments.out.clone().unwrap_or_else(|| PathBuf::from("reports").join(&plan.stem));
    check_target(&out).map_err(report_failure)?;
    let voice = Voice::from_quiet(arguments.common.quiet);
    let bar = Bar::new(options.len() as u64, "options", voice);
    let found = in_pool(arguments.common.jobs, || compare(&plan, &options, arguments.sample, &|| bar.advance(1)))?
        .map_err(|error| assess_failure(&plan, &error))?;
    bar.finish();
    add_files(&out, &comparison_files(&plan, &found).map_err(report_failure)?).map_err(report_failure)?;
    if arguments.common.json {
        output::print(&comparison_json(&plan, &found).map_err(report_failure)?)?;
    } else {
        output::print(&comparison_text(&plan, &found))?;
    }
    voice.say(&format!("compare.html, compare.csv and compare.json are in {}", out.display()));
    let (bad, marginal) = found.ranked.first().map_or((0, 0), |best| (best.figures.bad, best.figures.marginal));
    flagged(arguments.common.fail_on, bad, marginal)
}

/// Returns the options that were asked for: every combination of the lists given, the plan's own value where a list is
/// absent; without any list the default set.
fn options(plan: &Plan, arguments: &CompareArguments) -> Result<Vec<ModulatorOption>, Failure> {
    let lists = [
        arguments.structures.is_empty(),
        arguments.orders.is_empty(),
        arguments.dithers.is_empty(),
        arguments.seeds.is_empty(),
        arguments.moduli.is_empty(),
    ];
    if lists.iter().all(|absent| *absent) {
        return Ok(default_options(plan));
    }
    let own = &plan.modulator;
    let or_own = |given: Vec<_>, own| if given.is_empty() { vec![own] } else { given };
    let structures = arguments.structures.iter().map(|word| structure(word)).collect::<Result<Vec<Structure>, _>>()?;
    let structures = or_own(structures, own.settings.structure);
    let orders = if arguments.orders.is_empty() { vec![own.settings.order] } else { arguments.orders.clone() };
    let dithers = arguments.dithers.iter().map(|word| dither(word)).collect::<Result<Vec<Dither>, _>>()?;
    let dithers = if dithers.is_empty() { vec![own.settings.dither] } else { dithers };
    let seeds = if arguments.seeds.is_empty() {
        own.settings.seeds.iter().take(1).copied().collect()
    } else {
        arguments.seeds.clone()
    };
    let moduli = arguments
        .moduli
        .iter()
        .map(|word| modulus("--moduli", word))
        .collect::<Result<Vec<Modulus>, _>>()?
        .into_iter()
        .map(ModulusRule::Fixed)
        .collect::<Vec<_>>();
    let moduli = if moduli.is_empty() { vec![own.modulus] } else { moduli };
    let mut options = Vec::new();
    for structure in &structures {
        for order in &orders {
            for dither in &dithers {
                for seed in &seeds {
                    for modulus in &moduli {
                        let settings = ModulatorSettings {
                            structure: *structure,
                            order: *order,
                            seeds: vec![*seed],
                            dither: *dither,
                            noise_transfer: None,
                            runs_at_zero: own.settings.runs_at_zero,
                        };
                        options.push(ModulatorOption { settings, modulus: *modulus });
                    }
                }
            }
        }
    }
    Ok(options)
}
