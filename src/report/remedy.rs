//! Remedies: text, CSV, JSON and a page from one result.

use askama::Template;
use serde_json::{Value, json};

use super::columns::inert;
use super::json::json_text;
use super::policy::policy;
use super::{ReportError, ReportFile};
use crate::assess::{ChannelResult, Tone};
use crate::base::Assumption;
use crate::decide::remedy::{ChannelCures, Criterion, Cure, Proof, Remedy, SettingSet};
use crate::plan::Plan;

/// Cures shown for a channel on a terminal and on the page; the JSON file has all.
const SHOWN_CURES: usize = 3;

const CAUTION: &str = "A prediction is no compliance measurement; transmitting needs a licence and your local rules decide; verify on hardware.";

/// Returns what a set of PFD settings is judged by, in words.
pub(super) fn criterion(criterion: Criterion) -> &'static str {
    match criterion {
        Criterion::Verdict => "the verdict of every channel with every setting",
        Criterion::Guard => {
            "position alone: a channel counts as bad without a legal word or with a tone of the PFD frequency inside the guard"
        }
    }
}

fn tone_words(tone: &Tone) -> String {
    let level = tone.known_level_dbc.map_or_else(|| "unknown level".to_owned(), |level| format!("{level:.1} dBc"));
    let margin = tone.margin_db.map_or_else(String::new, |margin| format!(", margin {margin:.1} dB"));
    format!("{} at {:.3} kHz, {level}{margin}", tone.label, tone.offset_hz / 1e3)
}

/// Returns the proof of a cure: word, nearest boundary, deciding tone.
fn proof(cure: &Cure) -> String {
    let after = &cure.after;
    let mut parts = Vec::new();
    if let (Some(n), Some(k), Some(m)) = (after.n, after.k, after.m) {
        parts.push(format!("N = {n}, K = {k}, M = {m}"));
    }
    match &after.boundary {
        Some(near) => parts.push(format!("nearest p/q {}/{} at {:.3} kHz", near.p, near.q, near.tone_offset_hz / 1e3)),
        None => parts.push("exact integer: no boundary tone".to_owned()),
    }
    if let Some(tone) = after.worst_tone() {
        parts.push(tone_words(tone));
    }
    parts.join("; ")
}

/// Returns the price of a cure beside its cost.
fn price(cure: &Cure) -> String {
    let mut parts = Vec::new();
    match cure.noise_change_db {
        Some(change) if change.abs() >= 0.005 => parts.push(format!("known phase error {change:+.2} dB")),
        Some(_) => parts.push("noise unchanged".to_owned()),
        None => parts.push("noise change unknown".to_owned()),
    }
    if let Some(level) = cure.reference_tone_dbc {
        parts.push(format!("reference tone {level:.1} dBc"));
    }
    if let Some(error_hz) = cure.after.error_hz {
        parts.push(format!("frequency error {error_hz:.3} Hz"));
    }
    if cure.output_shift_hz != 0.0 {
        parts.push(format!("output moves by {:.3} kHz", cure.output_shift_hz / 1e3));
    }
    if cure.retune {
        parts.push("the loop locks anew at another PFD frequency".to_owned());
    }
    parts.join(", ")
}

fn reasons(channel: &ChannelResult) -> String {
    channel.reasons.iter().map(|reason| format!("{:?}: {}", reason.rule, reason.text)).collect::<Vec<_>>().join("; ")
}

/// Returns how many flagged channels have a cure, in a sentence.
fn summary(remedy: &Remedy) -> String {
    let flagged = remedy.channels.len();
    let cured = remedy.channels.iter().filter(|channel| !channel.cures.is_empty()).count();
    let clear = remedy.channels.iter().filter(|channel| channel.cures.iter().any(Cure::is_clear)).count();
    match flagged {
        0 => "No channel is bad or marginal: there is nothing to cure.".to_owned(),
        _ => format!(
            "Of {flagged} bad and marginal channels {cured} have a cure within the alternatives; {clear} can be made clear."
        ),
    }
}

/// Returns the set and its certificate, in sentences.
pub(super) fn set_sentences(plan: &Plan, set: &SettingSet) -> Vec<String> {
    let names: Vec<String> = set
        .cover
        .members
        .iter()
        .filter_map(|s| set.tried.get(*s))
        .map(|tried| format!("{} (PFD {})", tried.setting.name(), tried.pfd))
        .collect();
    let total = plan.channel_count();
    let beyond = set.cover.beyond.len();
    let mut sentences = vec![match (names.len(), beyond) {
        (0, _) => format!("None of the {} settings serves any channel.", set.tried.len()),
        (_, 0) => format!("Smallest set that leaves no bad channel: {}.", names.join(" and ")),
        _ => format!(
            "No set leaves the plan without bad channels. Best set: {}; {beyond} of {total} channels stay bad, and with any set at least these do: no setting serves them.",
            names.join(" and ")
        ),
    }];
    if names.len() > 1 {
        sentences.push(match &set.cover.proof {
            Proof::Apart { channels } => format!(
                "Certificate: {} share no setting, so no smaller set serves them.",
                channels.iter().map(|place| channel_name(plan, *place)).collect::<Vec<_>>().join(" and ")
            ),
            Proof::Search { branches } => {
                format!("Certificate: every smaller set was refuted by a complete search of {branches} branches.")
            }
        });
        for (member, place) in set.cover.members.iter().zip(&set.cover.forced_by) {
            if let Some(tried) = set.tried.get(*member) {
                let channel = channel_name(plan, *place);
                sentences.push(format!("{} is forced by {channel}.", tried.setting.name()));
            }
        }
        sentences.push(format!(
            "Switches of setting along the channels: {} ({} if each channel took its first serving setting).",
            set.switches, set.switches_first_served
        ));
    }
    if set.left_out > 0 {
        sentences.push(format!("{} settings beyond the first {} were not tried.", set.left_out, set.tried.len()));
    }
    sentences
}

