//! The modulators that were weighed, as rows.

use crate::decide::compare::{Comparison, RANKING_RULE, Ranked};
use crate::report::figures::{decibel, significant};

/// Places that a report shows.
const SHOWN: usize = 8;

/// One option.
pub(crate) struct OptionRow {
    pub place: usize,
    pub name: String,
    pub bad: String,
    pub marginal: String,
    pub worst_margin: String,
    pub noise: String,
    pub reason: String,
}

pub(super) fn option_rows(comparison: &Comparison) -> Vec<OptionRow> {
    let shown = |value: Option<f64>, show: fn(f64) -> String| value.map_or_else(|| "unknown".to_owned(), show);
    let row = |entry: &Ranked| OptionRow {
        place: entry.place,
        name: entry.option.name(),
        bad: entry.figures.bad.to_string(),
        marginal: entry.figures.marginal.to_string(),
        worst_margin: shown(entry.figures.worst_margin_db, decibel),
        noise: shown(entry.figures.modulator_phase_deg, |deg| significant(deg, 3)),
        reason: entry.reason.clone(),
    };
    comparison.ranked.iter().take(SHOWN).map(row).collect()
}

/// Returns how the options were tried and ranked.
pub(super) fn note(comparison: Option<&Comparison>) -> String {
    let Some(comparison) = comparison else {
        return "Not compared in this report; the command compare does.".to_owned();
    };
    let sample = &comparison.sample;
    let more = comparison.ranked.len().saturating_sub(SHOWN);
    let rest = if more > 0 { format!(" {more} more places are left to compare.") } else { String::new() };
    format!("Tried on {} of {} channels ({}). Ranking: {RANKING_RULE}.{rest}", sample.channels, sample.of, sample.rule)
}
