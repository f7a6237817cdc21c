//! What a report says, as text and rows: one content for the page and for Markdown.

mod options;
mod proofs;
mod requirements;
mod risks;
mod rows;
mod verdict;

use super::figures::{count, decibel, significant, with_prefix};
use super::plots::Plot;
use super::survey_json::listed;
use super::{Detail, RenderOptions};
use crate::assess::{Rule, Verdict};
use crate::base::{Assumption, Basis};
use crate::decide::dossier::{Dossier, MOST_CHANNELS};
use crate::survey::{LoopSummary, Range3, SurveyResult};

pub(crate) use options::OptionRow;
pub(crate) use proofs::Proof;
pub(crate) use requirements::Requirement;
pub(crate) use risks::Risk;
pub(crate) use rows::{Row, UNKNOWN, mark_of, shortened, worst_first};
pub(crate) use verdict::Share;

use rows::row;

/// Rows of the channel table at most; the other files hold every channel.
pub(crate) const MOST_ROWS: usize = 2_000;
/// Channels of the risk table and of the proofs at most.
const MOST_RISKS: usize = 500;
/// Worst channels that are told in words.
const WORST: usize = 5;

/// Conventions that hold for every report; the result adds those of its engines.
const CONVENTIONS: [(&str, &str); 6] = [
    ("level", "dBc at the output, single sideband; the parts of a tone add as voltages, the worst case"),
    ("offset", "from the carrier, in hertz; an output divider leaves it as it is"),
    (
        "resolution bandwidth",
        "a tone is a single line: its level does not depend on the bandwidth in which it is read, as long as noise and neighbours stay out",
    ),
    ("guard", "acts on the tone offset, not on the distance of the oscillator; inclusive, as is the loop edge"),
    ("margin", "limit minus level; positive passes"),
    ("unknown", "a figure that cannot be known from the plan; no figure stands in for it"),
];

/// What the model leaves out.
const LIMITS: [&str; 5] = [
    "Coupling levels are hardware: they come from the anchors of the plan alone. Where there is no anchor the place of a tone is known and its level is not.",
    "The detector is a curve of charge against time error with the width of its pulses to first order. A line that moves the oscillator itself (order 1, or a strong line near the loop edge) is outside it.",
    "A tone becomes a sideband by the small-angle rule; above −20 dBc that is no longer accurate.",
    "The loop is linear and sampled at the PFD frequency; for oscillator and filter noise the aliases are neglected.",
    "Supply ripple, temperature, ageing, harmonics of the output and mixing in later stages are not modelled.",
];

const CAUTIONS: [&str; 3] = [
    "A prediction is no compliance measurement.",
    "Transmitting needs a licence, and your local rules decide what is allowed.",
    "Verify on hardware before you rely on any channel called clear.",
];

/// One rule with what it did.
pub(crate) struct RuleLine {
    pub name: &'static str,
    pub sentence: &'static str,
    pub verdict: &'static str,
    pub mark: &'static str,
    pub count: String,
}

/// The whole content of a report.
pub(crate) struct Document<'a> {
    pub title: &'a str,
    pub identity: Vec<(&'static str, String)>,
    pub notes: Option<&'a str>,
    pub plan_sha256: &'a str,
    pub version: &'static str,
    pub command: String,
    pub sentence: String,
    pub cause: Option<String>,
    pub shares: Vec<Share>,
    pub doubtful: Option<String>,
    pub worst: Vec<Row>,
    pub rests_on: String,
    pub warnings: &'a [String],
    pub conventions: Vec<(String, &'static str)>,
    pub requirements: Vec<Requirement>,
    pub given: Vec<&'a Assumption>,
    pub assumed: Vec<&'a Assumption>,
    pub loop_lines: Vec<(&'static str, String)>,
    pub plots: &'a [Plot],
    pub rows: Vec<Row>,
    pub rows_note: String,
    pub risks: Vec<Risk>,
    pub risks_note: String,
    pub settings: Vec<String>,
    pub options: Vec<OptionRow>,
    pub options_note: String,
    pub recommendation: Vec<String>,
    pub rules: Vec<RuleLine>,
    pub proofs: Vec<Proof>,
    pub check: String,
    pub limits: &'static [&'static str],
    pub cautions: &'static [&'static str],
    pub sign_off: Vec<(&'static str, String)>,
}

impl Document<'_> {
    /// Returns a picture by its name.
    pub(crate) fn picture(&self, name: &str) -> Option<&Plot> {
        self.plots.iter().find(|plot| plot.name == name)
    }
}

