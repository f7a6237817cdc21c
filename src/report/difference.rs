//! Two surveys compared: text, JSON and a page from one result.

use askama::Template;

use super::ReportError;
use super::figures::{decibel, with_prefix};
use super::json::json_text;
use super::policy::policy;
use crate::decide::diff::{Cause, ChannelChange, Difference, InputChange, Side, ToneChange, readable};

/// Channels that the text lists; the rest is counted.
const TEXT_CHANNELS: usize = 60;
/// Tones that the text lists for a channel; the rest is counted.
const TEXT_TONES: usize = 6;
/// Channels that the page lists; the rest is counted.
const PAGE_CHANNELS: usize = 2000;
/// Characters of a value that are shown to readers; JSON holds it in full.
const SHOWN_CHARACTERS: usize = 120;

/// Returns a value cut for readers; a value that is not there is said.
fn shown(value: Option<&String>) -> String {
    match value {
        None => "not given".to_owned(),
        Some(text) if text.chars().count() > SHOWN_CHARACTERS => {
            format!("{}…", text.chars().take(SHOWN_CHARACTERS).collect::<String>())
        }
        Some(text) => text.clone(),
    }
}

/// Returns what changed of an input: each validated key with its value before and after.
fn input_lines(input: &InputChange) -> Vec<String> {
    let note = match (input.follows, input.reaches_channels) {
        (true, _) => " (a default in both plans: follows from another input)",
        (false, false) => " (does not reach the channels)",
        (false, true) => "",
    };
    input
        .keys
        .iter()
        .map(|key| format!("{}: {} → {}{note}", key.key, shown(key.old.as_ref()), shown(key.new.as_ref())))
        .collect()
}

/// Returns the cause in one sentence.
fn cause_sentence(cause: &Cause) -> String {
    match cause {
        Cause::NothingToExplain => "No channel changed.".to_owned(),
        Cause::OneInput { input } => format!("One input changed, {input}: the changes follow from it."),
        Cause::SeveralInputs { inputs, version_changed } => {
            let version = if *version_changed { ", and so did the program's version" } else { "" };
            format!(
                "Several things changed: {}{version}. Which of them caused a change cannot be told from two surveys; \
                 change one at a time to find out.",
                inputs.join(", ")
            )
        }
        Cause::ProgramVersion => "No input changed, the program's version did: see its changelog.".to_owned(),
        Cause::Unknown => {
            "No input of the channels and no version changed: the cause is unknown (files beside the plan, or a survey \
             that was edited)."
                .to_owned()
        }
    }
}

/// Returns the counts in one sentence.
fn counts_sentence(difference: &Difference) -> String {
    let counts = &difference.counts;
    format!(
        "{} channels in both: {} verdicts changed ({} worse, {} better), {} words, tones on {}; {} channels added, {} removed.",
        counts.common,
        counts.verdict_changed,
        counts.worse,
        counts.better,
        counts.word_changed,
        counts.tones_changed,
        counts.added,
        counts.removed
    )
}

fn level(value: Option<f64>) -> String {
    value.map_or_else(|| "unknown".to_owned(), |level| format!("{} dBc", decibel(level)))
}

/// Returns a tone change in words.
fn tone_sentence(tone: &ToneChange) -> String {
    let offset = |value: Option<f64>| value.map_or_else(|| "–".to_owned(), |hz| with_prefix(hz, "Hz", 8));
    let at = match (tone.old_offset_hz, tone.new_offset_hz) {
        (Some(old), Some(new)) if offset(Some(old)) != offset(Some(new)) => {
            format!("{} → {}", offset(Some(old)), offset(Some(new)))
        }
        (old, new) => offset(new.or(old)),
    };
    let what = match tone.change {
        "appeared" => format!("appeared, level {}", level(tone.new_level_dbc)),
        "gone" => format!("gone, level was {}", level(tone.old_level_dbc)),
        "moved" => format!("moved, level {}", level(tone.new_level_dbc)),
        "known part" => "level unknown, its known part changed".to_owned(),
        "level" => format!("{} → {}", level(tone.old_level_dbc), level(tone.new_level_dbc)),
        other => format!("{other}: {} → {}", level(tone.old_level_dbc), level(tone.new_level_dbc)),
    };
    let by = tone.change_db.map_or_else(String::new, |db| format!(" ({} dB)", decibel(db)));
    let name =
        if tone.label.contains(&tone.origin) { tone.label.clone() } else { format!("{} {}", tone.origin, tone.label) };
    format!("{name} at {at}: {what}{by}")
}

fn word_sentence(change: &ChannelChange) -> String {
    let parts: Vec<String> =
        change.word.iter().map(|word| format!("{} {} → {}", word.key, word.old, word.new)).collect();
    parts.join(", ")
}

fn verdict_sentence(change: &ChannelChange) -> String {
    change
        .verdict
        .as_ref()
        .map_or_else(String::new, |verdict| format!("{} → {}", verdict.old.word(), verdict.new.word()))
}

/// Returns the changed channels with changed verdicts first, each part in plan order.
fn ranked(difference: &Difference) -> Vec<&ChannelChange> {
    let (first, rest): (Vec<_>, Vec<_>) = difference.channels.iter().partition(|change| change.verdict.is_some());
    first.into_iter().chain(rest).collect()
}

