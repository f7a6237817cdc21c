//! Channels compared: verdict, word and tones.

use std::collections::{BTreeMap, BTreeSet};

use serde::Serialize;
use serde_json::Value;

use crate::assess::Verdict;
use crate::base::{Exact, parse_number};

use super::survey_file::{ChannelRecord, SurveyFile, ToneRecord};
use super::{Counts, Lone};

/// Level change from which a tone counts as changed, inclusive \[dB\].
const LEVEL_STEP_DB: f64 = 0.1;
/// What printing with four decimals may take from a difference that is exactly the step \[dB\].
const PRINTED_DB: f64 = 1e-6;
/// Offset change from which a tone counts as moved \[Hz\].
const OFFSET_STEP_HZ: f64 = 1e-3;

/// A value before and after.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Change<T> {
    /// Before.
    pub old: T,
    /// After.
    pub new: T,
}

/// One integer or setting of a word that changed, as text.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct WordChange {
    /// Its key in the survey.
    pub key: &'static str,
    /// Before, `null` for unknown.
    pub old: String,
    /// After, `null` for unknown.
    pub new: String,
}

/// A tone that changed.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ToneChange {
    /// What changed: `appeared`, `gone`, `level`, `became known`, `became unknown`, `known part` or `moved`.
    pub change: &'static str,
    /// Origin.
    pub origin: String,
    /// Label.
    pub label: String,
    /// Offset before \[Hz\].
    pub old_offset_hz: Option<f64>,
    /// Offset after \[Hz\].
    pub new_offset_hz: Option<f64>,
    /// Level before \[dBc\]; `None` where there was no tone or its level was unknown.
    pub old_level_dbc: Option<f64>,
    /// Level after \[dBc\]; `None` where there is no tone or its level is unknown.
    pub new_level_dbc: Option<f64>,
    /// Level after minus level before \[dB\] (known parts for `known part`); positive is stronger.
    pub change_db: Option<f64>,
}

/// A channel of both plans that changed.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct ChannelChange {
    /// Group name.
    pub group: String,
    /// Channel frequency, exact.
    pub channel_exact: String,
    /// Verdict before and after, where it changed.
    pub verdict: Option<Change<Verdict>>,
    /// Rules that fire now and did not before, each with its sentence.
    pub new_reasons: Vec<String>,
    /// Rules that fired before and do not now, each with its sentence.
    pub old_reasons: Vec<String>,
    /// Word changes.
    pub word: Vec<WordChange>,
    /// Tone changes, by label.
    pub tones: Vec<ToneChange>,
    /// Whether words and tones could be compared: a survey with flagged detail leaves out clear channels.
    pub compared_in_full: bool,
}

/// All that was found about channels.
pub(super) struct Found {
    pub counts: Counts,
    pub changed: Vec<ChannelChange>,
    pub added: Vec<Lone>,
    pub removed: Vec<Lone>,
}

/// Group name, exact frequency, and which of equals.
type Key = (String, String, usize);

/// Returns the channels of both surveys compared.
pub(super) fn changes(old: &SurveyFile, new: &SurveyFile) -> Found {
    let (before, after) = (by_key(old), by_key(new));
    let mut found = Found { counts: Counts::default(), changed: Vec::new(), added: Vec::new(), removed: Vec::new() };
    let lone = |channel: &ChannelRecord| Lone {
        group: channel.group.clone(),
        channel_exact: channel.channel_exact.clone(),
        verdict: channel.verdict,
    };
    let old_index: BTreeMap<&Key, &ChannelRecord> = before.iter().map(|(key, channel)| (key, *channel)).collect();
    let new_keys: BTreeSet<&Key> = after.iter().map(|(key, _)| key).collect();
    for (key, channel) in &after {
        match old_index.get(key) {
            Some(was) => found.changed.extend(changed(was, channel)),
            None if left_out(old, channel) => {
                found.changed.extend(verdict_only(channel, Verdict::Clear, channel.verdict))
            }
            None => {
                found.added.push(lone(channel));
                continue;
            }
        }
        found.counts.common += 1;
    }
    for (_, channel) in before.iter().filter(|(key, _)| !new_keys.contains(key)) {
        if left_out(new, channel) {
            found.counts.common += 1;
            found.changed.extend(verdict_only(channel, channel.verdict, Verdict::Clear));
        } else {
            found.removed.push(lone(channel));
        }
    }
    found.counts.added = found.added.len() as u64;
    found.counts.removed = found.removed.len() as u64;
    found
}

fn by_key(survey: &SurveyFile) -> Vec<(Key, &ChannelRecord)> {
    let mut seen: BTreeMap<(&str, &str), usize> = BTreeMap::new();
    survey
        .channels
        .iter()
        .map(|channel| {
            let often = seen.entry((&channel.group, &channel.channel_exact)).or_default();
            *often += 1;
            ((channel.group.clone(), channel.channel_exact.clone(), *often), channel)
        })
        .collect()
}

/// Returns whether a survey does not list a channel that its plan holds: clear, and left out.
fn left_out(survey: &SurveyFile, channel: &ChannelRecord) -> bool {
    survey.omitted > 0 && exact_hz(&channel.channel_exact).is_some_and(|hz| holds(&survey.plan, &channel.group, hz))
}

fn exact_hz(text: &str) -> Option<Exact> {
    parse_number(text.strip_suffix(" Hz")?).ok()
}

