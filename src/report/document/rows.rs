//! Channels as the page lists them: worst first, every figure as text, unknown said in words.

use std::cmp::Ordering;

use crate::assess::{ChannelResult, Rule, Tone, Verdict};
use crate::report::columns::rules_fired;
use crate::report::figures::{decibel, significant, with_prefix};

/// Longest free text of a table cell, in characters.
const CELL_CHARS: usize = 160;

/// What the page says where a figure is unknown.
pub(crate) const UNKNOWN: &str = "unknown";

/// One channel as text.
#[derive(Debug, Clone)]
pub(crate) struct Row {
    pub at: String,
    pub verdict: &'static str,
    pub mark: &'static str,
    pub group: String,
    pub channel: String,
    pub word: String,
    pub boundary: String,
    pub tone: String,
    pub offset: String,
    pub level: String,
    pub known: Option<String>,
    pub limit: String,
    pub margin: String,
    pub phase: String,
    pub rules: String,
    pub reasons: Vec<String>,
    pub more_reasons: usize,
    pub doubts: Vec<String>,
}

/// Returns the positions of the channels, worst first: no legal word, then by verdict and smallest margin of the worst
/// tone, channels without a margin after those with one, in plan order where nothing else decides.
pub(crate) fn worst_first(channels: &[ChannelResult]) -> Vec<usize> {
    let margins: Vec<Option<f64>> =
        channels.iter().map(|channel| channel.worst_tone().and_then(|tone| tone.margin_db)).collect();
    let mut order: Vec<usize> = (0..channels.len()).collect();
    order.sort_by(|a, b| {
        let (left, right) = (&channels[*a], &channels[*b]);
        let by_margin = match (margins[*a], margins[*b]) {
            (Some(left), Some(right)) => left.total_cmp(&right),
            (Some(_), None) => Ordering::Less,
            (None, Some(_)) => Ordering::Greater,
            (None, None) => Ordering::Equal,
        };
        left.legal.cmp(&right.legal).then(right.verdict.cmp(&left.verdict)).then(by_margin).then(a.cmp(b))
    });
    order
}

/// Returns text shortened to what a cell holds; the ellipsis says that something is missing.
pub(crate) fn shortened(text: &str, longest: usize) -> String {
    if text.chars().count() <= longest {
        return text.to_owned();
    }
    text.chars().take(longest - 1).chain(['…']).collect()
}

/// Returns the shape that stands for a verdict in tables and plots.
pub(crate) fn mark_of(verdict: Verdict) -> &'static str {
    match verdict {
        Verdict::Clear => "●",
        Verdict::Marginal => "▲",
        Verdict::Bad => "■",
    }
}

/// Returns a channel as text with at most `reasons` reasons.
pub(crate) fn row(channel: &ChannelResult, reasons: usize) -> Row {
    let tone = channel.worst_tone();
    let shown = |show: &dyn Fn(&Tone) -> String| tone.map_or_else(|| "–".to_owned(), show);
    Row {
        at: format!("{}/{}", channel.group_index, channel.index),
        verdict: channel.verdict.word(),
        mark: mark_of(channel.verdict),
        group: shortened(&channel.group, 60),
        channel: channel.channel.to_string(),
        word: word_text(channel),
        boundary: boundary_text(channel),
        tone: shown(&|tone| shortened(&tone.label, 60)),
        offset: shown(&|tone| with_prefix(tone.offset_hz, "Hz", 6)),
        level: shown(&level_text),
        known: tone.and_then(known_text),
        limit: shown(&limit_text),
        margin: shown(&margin_text),
        phase: phase_text(channel),
        rules: rules_text(channel),
        reasons: channel
            .reasons
            .iter()
            .take(reasons)
            .map(|reason| format!("{} {}", reason.rule.name(), shortened(&reason.text, CELL_CHARS)))
            .collect(),
        more_reasons: channel.reasons.len().saturating_sub(reasons),
        doubts: channel.warnings.iter().take(1).map(|doubt| shortened(doubt, CELL_CHARS)).collect(),
    }
}

/// Returns the rules that fired, with how often: `B2 ×5 M2`.
pub(super) fn rules_text(channel: &ChannelResult) -> String {
    let shown = |(rule, often): (Rule, usize)| match often {
        1 => rule.name().to_owned(),
        _ => format!("{} ×{often}", rule.name()),
    };
    rules_fired(channel).into_iter().map(shown).collect::<Vec<_>>().join(" ")
}

fn word_text(channel: &ChannelResult) -> String {
    match (channel.n, channel.k, channel.m) {
        (Some(n), Some(0), _) => n.to_string(),
        (Some(n), Some(k), Some(m)) => format!("{n} + {k}/{m}"),
        _ => "none".to_owned(),
    }
}

pub(super) fn boundary_text(channel: &ChannelResult) -> String {
    match &channel.boundary {
        None => "–".to_owned(),
        Some(near) => {
            let family = if near.family == "comparison" { String::new() } else { format!(" ({})", near.family) };
            format!("{}/{}{family}: {}", near.p, near.q, with_prefix(near.tone_offset_hz, "Hz", 6))
        }
    }
}

pub(super) fn level_text(tone: &Tone) -> String {
    tone.level_dbc.map_or_else(|| UNKNOWN.to_owned(), decibel)
}

pub(super) fn limit_text(tone: &Tone) -> String {
    tone.limit_dbc.map_or_else(|| "none".to_owned(), decibel)
}

/// Returns the known part of a level that is not known in full.
pub(super) fn known_text(tone: &Tone) -> Option<String> {
    tone.known_level_dbc.filter(|_| tone.level_dbc.is_none()).map(decibel)
}

/// A margin of the known part only bounds the true one: more level can only take margin away.
pub(super) fn margin_text(tone: &Tone) -> String {
    match (tone.margin_db, tone.level_dbc) {
        (Some(margin), Some(_)) => decibel(margin),
        (Some(margin), None) => format!("≤ {}", decibel(margin)),
        (None, _) => UNKNOWN.to_owned(),
    }
}

fn phase_text(channel: &ChannelResult) -> String {
    match (channel.phase_error_with_tones_deg, channel.phase_error_known_deg) {
        (Some(phase), _) => significant(phase, 4),
        (None, Some(known)) => format!("≥ {}", significant(known, 4)),
        (None, None) => UNKNOWN.to_owned(),
    }
}
