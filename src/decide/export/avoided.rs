//! Contiguous runs of bad channels.

use serde::Serialize;

use crate::assess::{ChannelResult, PlacementError, Rule, Verdict};
use crate::base::Frequency;

use super::words::RoundedHz;

/// A run of bad channels of one group with no other channel of the group between them.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct AvoidedRange {
    /// Group name.
    pub group: String,
    /// Group index from 0.
    pub group_index: usize,
    /// Lowest channel of the run, inclusive.
    #[serde(rename = "start_exact")]
    pub start: Frequency,
    /// Highest channel of the run, inclusive.
    #[serde(rename = "stop_exact")]
    pub stop: Frequency,
    /// `start` in integers.
    pub start_rounded: RoundedHz,
    /// `stop` in integers.
    pub stop_rounded: RoundedHz,
    /// Channels in the run.
    pub channels: u64,
    /// Names of the rules that make them bad, in order.
    pub rules: Vec<&'static str>,
    /// The rules in words.
    pub reason: String,
}

/// Returns the runs of bad channels, group by group, rising in frequency.
///
/// # Errors
/// `PlacementError::Exact` where a frequency cannot be rounded within 127 bits.
pub fn avoided_ranges(channels: &[&ChannelResult]) -> Result<Vec<AvoidedRange>, PlacementError> {
    let mut sorted = channels.to_vec();
    sorted.sort_by_key(|channel| (channel.group_index, channel.channel, channel.index));
    sorted
        .chunk_by(|a, b| a.group_index == b.group_index && a.verdict == Verdict::Bad && b.verdict == Verdict::Bad)
        .filter(|run| run.first().is_some_and(|channel| channel.verdict == Verdict::Bad))
        .filter_map(range_of)
        .collect()
}

fn range_of(run: &[&ChannelResult]) -> Option<Result<AvoidedRange, PlacementError>> {
    let (first, last) = (run.first()?, run.last()?);
    let rounded =
        |channel: Frequency| RoundedHz::of(channel).map_err(|source| PlacementError::Exact { channel, source });
    let (start_rounded, stop_rounded) = match (rounded(first.channel), rounded(last.channel)) {
        (Ok(start), Ok(stop)) => (start, stop),
        (Err(error), _) | (_, Err(error)) => return Some(Err(error)),
    };
    let fired = |rule: &Rule| {
        rule.verdict() == Verdict::Bad
            && run.iter().any(|channel| channel.reasons.iter().any(|reason| reason.rule == *rule))
    };
    let rules: Vec<Rule> = Rule::ALL.into_iter().filter(fired).collect();
    Some(Ok(AvoidedRange {
        group: first.group.clone(),
        group_index: first.group_index,
        start: first.channel,
        stop: last.channel,
        start_rounded,
        stop_rounded,
        channels: run.len() as u64,
        rules: rules.iter().map(|rule| rule.name()).collect(),
        reason: rules.iter().map(|rule| rule.sentence()).collect::<Vec<_>>().join("; "),
    }))
}