/// Returns a channel by its position in plan order.
fn channel_name(plan: &Plan, place: usize) -> String {
    let mut left = place as u64;
    for group in &plan.groups {
        let count = group.channels.len();
        if left < count {
            let channel = group.channels.get(left).map_or_else(String::new, |channel| channel.to_string());
            return format!("{} {channel}", group.name);
        }
        left -= count;
    }
    format!("channel {place}")
}

/// Returns the remedies for a terminal.
#[must_use]
pub fn remedy_text(plan: &Plan, remedy: &Remedy) -> String {
    let mut text = format!("{}\n{}\n", plan.identity.title, summary(remedy));
    let costs: Vec<String> = remedy.costs.iter().map(|(word, cost)| format!("{word} {cost}")).collect();
    text.push_str(&format!("costs: {} (--cost changes them)\n", costs.join(", ")));
    for channel in &remedy.channels {
        let before = &channel.before;
        let verdict = before.verdict.word();
        text.push_str(&format!("\n{} {} is {verdict}: {}\n", before.group, before.channel, reasons(before)));
        if channel.cures.is_empty() {
            text.push_str("  no cure within the alternatives\n");
        }
        for cure in channel.cures.iter().take(SHOWN_CURES) {
            text.push_str(&format!(
                "  {} -> {} (cost {})\n    proof: {}\n    price: {}\n",
                cure.words(),
                cure.after.verdict.word(),
                cure.cost,
                proof(cure),
                price(cure)
            ));
        }
        if channel.cures.len() > SHOWN_CURES {
            text.push_str(&format!("  and {} more in remedy.json\n", channel.cures.len() - SHOWN_CURES));
        }
    }
    text.push_str(&format!("\nPFD settings for the whole plan, by {}:\n", criterion(remedy.set.criterion)));
    for tried in &remedy.set.tried {
        text.push_str(&format!("  {:>7} bad with {} (PFD {})\n", tried.bad, tried.setting.name(), tried.pfd));
    }
    for sentence in set_sentences(plan, &remedy.set) {
        text.push_str(&format!("{sentence}\n"));
    }
    text.push_str(&format!("{CAUTION}\n"));
    text
}

fn cure_value(cure: &Cure) -> Value {
    let after = &cure.after;
    json!({
        "changes": cure.changes,
        "text": cure.words(),
        "cost": cure.cost,
        "verdict": after.verdict,
        "n": after.n,
        "k": after.k,
        "m": after.m,
        "pfd_hz": after.pfd_hz,
        "output_divider": after.output_divider,
        "achieved_hz": after.achieved_hz,
        "boundary": after.boundary,
        "worst_tone": after.worst_tone(),
        "reasons": after.reasons,
        "noise_change_db": cure.noise_change_db,
        "reference_tone_dbc": cure.reference_tone_dbc,
        "error_hz": after.error_hz,
        "output_shift_hz": cure.output_shift_hz,
        "retune": cure.retune,
    })
}

/// Returns the text of `remedy --json`.
///
/// # Errors
/// `NotFinite`, `Serialize`.
pub fn remedy_json(plan: &Plan, remedy: &Remedy) -> Result<String, ReportError> {
    let mut channels = Vec::with_capacity(remedy.channels.len());
    for channel in &remedy.channels {
        let before = &channel.before;
        channels.push(json!({
            "group": before.group,
            "group_index": before.group_index,
            "index": before.index,
            "channel_exact": before.channel,
            "verdict": before.verdict,
            "reasons": before.reasons.iter().map(|reason| &reason.text).collect::<Vec<_>>(),
            "cures": channel.cures.iter().map(cure_value).collect::<Vec<_>>(),
        }));
    }
    let document = json!({
        "schema": "thornmap.remedy/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "assumptions": remedy.assumptions,
        "costs": remedy.costs.iter().map(|(word, cost)| ((*word).to_owned(), json!(cost))).collect::<serde_json::Map<_, _>>(),
        "channels": channels,
        "set": remedy.set,
        "set_text": set_sentences(plan, &remedy.set),
        "criterion": criterion(remedy.set.criterion),
    });
    json_text("remedy", &document).map(|text| format!("{text}\n"))
}

