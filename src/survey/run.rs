//! All channels in parallel, in plan order, block by block.

use std::ops::Range;

use rayon::prelude::*;

use crate::assess::{AssessError, ChannelResult, Scratch, Setup};
use crate::plan::Plan;

use super::kept::{Candidate, Keep, Kept};
use super::method_check::check_method;
use super::result::{Summary, SurveyResult};
use super::spectrum_view::spectrum_of;
use super::table_check::check_tables;
use super::tally::Tally;

/// Channels from which tables of loop, curve and noise pay.
const TABULATED_CHANNELS: u64 = 64;
/// Channels that one worker takes at a time.
const BLOCK_CHANNELS: u64 = 64;
/// Blocks between two calls of the taker: enough to keep every worker busy, few enough to stay small.
const WAVE_BLOCKS: usize = 256;

/// Surveys every channel of a plan; `done` is called with the number of channels finished since the last call.
///
/// The threads are those of the rayon pool the caller is in.
///
/// # Errors
/// `AssessError` when the plan as a whole is refused: no legal channel, an unstable loop, exact overflow.
pub fn survey(plan: &Plan, done: &(dyn Fn(u64) + Sync)) -> Result<SurveyResult, AssessError> {
    let steps = Steps { render: &|_: &[ChannelResult]| Ok(()), done };
    survey_in_blocks(plan, Keep::All, &steps, &mut |()| Ok(()))
}

/// Returns every channel of a plan in plan order, without the run's own check: for plans that are tried by the dozen
/// beside one that is surveyed.
///
/// # Errors
/// As [`survey`].
pub fn assess_all(plan: &Plan) -> Result<Vec<ChannelResult>, AssessError> {
    let setup = ready(plan)?;
    let found = blocks(plan)
        .par_iter()
        .map_init(
            || setup.scratch(),
            |scratch, block| {
                block.indices.clone().map(|index| setup.assess_index(block.group, index, scratch)).collect()
            },
        )
        .collect::<Result<Vec<Vec<ChannelResult>>, AssessError>>()?;
    Ok(found.into_iter().flatten().collect())
}

/// Returns the plan made ready, tabulated where that pays.
fn ready(plan: &Plan) -> Result<Setup<'_>, AssessError> {
    let setup = Setup::new(plan)?;
    Ok(if plan.channel_count() >= TABULATED_CHANNELS { setup.tabulated() } else { setup })
}

/// What is done with each block of channels.
pub struct Steps<'a, R, E> {
    /// Turns a block into what is taken, on any thread; blocks come out in plan order whatever the threads do.
    pub render: &'a (dyn Fn(&[ChannelResult]) -> Result<R, E> + Sync),
    /// Called with the number of channels finished since the last call.
    pub done: &'a (dyn Fn(u64) + Sync),
}

/// Surveys every channel of a plan block by block: `take` gets what `steps.render` made of each block, in plan order,
/// and the result holds only the channels that `keep` asks for, so that memory does not grow with the plan.
///
/// # Errors
/// As [`survey`], and whatever `render` and `take` return.
pub fn survey_in_blocks<R: Send, E: From<AssessError> + Send>(
    plan: &Plan,
    keep: Keep,
    steps: &Steps<'_, R, E>,
    take: &mut (dyn FnMut(R) -> Result<(), E> + Send),
) -> Result<SurveyResult, E> {
    let count = plan.channel_count();
    let setup = ready(plan)?;
    let is_tabulated = count >= TABULATED_CHANNELS;
    let mut tally = Tally::default();
    let mut kept = Kept::new(keep, count);
    for wave in blocks(plan).chunks(WAVE_BLOCKS) {
        let finished = wave
            .par_iter()
            .map_init(|| setup.scratch(), |scratch, block| one_block(&setup, block, &kept, steps, scratch))
            .collect::<Result<Vec<_>, E>>()?;
        for block in finished {
            take(block.rendered)?;
            tally.add(block.tally);
            kept.add(block.kept);
        }
    }
    let is_sample = kept.is_sample();
    let channels = kept.into_channels();
    let mut warnings = plan.warnings.clone();
    warnings.extend(setup.warnings().iter().cloned());
    if is_sample {
        warnings.push(format!(
            "{count} channels: page and plots show {} of them, the worst and an even sample; channels.csv holds all",
            channels.len()
        ));
    }
    warnings.extend(tally.shared_warnings());
    let (mut method_check, doubts) = check_method(&setup, &channels)?;
    warnings.extend(doubts);
    if is_tabulated {
        warnings.extend(check_tables(&setup, &channels, &mut method_check)?);
    }
    Ok(SurveyResult {
        assumptions: setup.assumptions(),
        conventions: conventions(),
        loop_summary: tally.loop_summary(&setup),
        summary: tally.into_summary(),
        method_check,
        spectrum: spectrum_of(&setup, &channels)?,
        plan: plan.clone(),
        channels,
        warnings,
    })
}

