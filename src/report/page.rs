//! The page: one template filled with text that was made here, and a policy that lets nothing else run.

use askama::Template;
use sha2::{Digest, Sha256};

use super::figures::{count, decibel, significant, with_prefix};
use super::page_rows::{Row, mark_of, row, worst_first};
use super::paint::plot_css;
use super::plots::Plot;
use super::survey_json::listed;
use super::{Detail, RenderOptions, ReportError};
use crate::assess::{Rule, Verdict};
use crate::base::{Assumption, Basis};
use crate::survey::{LoopSummary, Range3, SurveyResult};

/// Rows of the channel table at most; the other files hold every channel.
pub(crate) const MOST_ROWS: usize = 2_000;

/// Worst channels that are told in words.
const WORST: usize = 5;

/// Conventions that hold for every report; the result adds those of its engines.
const CONVENTIONS: [(&str, &str); 5] = [
    ("level", "dBc at the output, single sideband; the parts of a tone add as voltages, the worst case"),
    ("offset", "from the carrier, in hertz; an output divider leaves it as it is"),
    ("guard", "acts on the tone offset, not on the distance of the oscillator; inclusive, as is the loop edge"),
    ("margin", "limit minus level; positive passes"),
    ("unknown", "a figure that cannot be known from the plan; no figure stands in for it"),
];

/// One verdict with its count and its part of the bar of 1000 units.
struct Share {
    word: &'static str,
    mark: &'static str,
    count: String,
    start: u64,
    width: u64,
}

/// One rule with what it did.
struct RuleLine {
    name: &'static str,
    sentence: &'static str,
    verdict: &'static str,
    mark: &'static str,
    count: String,
}

