//! What is counted over the channels while they pass.

use std::collections::BTreeMap;

use crate::assess::{ChannelResult, Rule, Setup, Verdict};

use super::result::{LoopSummary, Range3, Summary};

/// Counts and ranges over channels; tallies of parts add to that of the whole.
#[derive(Debug, Default)]
pub(super) struct Tally {
    summary: Summary,
    warnings: BTreeMap<String, u64>,
    unity_gain_hz: Option<(f64, f64)>,
    phase_margin_deg: Option<(f64, f64)>,
}

/// Returns the range that holds both.
fn joined(a: Option<(f64, f64)>, b: Option<(f64, f64)>) -> Option<(f64, f64)> {
    match (a, b) {
        (Some(a), Some(b)) => Some((a.0.min(b.0), a.1.max(b.1))),
        (range, None) | (None, range) => range,
    }
}

impl Tally {
    /// Counts one channel.
    pub(super) fn count(&mut self, channel: &ChannelResult) {
        let summary = &mut self.summary;
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
        for warning in &channel.warnings {
            match self.warnings.get_mut(warning) {
                Some(count) => *count += 1,
                None => {
                    self.warnings.insert(warning.clone(), 1);
                }
            }
        }
        if channel.legal {
            let point = |value: Option<f64>| value.map(|value| (value, value));
            self.unity_gain_hz = joined(self.unity_gain_hz, point(channel.unity_gain_hz));
            self.phase_margin_deg = joined(self.phase_margin_deg, point(channel.phase_margin_deg));
        }
    }

    /// Adds the tally of other channels.
    pub(super) fn add(&mut self, other: Self) {
        let (mine, theirs) = (&mut self.summary, other.summary);
        mine.channels += theirs.channels;
        mine.clear += theirs.clear;
        mine.marginal += theirs.marginal;
        mine.bad += theirs.bad;
        mine.illegal += theirs.illegal;
        mine.unknown_tones += theirs.unknown_tones;
        for (rule, count) in theirs.reasons {
            *mine.reasons.entry(rule).or_default() += count;
        }
        for (warning, count) in other.warnings {
            *self.warnings.entry(warning).or_default() += count;
        }
        self.unity_gain_hz = joined(self.unity_gain_hz, other.unity_gain_hz);
        self.phase_margin_deg = joined(self.phase_margin_deg, other.phase_margin_deg);
    }

    /// Returns the counts; every rule has an entry.
    pub(super) fn into_summary(self) -> Summary {
        let mut summary = self.summary;
        for rule in Rule::ALL {
            summary.reasons.entry(rule).or_default();
        }
        summary
    }

    /// Returns each channel warning once, with the number of channels that share it.
    pub(super) fn shared_warnings(&self) -> Vec<String> {
        self.warnings
            .iter()
            .map(|(text, count)| match count {
                1 => format!("1 channel: {text}"),
                _ => format!("{count} channels: {text}"),
            })
            .collect()
    }

    /// Returns the loop over the legal channels.
    pub(super) fn loop_summary(&self, setup: &Setup) -> LoopSummary {
        let range = |design: Option<f64>, found: Option<(f64, f64)>| {
            let (minimum, maximum) = found?;
            Some(Range3 { minimum, design: design?, maximum })
        };
        let design = setup.design_response();
        LoopSummary {
            components: setup.components(),
            design_divider: Some(setup.design_divider()),
            unity_gain_hz: range(design.unity_gain_hz(), self.unity_gain_hz),
            phase_margin_deg: range(design.phase_margin_deg(), self.phase_margin_deg),
        }
    }
}
