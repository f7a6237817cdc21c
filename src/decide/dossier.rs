//! What a report that is signed holds beyond the survey: cures, what to measure, options weighed, one noise budget.

use crate::assess::{AssessError, Setup, budget_of};
use crate::loop_model::NoiseBudget;
use crate::plan::Plan;
use crate::survey::SurveyResult;

use super::compare::{Comparison, compare, default_options};
use super::measure_list::{Classes, MeasureList, measure_list};
use super::remedy::{self, Costs, Remedy, default_criterion, remedy_of};

/// Channels up to which a dossier is made unless it is asked for: a few seconds' work.
pub const MOST_CHANNELS: u64 = 2_000;
/// Channels on which the options are tried for a report; `compare` takes more.
const COMPARED_CHANNELS: u64 = 48;

/// The decisions of one survey; a part that was not made is `None`.
#[derive(Debug, Clone, Default)]
pub struct Dossier {
    /// Cures of the bad and marginal channels, and the smallest set of PFD settings.
    pub remedy: Option<Remedy>,
    /// The shortest list of things to measure.
    pub measures: Option<MeasureList>,
    /// Modulators weighed on a sample of the channels.
    pub comparison: Option<Comparison>,
    /// Noise budget of the legal channel with the worst verdict: its place among the channels, and the budget.
    pub budget: Option<(usize, NoiseBudget)>,
}

/// Returns the dossier of a survey; `done` is called after each change, setting and option tried.
///
/// # Errors
/// `AssessError` as the parts themselves.
pub fn dossier(result: &SurveyResult, done: &(dyn Fn() + Sync)) -> Result<Dossier, AssessError> {
    let plan = &result.plan;
    Ok(Dossier {
        remedy: Some(remedy_of(result, &Costs::default(), default_criterion(plan), done)?),
        measures: Some(measure_list(result, Classes::default())?),
        comparison: Some(compare(plan, &default_options(plan), COMPARED_CHANNELS, done)?),
        budget: noise_budget(result)?,
    })
}

/// Returns how often `done` of [`dossier`] is called at most.
#[must_use]
pub fn steps(plan: &Plan) -> u64 {
    remedy::steps(plan, &Costs::default()) + default_options(plan).len() as u64
}

/// Returns the noise budget of the channel whose spectrum the survey shows, else of the first legal one; it is made for
/// plans of any size.
///
/// # Errors
/// `AssessError` as the assessment of that channel.
pub fn noise_budget(result: &SurveyResult) -> Result<Option<(usize, NoiseBudget)>, AssessError> {
    let shown = result.spectrum.as_ref().map(|view| view.channel);
    let Some(place) = shown.or_else(|| result.channels.iter().position(|channel| channel.legal)) else {
        return Ok(None);
    };
    let channel = &result.channels[place];
    let setup = Setup::new(&result.plan)?;
    Ok(budget_of(&setup, channel.group_index, channel.channel)?.map(|budget| (place, budget)))
}
