//! `survey.json`: every key that other programs may rely on, in one fixed order.

use std::collections::BTreeMap;

use serde::{Serialize, Serializer};

use super::json::json_text;
use super::{Detail, RenderOptions, ReportError};
use crate::assess::{ChannelResult, Verdict};
use crate::survey::SurveyResult;

/// Name and number of the layout; a renamed or re-unitised key raises the number.
pub(crate) const SCHEMA: &str = "thornmap.survey/1";

/// Returns whether a channel is listed at this detail.
pub(crate) fn listed(channel: &ChannelResult, detail: Detail) -> bool {
    match detail {
        Detail::All => true,
        Detail::Flagged => channel.verdict != Verdict::Clear,
    }
}

/// Pairs written as an object in their own order.
struct Pairs<'a>(&'a [(&'static str, &'static str)]);

impl Serialize for Pairs<'_> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_map(self.0.iter().map(|(name, sentence)| (name, sentence)))
    }
}

/// Returns the text of `survey.json`: one line for each top-level key, one for each channel.
///
/// # Errors
/// `NotFinite` with the key of a NaN or an infinity; `Serialize` for what JSON cannot express.
pub fn survey_json(result: &SurveyResult, options: &RenderOptions) -> Result<String, ReportError> {
    let rows = channel_rows_json(&result.channels, options.detail)?;
    let omitted = result.channels.iter().filter(|channel| !listed(channel, options.detail)).count();
    let (mut out, tail) = survey_json_around(result, options, (rows.is_empty(), omitted as u64))?;
    out.push_str(rows.strip_suffix(ROW_END).unwrap_or(&rows));
    out.push_str(&tail);
    Ok(out)
}

/// What ends the row of a channel that is not the last.
pub(crate) const ROW_END: &str = ",\n";

/// Returns the rows of the channels that `detail` lists, each with [`ROW_END`].
pub(crate) fn channel_rows_json(channels: &[ChannelResult], detail: Detail) -> Result<String, ReportError> {
    let mut rows = String::new();
    for channel in channels.iter().filter(|channel| listed(channel, detail)) {
        rows.push_str(&json_text("channels", channel)?);
        rows.push_str(ROW_END);
    }
    Ok(rows)
}

/// Returns what stands before and after the rows of the channels: whether there are none, and how many channels are not
/// listed.
pub(crate) fn survey_json_around(
    result: &SurveyResult,
    options: &RenderOptions,
    (is_empty, omitted): (bool, u64),
) -> Result<(String, String), ReportError> {
    let mut out = String::from("{\n");
    let mut line = |key: &str, text: String| {
        out.push_str(&format!("\"{key}\": {text},\n"));
    };
    line("schema", json_text("schema", SCHEMA)?);
    line("version", json_text("version", env!("CARGO_PKG_VERSION"))?);
    line("plan_sha256", json_text("plan_sha256", &result.plan.sha256)?);
    line("plan", json_text("plan", &result.plan)?);
    line("conventions", json_text("conventions", &Pairs(&result.conventions))?);
    line("detail", json_text("detail", &options.detail)?);
    line("channels_omitted", json_text("channels_omitted", &omitted)?);
    line("assumptions", json_text("assumptions", &result.assumptions)?);
    line("loop", json_text("loop", &result.loop_summary)?);
    line("summary", json_text("summary", &complete_summary(result))?);
    line("method_check", json_text("method_check", &result.method_check)?);
    out.push_str(if is_empty { "\"channels\": [" } else { "\"channels\": [\n" });
    let end = if is_empty { "]" } else { "\n]" };
    Ok((out, format!("{end},\n\"warnings\": {}\n}}\n", json_text("warnings", &result.warnings)?)))
}

/// Returns the summary with an entry for every rule, so that a rule that never fired reads 0 and is not missing.
fn complete_summary(result: &SurveyResult) -> crate::survey::Summary {
    let mut summary = result.summary.clone();
    let fired = std::mem::take(&mut summary.reasons);
    summary.reasons = crate::assess::Rule::ALL
        .into_iter()
        .map(|rule| (rule, fired.get(&rule).copied().unwrap_or(0)))
        .collect::<BTreeMap<_, _>>();
    summary
}