/// Returns the content of a report.
pub(crate) fn document<'a>(
    result: &'a SurveyResult,
    dossier: &Dossier,
    options: &RenderOptions,
    plots: &'a [Plot],
) -> Document<'a> {
    let order = worst_first(&result.channels);
    let channels = || order.iter().map(|position| &result.channels[*position]);
    let flagged = || channels().filter(|c| c.verdict != Verdict::Clear);
    let rows = channels().filter(|channel| listed(channel, options.detail)).take(MOST_ROWS).map(|c| row(c, 1));
    let rows: Vec<Row> = rows.collect();
    let weak = |assumption: &&Assumption| !matches!(assumption.basis, Basis::Measured | Basis::Datasheet);
    let (assumed, given): (Vec<_>, Vec<_>) = result.assumptions.iter().partition(weak);
    let identity = &result.plan.identity;
    let stated = |value: &Option<String>| value.clone().unwrap_or_else(|| "not stated".to_owned());
    let signs = |value: &Option<String>| value.clone().unwrap_or_default();
    Document {
        title: &identity.title,
        identity: vec![
            ("Revision", stated(&identity.revision)),
            ("Date", stated(&identity.date)),
            ("Prepared by", stated(&identity.prepared_by)),
            ("Checked by", stated(&identity.checked_by)),
            ("Approved by", stated(&identity.approved_by)),
        ],
        notes: identity.notes.as_deref(),
        plan_sha256: &result.plan.sha256,
        version: env!("CARGO_PKG_VERSION"),
        command: command(&result.plan.stem, options, cures_flag(result, dossier)),
        sentence: verdict::sentence(&result.summary),
        cause: verdict::cause(&result.summary),
        shares: verdict::shares(&result.summary),
        doubtful: verdict::doubtful(result),
        worst: flagged().take(WORST).map(|channel| row(channel, 3)).collect(),
        rests_on: rests_on(given.len(), &assumed),
        warnings: &result.warnings,
        conventions: all_conventions(result),
        requirements: requirements::requirements(result),
        given,
        assumed,
        loop_lines: loop_lines(&result.loop_summary),
        plots,
        rows_note: rows_note(result, options.detail, rows.len()),
        rows,
        risks: flagged().take(MOST_RISKS).map(|channel| risks::risk(channel, dossier)).collect(),
        risks_note: risks_note(result, dossier),
        settings: dossier
            .remedy
            .as_ref()
            .map_or_else(Vec::new, |remedy| super::remedy::set_sentences(&result.plan, &remedy.set)),
        options: dossier.comparison.as_ref().map_or_else(Vec::new, options::option_rows),
        options_note: options::note(dossier.comparison.as_ref()),
        recommendation: dossier.comparison.as_ref().map_or_else(Vec::new, |c| c.recommendation.clone()),
        rules: rules(result),
        proofs: flagged().take(MOST_RISKS).map(|channel| proofs::proof(channel, &result.plan)).collect(),
        check: check(result),
        limits: &LIMITS,
        cautions: &CAUTIONS,
        sign_off: vec![
            ("Prepared by", signs(&identity.prepared_by)),
            ("Checked by", signs(&identity.checked_by)),
            ("Approved by", signs(&identity.approved_by)),
        ],
    }
}

/// Returns the page's conventions that the result does not state in its own words, then the result's; what is unknown is
/// told in the page's words, since the result speaks of keys.
fn all_conventions(result: &SurveyResult) -> Vec<(String, &'static str)> {
    let own = || result.conventions.iter().filter(|(name, _)| *name != "unknown");
    let stated = |name: &str| own().any(|(own, _)| own.trim_end_matches('s') == name);
    let page = CONVENTIONS.into_iter().filter(|(name, _)| !stated(name)).map(|(name, text)| (name.to_owned(), text));
    page.chain(own().map(|(name, text)| (name.replace('_', " "), *text))).collect()
}

/// Returns what the verdict rests on in one sentence.
fn rests_on(given: usize, assumed: &[&Assumption]) -> String {
    let number = |basis: Basis| assumed.iter().filter(|assumption| assumption.basis == basis).count();
    let filled = number(Basis::Default) + number(Basis::Extrapolated);
    format!(
        "Of the inputs {given} are measured or from a data sheet, {} assumed by the plan, and {filled} filled in or continued by the program.",
        number(Basis::Assumed)
    )
}

fn rows_note(result: &SurveyResult, detail: Detail, shown: usize) -> String {
    let number = |value: usize| count(value as u64);
    // A large plan's result holds a part of its channels; the counts hold all.
    let summary = &result.summary;
    let (matching, kind) = match detail {
        Detail::All => (summary.channels, "channels"),
        Detail::Flagged => (summary.bad + summary.marginal, "bad and marginal channels"),
    };
    if (shown as u64) < matching {
        format!(
            "The worst {} of {} {kind}; channels.csv holds all {}.",
            number(shown),
            count(matching),
            count(summary.channels)
        )
    } else {
        format!("All {} {kind}.", number(shown))
    }
}