/// Channels of one group that one worker takes.
struct Block {
    group: usize,
    indices: Range<u64>,
    /// Place of the first channel in the plan.
    first: u64,
}

/// Returns the plan cut into blocks, in plan order.
fn blocks(plan: &Plan) -> Vec<Block> {
    let mut list = Vec::new();
    let mut before = 0;
    for (group, channels) in plan.groups.iter().enumerate() {
        let count = channels.channels.len();
        let mut start = 0;
        while start < count {
            let end = (start + BLOCK_CHANNELS).min(count);
            list.push(Block { group, indices: start..end, first: before + start });
            start = end;
        }
        before += count;
    }
    list
}

/// What is left of a block.
struct Finished<R> {
    rendered: R,
    tally: Tally,
    kept: Vec<Candidate>,
}

fn one_block<R, E: From<AssessError>>(
    setup: &Setup,
    block: &Block,
    kept: &Kept,
    steps: &Steps<'_, R, E>,
    scratch: &mut Scratch,
) -> Result<Finished<R>, E> {
    let mut channels = block
        .indices
        .clone()
        .map(|index| setup.assess_index(block.group, index, scratch))
        .collect::<Result<Vec<ChannelResult>, AssessError>>()?;
    let rendered = (steps.render)(&channels)?;
    let mut tally = Tally::default();
    channels.iter().for_each(|channel| tally.count(channel));
    (steps.done)(channels.len() as u64);
    let mut places = Vec::new();
    let mut place = block.first;
    channels.retain(|channel| {
        let wanted = kept.wants(place, channel);
        if wanted {
            places.push(place);
        }
        place += 1;
        wanted
    });
    let kept = places.into_iter().zip(channels).map(|(place, channel)| kept.candidate(place, channel)).collect();
    Ok(Finished { rendered, tally, kept })
}

/// Returns the counts over the channels; every rule has an entry.
#[must_use]
pub fn summarise(channels: &[ChannelResult]) -> Summary {
    let mut tally = Tally::default();
    channels.iter().for_each(|channel| tally.count(channel));
    tally.into_summary()
}

/// Conventions that every output states.
fn conventions() -> Vec<(&'static str, &'static str)> {
    vec![
        ("level", "dBc, one sideband of the carrier at the output (after the output divider), small-angle"),
        ("offset", "distance from the carrier in Hz, positive; an output divider does not change it"),
        ("phase_noise", "L(f) in dBc/Hz, single sideband, half the one-sided phase density (IEEE Std 1139)"),
        (
            "boundary",
            "p/q of the PFD frequency (family comparison), of the reference (family reference, when it differs) or of the reference against the output itself (family output)",
        ),
        ("guard", "acts on the tone offset, inclusive"),
        ("loop_edge", "acts on the tone offset, inclusive; each channel has its own"),
        ("margin", "limit minus level; positive passes, zero passes"),
        ("sum", "contributions on one offset add as voltages in phase (worst case)"),
        ("unknown", "null, never a stand-in number; a known part of an unknown level is in known_level_dbc"),
        ("phase_error", "rms over the integration limits, both sidebands"),
    ]
}
