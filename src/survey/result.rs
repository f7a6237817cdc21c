//! The result of a survey: the one structure that every writer reads.

use std::collections::BTreeMap;

use crate::assess::{ChannelResult, Rule, SpectrumView};
use crate::base::Assumption;
use crate::loop_model::FilterComponents;
use crate::plan::Plan;

/// A value over the plan: smallest, at the design divider, largest.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Range3 {
    /// Smallest over the legal channels.
    pub minimum: f64,
    /// At the design divider.
    pub design: f64,
    /// Largest over the legal channels.
    pub maximum: f64,
}

/// The one filter of the plan and what it does over the channels.
#[derive(Debug, Clone, serde::Serialize)]
pub struct LoopSummary {
    /// The components; `None` with a measured response table.
    pub components: Option<FilterComponents>,
    /// N + K/M of the design.
    pub design_divider: Option<f64>,
    /// Open-loop unity-gain frequency \[Hz\].
    pub unity_gain_hz: Option<Range3>,
    /// Phase margin \[deg\].
    pub phase_margin_deg: Option<Range3>,
}

/// Counts over the plan.
#[derive(Debug, Clone, Default, serde::Serialize)]
pub struct Summary {
    /// All channels.
    pub channels: u64,
    /// Channels with verdict clear.
    pub clear: u64,
    /// Channels with verdict marginal.
    pub marginal: u64,
    /// Channels with verdict bad.
    pub bad: u64,
    /// Channels without a legal word (they are bad as well).
    pub illegal: u64,
    /// Listed tones of unknown level.
    pub unknown_tones: u64,
    /// Channels on which each rule fired; every rule has an entry.
    #[serde(serialize_with = "by_name")]
    pub reasons: BTreeMap<Rule, u64>,
}

fn by_name<S: serde::Serializer>(map: &BTreeMap<Rule, u64>, serializer: S) -> Result<S::Ok, S::Error> {
    serializer.collect_map(map.iter().map(|(rule, count)| (rule.name(), count)))
}

/// The run's own check of its fast path against exact periods.
#[derive(Debug, Clone, Default, serde::Serialize)]
pub struct MethodCheck {
    /// Channels compared.
    pub channels: u64,
    /// Largest difference of a compared line; `None` when none was compared.
    pub worst_difference_db: Option<f64>,
    /// Channels computed both from the plan's tables and without them.
    pub table_channels: u64,
    /// Largest difference of a tone's level between the two \[dB\]; `None` when none was compared.
    pub table_level_difference_db: Option<f64>,
    /// Largest difference of the noise between the two \[dB\]; `None` when none was compared.
    pub table_noise_difference_db: Option<f64>,
}

/// Everything a survey found.
#[derive(Debug, Clone)]
pub struct SurveyResult {
    /// The checked plan.
    pub plan: Plan,
    /// Every input the result rests on.
    pub assumptions: Vec<Assumption>,
    /// Conventions in words: (name, sentence).
    pub conventions: Vec<(&'static str, &'static str)>,
    /// The loop over the plan.
    pub loop_summary: LoopSummary,
    /// Counts.
    pub summary: Summary,
    /// The run's own check.
    pub method_check: MethodCheck,
    /// Channels in plan order (all of them; writers thin them out when asked).
    pub channels: Vec<ChannelResult>,
    /// One modulator spectrum: that of the worst legal channel.
    pub spectrum: Option<SpectrumView>,
    /// Doubts about the whole plan.
    pub warnings: Vec<String>,
}
