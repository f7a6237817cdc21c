//! One line of the risk table: what is wrong, how far, and what to do.

use super::rows::{boundary_text, known_text, level_text, limit_text, margin_text, mark_of, rules_text, shortened};
use crate::assess::{ChannelResult, Tone};
use crate::decide::dossier::Dossier;
use crate::decide::measure_list::{Line, MeasureList, line_at};
use crate::decide::remedy::Cure;
use crate::report::figures::{decibel, with_prefix};

/// Longest reason or name in a cell, in characters.
const CELL_CHARS: usize = 160;

/// One bad or marginal channel.
pub(crate) struct Risk {
    /// Group and index in the plan.
    pub at: String,
    pub channel: String,
    pub group: String,
    pub verdict: &'static str,
    pub mark: &'static str,
    pub rules: String,
    /// The deciding tone, or why there is none.
    pub mechanism: String,
    /// Its parts, each with its level; unknown ones with the reason.
    pub parts: Vec<String>,
    /// Offset, and whether it lies inside the loop.
    pub offset: String,
    pub inside: &'static str,
    pub level: String,
    pub limit: String,
    pub margin: String,
    /// The cheapest cure with what it gives.
    pub cure: String,
    /// What to measure.
    pub measure: String,
}

/// Returns the risk of a channel.
pub(super) fn risk(channel: &ChannelResult, dossier: &Dossier) -> Risk {
    let tone = channel.worst_tone();
    let dash = || "–".to_owned();
    let reason = || channel.reasons.first().map_or_else(dash, |reason| shortened(&reason.text, CELL_CHARS));
    Risk {
        at: format!("{}/{}", channel.group_index, channel.index),
        channel: channel.channel.to_string(),
        group: shortened(&channel.group, 60),
        verdict: channel.verdict.word(),
        mark: mark_of(channel.verdict),
        rules: rules_text(channel),
        mechanism: tone.map_or_else(reason, |tone| shortened(&tone.label, 60)),
        parts: tone.map_or_else(Vec::new, parts),
        offset: tone.map_or_else(dash, |tone| with_prefix(tone.offset_hz, "Hz", 6)),
        inside: match tone {
            None => "",
            Some(tone) if tone.inside_loop => "inside the loop",
            Some(_) => "outside the loop",
        },
        level: tone.map_or_else(dash, |tone| match known_text(tone) {
            Some(known) => format!("{}, known part {known}", level_text(tone)),
            None => level_text(tone),
        }),
        limit: tone.map_or_else(dash, limit_text),
        margin: tone.map_or_else(dash, margin_text),
        cure: cure_text(channel, dossier),
        measure: measure_text(channel, tone, dossier.measures.as_ref()),
    }
}

/// Returns the parts of a tone, strongest first, then the unknown ones.
fn parts(tone: &Tone) -> Vec<String> {
    let mut known: Vec<(&str, f64)> = tone.contributions.known().collect();
    known.sort_by(|a, b| b.1.total_cmp(&a.1));
    let known = known.into_iter().map(|(name, level)| format!("{name} {}", decibel(level)));
    known.chain(tone.unknown.iter().map(|why| format!("unknown: {}", shortened(why, CELL_CHARS)))).collect()
}

fn cure_text(channel: &ChannelResult, dossier: &Dossier) -> String {
    let Some(remedy) = &dossier.remedy else { return "not looked for".to_owned() };
    let own = |cures: &&crate::decide::remedy::ChannelCures| {
        (cures.before.group_index, cures.before.index) == (channel.group_index, channel.index)
    };
    let Some(cure) = remedy.channels.iter().find(own).and_then(|cures| cures.cures.first()) else {
        return "none within the plan's alternatives".to_owned();
    };
    format!("{}: {}{}", cure.words(), cure.after.verdict.word(), after_text(cure))
}

fn after_text(cure: &Cure) -> String {
    let margin = cure.after.worst_tone().filter(|tone| tone.level_dbc.is_some()).and_then(|tone| tone.margin_db);
    margin.map_or_else(String::new, |margin| format!(", margin {} dB", decibel(margin)))
}

/// Returns what to measure: the line of the list of measurements, else the deciding tone.
fn measure_text(channel: &ChannelResult, tone: Option<&Tone>, list: Option<&MeasureList>) -> String {
    let listed = list.and_then(|list| {
        list.channels
            .iter()
            .find(|c| c.channel == channel.channel && c.group == channel.group && c.index == channel.index)
    });
    let told = |line: &Line| {
        let expected = match line.expected_dbc {
            Some(level) => format!("expect {} dBc", decibel(level)),
            None => "level unknown".to_owned(),
        };
        format!("± {}, RBW {}, {expected}", with_prefix(line.offset_hz, "Hz", 6), with_prefix(line.rbw_hz, "Hz", 3))
    };
    match (listed, tone) {
        (Some(listed), _) => {
            let lines: Vec<String> = listed.lines.iter().map(told).collect();
            format!("on the shortest list: {}", lines.join("; "))
        }
        (None, Some(tone)) => told(&line_at(channel, tone.offset_hz, &tone.label, None)),
        (None, None) if channel.legal => format!("nearest boundary {}", boundary_text(channel)),
        (None, None) => "nothing: no legal word".to_owned(),
    }
}