/// Returns what the risk table holds and what was not made for it.
fn risks_note(result: &SurveyResult, dossier: &Dossier) -> String {
    let flagged = result.summary.bad + result.summary.marginal;
    let shown = flagged.min(MOST_RISKS as u64);
    let mut note = match flagged {
        0 => "No channel is bad or marginal.".to_owned(),
        _ if shown < flagged => {
            format!(
                "The worst {} of {} bad and marginal channels; survey.json holds all.",
                count(shown),
                count(flagged)
            )
        }
        _ => format!("All {} bad and marginal channels.", count(flagged)),
    };
    if flagged > 0 && dossier.remedy.is_none() {
        note.push_str(&format!(
            " Cures, measurements and options are not in this report: unless they are asked for they are made for plans of up to {} channels; the commands remedy, measure and compare give them.",
            count(MOST_CHANNELS)
        ));
    }
    note
}

fn loop_lines(summary: &LoopSummary) -> Vec<(&'static str, String)> {
    let mut lines = Vec::new();
    match &summary.components {
        None => lines.push(("Filter", "a measured response, no components".to_owned())),
        Some(parts) => {
            if let Some(c1) = parts.c1_farad {
                lines.push(("C1", with_prefix(c1, "F", 5)));
            }
            lines.push(("R2", with_prefix(parts.r2_ohm, "Ω", 5)));
            lines.push(("C2", with_prefix(parts.c2_farad, "F", 5)));
            for (names, pair) in [(("R3", "C3"), parts.r3_c3), (("R4", "C4"), parts.r4_c4)] {
                if let Some((r, c)) = pair {
                    lines.push((names.0, with_prefix(r, "Ω", 5)));
                    lines.push((names.1, with_prefix(c, "F", 5)));
                }
            }
        }
    }
    let unknown = || UNKNOWN.to_owned();
    let range = |range: &Option<Range3>, show: &dyn Fn(f64) -> String| match range {
        None => unknown(),
        Some(range) => {
            format!("{} … {}; {} at the design divider", show(range.minimum), show(range.maximum), show(range.design))
        }
    };
    let divider = summary.design_divider.map_or_else(unknown, |divider| significant(divider, 7));
    lines.push(("Design divider", divider));
    lines.push(("Unity gain", range(&summary.unity_gain_hz, &|hz| with_prefix(hz, "Hz", 5))));
    lines.push(("Phase margin", range(&summary.phase_margin_deg, &|deg| format!("{}°", significant(deg, 4)))));
    lines
}

fn rules(result: &SurveyResult) -> Vec<RuleLine> {
    let line = |rule: Rule| RuleLine {
        name: rule.name(),
        sentence: rule.sentence(),
        verdict: rule.verdict().word(),
        mark: mark_of(rule.verdict()),
        count: count(result.summary.reasons.get(&rule).copied().unwrap_or(0)),
    };
    Rule::ALL.into_iter().map(line).collect()
}

fn check(result: &SurveyResult) -> String {
    match result.method_check.worst_difference_db {
        None => "No channel of this run was computed by the fast path and by the exact period both.".to_owned(),
        Some(difference) => format!(
            "Channels computed both by the fast path and by the exact period: {}; the largest difference of a line was {} dB.",
            count(result.method_check.channels),
            decibel(difference)
        ),
    }
}

/// Returns the option that makes the same parts again, where the program would not by itself.
fn cures_flag(result: &SurveyResult, dossier: &Dossier) -> &'static str {
    match (dossier.remedy.is_some(), result.summary.channels <= MOST_CHANNELS) {
        (true, false) => " --cures always",
        (false, true) => " --cures never",
        _ => "",
    }
}

/// Returns the command that makes this report again, safe to paste into a shell.
fn command(stem: &str, options: &RenderOptions, cures: &str) -> String {
    let mut command = "thornmap survey".to_owned();
    if stem != "demo" {
        let plain = stem.chars().all(|c| c.is_ascii_alphanumeric() || "._-".contains(c)) && !stem.starts_with('-');
        let file = format!("{stem}.toml");
        command.push(' ');
        command.push_str(&if plain { file } else { format!("'{}'", file.replace('\'', "'\\''")) });
    }
    let flags = [
        (options.detail == Detail::Flagged, " --detail flagged"),
        (options.markdown, " --markdown"),
        (options.png, " --png"),
    ];
    for (_, flag) in flags.into_iter().filter(|(is_set, _)| *is_set) {
        command.push_str(flag);
    }
    command.push_str(cures);
    command
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn commands_survive_a_shell() {
        let plain = RenderOptions::default();
        assert_eq!(command("demo", &plain, ""), "thornmap survey");
        let more = RenderOptions { detail: Detail::Flagged, markdown: true, ..plain };
        assert_eq!(
            command("petrel", &more, " --cures never"),
            "thornmap survey petrel.toml --detail flagged --markdown --cures never"
        );
        assert_eq!(command("it's; rm x", &plain, ""), "thornmap survey 'it'\\''s; rm x.toml'");
    }
}
