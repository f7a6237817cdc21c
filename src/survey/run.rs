//! All channels in parallel, in plan order.

use std::collections::BTreeMap;

use rayon::prelude::*;

use crate::assess::{AssessError, ChannelResult, Rule, Setup, Verdict};
use crate::plan::Plan;

use super::method_check::check_method;
use super::result::{LoopSummary, Range3, Summary, SurveyResult};
use super::spectrum_view::spectrum_of;
use super::table_check::check_tables;

/// Channels from which tables of loop, curve and noise pay.
const TABULATED_CHANNELS: u64 = 64;

/// Surveys every channel of a plan; `done` is called with the number of channels finished since the last call.
///
/// The threads are those of the rayon pool the caller is in.
///
/// # Errors
/// `AssessError` when the plan as a whole is refused: no legal channel, an unstable loop, exact overflow.
pub fn survey(plan: &Plan, done: &(dyn Fn(u64) + Sync)) -> Result<SurveyResult, AssessError> {
    let count: u64 = plan.groups.iter().map(|group| group.channels.len()).sum();
    let setup = Setup::new(plan)?;
    let setup = if count >= TABULATED_CHANNELS { setup.tabulated() } else { setup };
    let positions: Vec<(usize, u64)> = plan
        .groups
        .iter()
        .enumerate()
        .flat_map(|(group, channels)| (0..channels.channels.len()).map(move |index| (group, index)))
        .collect();
    let channels = positions
        .par_iter()
        .map_init(
            || setup.scratch(),
            |scratch, (group, index)| {
                let result = setup.assess_index(*group, *index, scratch);
                done(1);
                result
            },
        )
        .collect::<Result<Vec<ChannelResult>, AssessError>>()?;
    let mut warnings = plan.warnings.clone();
    warnings.extend(setup.warnings().iter().cloned());
    warnings.extend(shared_warnings(&channels));
    let (mut method_check, doubts) = check_method(&setup, &channels)?;
    warnings.extend(doubts);
    if count >= TABULATED_CHANNELS {
        warnings.extend(check_tables(&setup, &channels, &mut method_check)?);
    }
    Ok(SurveyResult {
        assumptions: setup.assumptions(),
        conventions: conventions(),
        loop_summary: loop_summary(&setup, &channels),
        summary: summarise(&channels),
        method_check,
        spectrum: spectrum_of(&setup, &channels)?,
        plan: plan.clone(),
        channels,
        warnings,
    })
}

/// Returns the counts over the channels; every rule has an entry.
#[must_use]
pub fn summarise(channels: &[ChannelResult]) -> Summary {
    let mut summary = Summary { reasons: Rule::ALL.into_iter().map(|rule| (rule, 0)).collect(), ..Summary::default() };
    for channel in channels {
        summary.channels += 1;
        match channel.verdict {
            Verdict::Clear => summary.clear += 1,
            Verdict::Marginal => summary.marginal += 1,
            Verdict::Bad => summary.bad += 1,
        }
        summary.illegal += u64::from(!channel.legal);
        summary.unknown_tones += channel.unknown_tones as u64;
        for rule in Rule::ALL {
            if channel.reasons.iter().any(|reason| reason.rule == rule) {
                *summary.reasons.entry(rule).or_default() += 1;
            }
        }
    }
    summary
}

/// Returns each channel warning once, with the number of channels that share it.
fn shared_warnings(channels: &[ChannelResult]) -> Vec<String> {
    let mut counts: BTreeMap<&str, u64> = BTreeMap::new();
    for warning in channels.iter().flat_map(|channel| &channel.warnings) {
        *counts.entry(warning).or_default() += 1;
    }
    counts
        .into_iter()
        .map(|(text, count)| match count {
            1 => format!("1 channel: {text}"),
            _ => format!("{count} channels: {text}"),
        })
        .collect()
}

fn loop_summary(setup: &Setup, channels: &[ChannelResult]) -> LoopSummary {
    let range = |design: Option<f64>, of: fn(&ChannelResult) -> Option<f64>| {
        let values: Vec<f64> = channels.iter().filter(|channel| channel.legal).filter_map(of).collect();
        let minimum = values.iter().copied().reduce(f64::min)?;
        let maximum = values.iter().copied().reduce(f64::max)?;
        Some(Range3 { minimum, design: design?, maximum })
    };
    let design = setup.design_response();
    LoopSummary {
        components: setup.components(),
        design_divider: Some(setup.design_divider()),
        unity_gain_hz: range(design.unity_gain_hz(), |channel| channel.unity_gain_hz),
        phase_margin_deg: range(design.phase_margin_deg(), |channel| channel.phase_margin_deg),
    }
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