#[derive(Template)]
#[template(path = "report.html")]
struct Page<'a> {
    title: &'a str,
    policy: String,
    css: String,
    identity: Vec<(&'static str, String)>,
    notes: Option<&'a str>,
    sentence: String,
    cause: Option<String>,
    shares: Vec<Share>,
    doubtful: Option<String>,
    worst: Vec<Row>,
    plots: &'a [Plot],
    rows: Vec<Row>,
    rows_note: String,
    given: Vec<&'a Assumption>,
    assumed: Vec<&'a Assumption>,
    loop_lines: Vec<(&'static str, String)>,
    rules: Vec<RuleLine>,
    page_conventions: Vec<(&'static str, &'static str)>,
    conventions: Vec<(String, &'static str)>,
    warnings: &'a [String],
    check: String,
    plan_sha256: &'a str,
    version: &'static str,
    command: String,
}

/// Returns the text of `report.html`.
///
/// # Errors
/// `Page` where the template fails.
pub(crate) fn page(result: &SurveyResult, options: &RenderOptions, plots: &[Plot]) -> Result<String, ReportError> {
    // A checkout may have turned line ends; the browser turns them back before it compares the hash.
    let css = format!("{}{}", include_str!("templates/report.css"), plot_css()).replace('\r', "");
    let order = worst_first(&result.channels);
    let channels = || order.iter().map(|position| &result.channels[*position]);
    let flagged = |count: usize| channels().filter(|c| c.verdict != Verdict::Clear).take(count);
    let rows = channels().filter(|channel| listed(channel, options.detail)).take(MOST_ROWS).map(|c| row(c, 1));
    let rows: Vec<Row> = rows.collect();
    let weak = |assumption: &&Assumption| !matches!(assumption.basis, Basis::Measured | Basis::Datasheet);
    let (assumed, given) = result.assumptions.iter().partition(weak);
    let page = Page {
        title: &result.plan.identity.title,
        policy: policy(&css),
        identity: identity(result),
        notes: result.plan.identity.notes.as_deref(),
        sentence: sentence(result),
        cause: cause(result),
        shares: shares(result),
        doubtful: doubtful(result),
        worst: flagged(WORST).map(|channel| row(channel, 3)).collect(),
        plots,
        rows_note: rows_note(result, options.detail, rows.len()),
        rows,
        given,
        assumed,
        loop_lines: loop_lines(&result.loop_summary),
        rules: rules(result),
        page_conventions: page_conventions(result),
        conventions: result.conventions.iter().map(|(name, text)| (name.replace('_', " "), *text)).collect(),
        warnings: &result.warnings,
        check: check(result),
        plan_sha256: &result.plan.sha256,
        version: env!("CARGO_PKG_VERSION"),
        command: command(&result.plan.stem, options.detail),
        css,
    };
    Ok(page.render()?)
}

/// Returns the content-security policy: this one style sheet by its hash, and nothing else from anywhere.
pub(super) fn policy(css: &str) -> String {
    let hash = base64(&Sha256::digest(css.as_bytes()));
    format!("default-src 'none'; style-src 'sha256-{hash}'; base-uri 'none'; form-action 'none'")
}

/// Returns bytes in the base 64 of RFC 4648 §4.
fn base64(bytes: &[u8]) -> String {
    const LETTERS: &[u8; 64] = b"ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let mut text = String::new();
    for chunk in bytes.chunks(3) {
        let part = |at: usize| usize::from(chunk.get(at).copied().unwrap_or(0));
        let joined = part(0) << 16 | part(1) << 8 | part(2);
        for letter in 0..4 {
            let value = joined >> (18 - 6 * letter) & 63;
            text.push(if letter > chunk.len() { '=' } else { char::from(LETTERS[value]) });
        }
    }
    text
}

/// Returns the page's conventions that the result does not state in its own words.
fn page_conventions(result: &SurveyResult) -> Vec<(&'static str, &'static str)> {
    let stated = |name: &str| result.conventions.iter().any(|(own, _)| own.trim_end_matches('s') == name);
    CONVENTIONS.into_iter().filter(|(name, _)| !stated(name)).collect()
}

fn identity(result: &SurveyResult) -> Vec<(&'static str, String)> {
    let identity = &result.plan.identity;
    let stated = |value: &Option<String>| value.clone().unwrap_or_else(|| "not stated".to_owned());
    vec![
        ("Revision", stated(&identity.revision)),
        ("Date", stated(&identity.date)),
        ("Prepared by", stated(&identity.prepared_by)),
        ("Checked by", stated(&identity.checked_by)),
        ("Approved by", stated(&identity.approved_by)),
    ]
}

/// Returns the verdict on the plan in one sentence with its counts.
fn sentence(result: &SurveyResult) -> String {
    let summary = &result.summary;
    let all = count(summary.channels);
    match (summary.bad, summary.marginal) {
        (0, 0) if summary.channels == 1 => "The one channel of this plan is clear.".to_owned(),
        (0, 0) => format!("All {all} channels are clear."),
        (0, marginal) => {
            format!(
                "No channel is bad; of {all} channels {} are clear and {} marginal.",
                count(summary.clear),
                count(marginal)
            )
        }
        (bad, marginal) => format!(
            "Of {all} channels {} {} bad, {} marginal and {} clear.",
            count(bad),
            if bad == 1 { "is" } else { "are" },
            count(marginal),
            count(summary.clear)
        ),
    }
}

/// Returns what makes most channels bad, or marginal where none is bad.
fn cause(result: &SurveyResult) -> Option<String> {
    let worst = if result.summary.bad > 0 { Verdict::Bad } else { Verdict::Marginal };
    let fired = result.summary.reasons.iter().filter(|(rule, number)| rule.verdict() == worst && **number > 0);
    // Of equal counts the first rule: `max_by_key` would take the last.
    let (rule, number) = fired.rev().max_by_key(|(_, number)| **number)?;
    let channels = if *number == 1 { "channel" } else { "channels" };
    Some(format!(
        "The most frequent reason for {} is {}: {} ({} {channels}).",
        worst.word(),
        rule.name(),
        rule.sentence(),
        count(*number)
    ))
}

fn shares(result: &SurveyResult) -> Vec<Share> {
    let summary = &result.summary;
    let total = summary.channels.max(1);
    let mut start = 0;
    let mut before = 0;
    [(Verdict::Bad, summary.bad), (Verdict::Marginal, summary.marginal), (Verdict::Clear, summary.clear)]
        .into_iter()
        .map(|(verdict, number)| {
            before += number;
            let end = before.saturating_mul(1000) / total;
            // One channel among many still shows.
            let end = if number > 0 { end.max(start + 4) } else { end.max(start) };
            let share =
                Share { word: verdict.word(), mark: mark_of(verdict), count: count(number), start, width: end - start };
            start = end;
            share
        })
        .collect()
}

/// Returns how many channels carry doubts of their own.
fn doubtful(result: &SurveyResult) -> Option<String> {
    let number = result.channels.iter().filter(|channel| !channel.warnings.is_empty()).count();
    let carry = if number == 1 { "channel carries a doubt of its own" } else { "channels carry doubts of their own" };
    (number > 0).then(|| format!("{} {carry}: see “warnings” in channels.csv.", count(number as u64)))
}

fn rows_note(result: &SurveyResult, detail: Detail, shown: usize) -> String {
    let number = |value: usize| count(value as u64);
    let matching = result.channels.iter().filter(|channel| listed(channel, detail)).count();
    let kind = match detail {
        Detail::All => "channels",
        Detail::Flagged => "bad and marginal channels",
    };
    if shown < matching {
        format!(
            "The worst {} of {} {kind}; channels.csv holds all {}.",
            number(shown),
            number(matching),
            number(result.channels.len())
        )
    } else {
        format!("All {} {kind}.", number(shown))
    }
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
    let unknown = || "unknown".to_owned();
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

/// Returns the command that makes this report again, safe to paste into a shell.
fn command(stem: &str, detail: Detail) -> String {
    let mut command = "thornmap survey".to_owned();
    if stem != "demo" {
        let plain = stem.chars().all(|c| c.is_ascii_alphanumeric() || "._-".contains(c)) && !stem.starts_with('-');
        let file = format!("{stem}.toml");
        command.push(' ');
        command.push_str(&if plain { file } else { format!("'{}'", file.replace('\'', "'\\''")) });
    }
    if detail == Detail::Flagged {
        command.push_str(" --detail flagged");
    }
    command
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn base64_of_the_standard() {
        // RFC 4648 §10.
        let cases =
            [("", ""), ("f", "Zg=="), ("fo", "Zm8="), ("foo", "Zm9v"), ("foob", "Zm9vYg=="), ("foobar", "Zm9vYmFy")];
        for (plain, coded) in cases {
            assert_eq!(base64(plain.as_bytes()), coded);
        }
    }

    #[test]
    fn commands_survive_a_shell() {
        assert_eq!(command("demo", Detail::All), "thornmap survey");
        assert_eq!(command("petrel", Detail::Flagged), "thornmap survey petrel.toml --detail flagged");
        assert_eq!(command("it's; rm x", Detail::All), "thornmap survey 'it'\\''s; rm x.toml'");
    }
}