fn side_line(name: &str, side: &Side) -> String {
    format!(
        "{name}: {} ({}, Thornmap {}, plan SHA-256 {}), {} channels listed, {} left out",
        side.title, side.schema, side.version, side.plan_sha256, side.listed, side.omitted
    )
}

/// Returns the comparison for a terminal.
#[must_use]
pub fn difference_text(difference: &Difference) -> String {
    let mut text = format!("{}\n{}\n", side_line("old", &difference.old), side_line("new", &difference.new));
    for warning in &difference.warnings {
        text.push_str(&format!("warning: {warning}\n"));
    }
    text.push_str(&format!("\n{}\n{}\n", counts_sentence(difference), cause_sentence(&difference.cause)));
    for line in difference.inputs.iter().flat_map(input_lines) {
        text.push_str(&format!("  {line}\n"));
    }
    for change in ranked(difference).into_iter().take(TEXT_CHANNELS) {
        let head = format!("\n{} ({}): {}", readable(&change.channel_exact), change.group, verdict_sentence(change));
        text.push_str(&format!("{}\n", head.trim_end_matches([':', ' '])));
        for reason in &change.new_reasons {
            text.push_str(&format!("  now    {reason}\n"));
        }
        for reason in &change.old_reasons {
            text.push_str(&format!("  before {reason}\n"));
        }
        if !change.word.is_empty() {
            text.push_str(&format!("  word   {}\n", word_sentence(change)));
        }
        for tone in change.tones.iter().take(TEXT_TONES) {
            text.push_str(&format!("  tone   {}\n", tone_sentence(tone)));
        }
        if change.tones.len() > TEXT_TONES {
            text.push_str(&format!("  tone   and {} more\n", change.tones.len() - TEXT_TONES));
        }
    }
    if difference.channels.len() > TEXT_CHANNELS {
        text.push_str(&format!(
            "\nand {} more changed channels; --json and --html hold them\n",
            difference.channels.len() - TEXT_CHANNELS
        ));
    }
    for (name, list) in [("added", &difference.added), ("removed", &difference.removed)] {
        for lone in list.iter().take(TEXT_CHANNELS) {
            text.push_str(&format!(
                "{name}: {} ({}), {}\n",
                readable(&lone.channel_exact),
                lone.group,
                lone.verdict.word()
            ));
        }
        if list.len() > TEXT_CHANNELS {
            text.push_str(&format!("{name}: and {} more\n", list.len() - TEXT_CHANNELS));
        }
    }
    text
}

/// Returns the text of `diff --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn difference_json(difference: &Difference) -> Result<String, ReportError> {
    json_text("difference", difference).map(|text| format!("{text}\n"))
}

/// One row of the page's table.
struct Row {
    channel: String,
    group: String,
    verdict: String,
    reasons: Vec<String>,
    word: String,
    tones: Vec<String>,
}

#[derive(Template)]
#[template(path = "difference.html")]
struct Page<'a> {
    policy: String,
    css: String,
    title: &'a str,
    counts: String,
    cause: String,
    sides: [String; 2],
    warnings: &'a [String],
    inputs: Vec<String>,
    rows: Vec<Row>,
    any_rule: bool,
    any_word: bool,
    more: usize,
    lone: Vec<String>,
    conventions: &'a [&'static str],
    version: &'a str,
}

/// Returns the page of a comparison: self-contained, everything from the surveys escaped.
///
/// # Errors
/// `Page` where the template fails.
pub fn difference_html(difference: &Difference) -> Result<String, ReportError> {
    let css = include_str!("templates/report.css").replace('\r', "");
    let row = |change: &ChannelChange| Row {
        channel: readable(&change.channel_exact),
        group: change.group.clone(),
        verdict: verdict_sentence(change),
        reasons: change
            .new_reasons
            .iter()
            .map(|reason| format!("now {reason}"))
            .chain(change.old_reasons.iter().map(|reason| format!("before {reason}")))
            .collect(),
        word: word_sentence(change),
        tones: change.tones.iter().map(tone_sentence).collect(),
    };
    let lone = [("added", &difference.added), ("removed", &difference.removed)]
        .into_iter()
        .flat_map(|(name, list)| {
            list.iter().map(move |lone| {
                format!("{name}: {} ({}), {}", readable(&lone.channel_exact), lone.group, lone.verdict.word())
            })
        })
        .collect();
    let rows: Vec<Row> = ranked(difference).into_iter().take(PAGE_CHANNELS).map(row).collect();
    let page = Page {
        any_rule: rows.iter().any(|row| !row.reasons.is_empty()),
        any_word: rows.iter().any(|row| !row.word.is_empty()),
        policy: policy(&css, None),
        title: &difference.new.title,
        counts: counts_sentence(difference),
        cause: cause_sentence(&difference.cause),
        sides: [side_line("Old", &difference.old), side_line("New", &difference.new)],
        warnings: &difference.warnings,
        inputs: difference.inputs.iter().flat_map(input_lines).collect(),
        rows,
        more: difference.channels.len().saturating_sub(PAGE_CHANNELS),
        lone,
        conventions: &difference.conventions,
        version: difference.version,
        css,
    };
    Ok(page.render()?)
}