fn remedy_csv(remedy: &Remedy) -> Result<Vec<u8>, ReportError> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    writer.write_record([
        "group",
        "channel",
        "verdict",
        "cure",
        "cost",
        "verdict_after",
        "n",
        "k",
        "m",
        "reference_hz",
        "doubler",
        "reference_divider",
        "output_divider",
        "worst_margin_db",
        "noise_change_db",
        "error_hz",
        "retune",
    ])?;
    let whole = |value: Option<String>| value.unwrap_or_default();
    let figure = |value: Option<f64>| value.map_or_else(String::new, |value| format!("{value:.3}"));
    for channel in &remedy.channels {
        let before = &channel.before;
        let head = [inert(before.group.clone()), before.channel.to_string(), before.verdict.word().to_owned()];
        if channel.cures.is_empty() {
            writer.write_record(head.iter().cloned().chain(vec![String::new(); 14]))?;
        }
        for cure in &channel.cures {
            let after = &cure.after;
            let rest = [
                cure.words(),
                cure.cost.to_string(),
                after.verdict.word().to_owned(),
                whole(after.n.map(|n| n.to_string())),
                whole(after.k.map(|k| k.to_string())),
                whole(after.m.map(|m| m.to_string())),
                format!("{}", after.reference_hz),
                after.doubler.to_string(),
                after.reference_divider.to_string(),
                whole(after.output_divider.map(|p| p.to_string())),
                figure(after.worst_tone().and_then(|tone| tone.margin_db)),
                figure(cure.noise_change_db),
                figure(after.error_hz),
                cure.retune.to_string(),
            ];
            writer.write_record(head.iter().cloned().chain(rest))?;
        }
    }
    writer.into_inner().map_err(|error| ReportError::Csv(error.into_error().into()))
}

/// One channel on the page.
struct Patient {
    name: String,
    verdict: &'static str,
    reasons: String,
    cures: Vec<[String; 5]>,
    more: usize,
}

#[derive(Template)]
#[template(path = "remedy.html")]
struct Page<'a> {
    policy: String,
    css: String,
    title: &'a str,
    summary: String,
    patients: Vec<Patient>,
    costs: Vec<(&'static str, f64)>,
    criterion: &'static str,
    tried: Vec<[String; 3]>,
    sentences: Vec<String>,
    map: Vec<[String; 4]>,
    assumptions: &'a [Assumption],
    caution: &'static str,
    plan_sha256: &'a str,
    version: &'a str,
}

fn patient(channel: &ChannelCures) -> Patient {
    Patient {
        name: format!("{} {}", channel.before.group, channel.before.channel),
        verdict: channel.before.verdict.word(),
        reasons: reasons(&channel.before),
        cures: channel
            .cures
            .iter()
            .take(SHOWN_CURES)
            .map(|cure| {
                let verdict = cure.after.verdict.word().to_owned();
                [cure.words(), cure.cost.to_string(), verdict, proof(cure), price(cure)]
            })
            .collect(),
        more: channel.cures.len().saturating_sub(SHOWN_CURES),
    }
}

/// Returns the runs of the map as rows: group, first and last channel, setting.
fn map_rows(plan: &Plan, set: &SettingSet) -> Vec<[String; 4]> {
    set.map
        .iter()
        .map(|run| {
            let group = &plan.groups[run.group_index];
            let at = |index| group.channels.get(index).map_or_else(String::new, |channel| channel.to_string());
            let setting = run
                .setting
                .and_then(|s| set.tried.get(s))
                .map_or_else(|| "none serves: stays bad".to_owned(), |tried| tried.setting.name());
            [group.name.clone(), at(run.first_index), at(run.last_index), setting]
        })
        .collect()
}

fn page(plan: &Plan, remedy: &Remedy) -> Result<String, ReportError> {
    let css = include_str!("templates/report.css").replace('\r', "");
    let page = Page {
        policy: policy(&css, None),
        title: &plan.identity.title,
        summary: summary(remedy),
        patients: remedy.channels.iter().map(patient).collect(),
        costs: remedy.costs.clone(),
        criterion: criterion(remedy.set.criterion),
        tried: remedy
            .set
            .tried
            .iter()
            .map(|tried| [tried.setting.name(), tried.pfd.to_string(), tried.bad.to_string()])
            .collect(),
        sentences: set_sentences(plan, &remedy.set),
        map: map_rows(plan, &remedy.set),
        assumptions: &remedy.assumptions,
        caution: CAUTION,
        plan_sha256: &plan.sha256,
        version: env!("CARGO_PKG_VERSION"),
        css,
    };
    Ok(page.render()?)
}

/// Returns `remedy.html`, `remedy.csv` and `remedy.json`.
///
/// # Errors
/// `ReportError` where a writer fails or a figure is not finite.
pub fn remedy_files(plan: &Plan, remedy: &Remedy) -> Result<Vec<ReportFile>, ReportError> {
    Ok(vec![
        ReportFile { path: "remedy.html".into(), bytes: page(plan, remedy)?.into_bytes() },
        ReportFile { path: "remedy.csv".into(), bytes: remedy_csv(remedy)? },
        ReportFile { path: "remedy.json".into(), bytes: remedy_json(plan, remedy)?.into_bytes() },
    ])
}