/// Returns whether a validated plan holds a channel.
fn holds(plan: &Value, group: &str, channel: Exact) -> bool {
    let groups = plan.get("groups").and_then(Value::as_array);
    groups.into_iter().flatten().filter(|entry| entry.get("name").and_then(Value::as_str) == Some(group)).any(|entry| {
        let text = |pointer: &str| entry.pointer(pointer).and_then(Value::as_str).and_then(exact_hz);
        if let Some(list) = entry.pointer("/channels/list").and_then(Value::as_array) {
            return list.iter().any(|member| member.as_str().and_then(exact_hz) == Some(channel));
        }
        let count = entry.pointer("/channels/raster/count").and_then(Value::as_u64);
        let (Some(first), Some(spacing), Some(count)) =
            (text("/channels/raster/first"), text("/channels/raster/spacing"), count)
        else {
            return false;
        };
        if channel == first {
            return true;
        }
        let steps = channel.minus(&first).and_then(|distance| distance.over(&spacing));
        steps.is_ok_and(|steps| steps.is_integer() && steps.sign() > 0 && steps.numerator() < i128::from(count))
    })
}

fn verdict_only(channel: &ChannelRecord, old: Verdict, new: Verdict) -> Option<ChannelChange> {
    let sentences = || channel.reasons.iter().map(sentence).collect();
    (old != new).then(|| ChannelChange {
        group: channel.group.clone(),
        channel_exact: channel.channel_exact.clone(),
        verdict: Some(Change { old, new }),
        new_reasons: if new == Verdict::Clear { Vec::new() } else { sentences() },
        old_reasons: if new == Verdict::Clear { sentences() } else { Vec::new() },
        word: Vec::new(),
        tones: Vec::new(),
        compared_in_full: false,
    })
}

fn sentence((rule, text): &(String, String)) -> String {
    format!("{rule}: {text}")
}

/// Returns what changed on a channel; `None` where nothing did.
fn changed(old: &ChannelRecord, new: &ChannelRecord) -> Option<ChannelChange> {
    let missing = |these: &ChannelRecord, those: &ChannelRecord| {
        let is_new = |(rule, _): &&(String, String)| those.reasons.iter().all(|(other, _)| other != rule);
        these.reasons.iter().filter(is_new).map(sentence).collect::<Vec<_>>()
    };
    let word: Vec<WordChange> = old
        .word
        .iter()
        .filter_map(|(key, was)| {
            let (_, is) = new.word.iter().find(|(other, _)| other == key)?;
            (was != is).then(|| WordChange { key, old: was.clone(), new: is.clone() })
        })
        .collect();
    let change = ChannelChange {
        group: new.group.clone(),
        channel_exact: new.channel_exact.clone(),
        verdict: (old.verdict != new.verdict).then_some(Change { old: old.verdict, new: new.verdict }),
        new_reasons: missing(new, old),
        old_reasons: missing(old, new),
        word,
        tones: tone_changes(&old.tones, &new.tones),
        compared_in_full: true,
    };
    let any = change.verdict.is_some() || !change.word.is_empty() || !change.tones.is_empty();
    any.then_some(change)
}

/// Returns the tones that appeared, went or changed; tones are matched by origin and label.
fn tone_changes(old: &[ToneRecord], new: &[ToneRecord]) -> Vec<ToneChange> {
    let (before, after) = (by_label(old), by_label(new));
    let keys: BTreeSet<_> = before.keys().chain(after.keys()).collect();
    keys.into_iter().filter_map(|key| tone_change(before.get(key).copied(), after.get(key).copied())).collect()
}

fn by_label(tones: &[ToneRecord]) -> BTreeMap<(&str, &str, usize), &ToneRecord> {
    let mut seen: BTreeMap<(&str, &str), usize> = BTreeMap::new();
    tones
        .iter()
        .map(|tone| {
            let often = seen.entry((&tone.origin, &tone.label)).or_default();
            *often += 1;
            ((tone.origin.as_str(), tone.label.as_str(), *often), tone)
        })
        .collect()
}

fn tone_change(old: Option<&ToneRecord>, new: Option<&ToneRecord>) -> Option<ToneChange> {
    let tone = new.or(old)?;
    let level = |tone: Option<&ToneRecord>| tone.and_then(|tone| tone.level_dbc);
    let known = |tone: Option<&ToneRecord>| tone.and_then(|tone| tone.known_level_dbc);
    let difference = |of: fn(&ToneRecord) -> Option<f64>| Some(new.and_then(of)? - old.and_then(of)?);
    let is_step = |change: Option<f64>| change.is_some_and(|change| change.abs() >= LEVEL_STEP_DB - PRINTED_DB);
    let of_level = difference(|tone| tone.level_dbc);
    let of_known = difference(|tone| tone.known_level_dbc);
    let moved = matches!((old, new), (Some(was), Some(is)) if (was.offset_hz - is.offset_hz).abs() >= OFFSET_STEP_HZ);
    let (change, change_db) = match (old, new) {
        (None, _) => ("appeared", None),
        (_, None) => ("gone", None),
        _ if is_step(of_level) => ("level", of_level),
        _ if level(old).is_none() && level(new).is_some() => ("became known", None),
        _ if level(old).is_some() && level(new).is_none() => ("became unknown", None),
        _ if level(new).is_none() && (is_step(of_known) || known(old).is_some() != known(new).is_some()) => {
            ("known part", of_known)
        }
        _ if moved => ("moved", of_level),
        _ => return None,
    };
    Some(ToneChange {
        change,
        origin: tone.origin.clone(),
        label: tone.label.clone(),
        old_offset_hz: old.map(|tone| tone.offset_hz),
        new_offset_hz: new.map(|tone| tone.offset_hz),
        old_level_dbc: level(old),
        new_level_dbc: level(new),
        change_db,
    })
}
