//! A survey read back from its JSON text.

use std::collections::BTreeSet;

use serde::Deserialize;
use serde_json::Value;

use crate::assess::Verdict;

/// Layout name without its number.
const LAYOUT: &str = "thornmap.survey/";

/// What a comparison needs of a survey.
#[derive(Debug, Clone)]
pub struct SurveyFile {
    /// Layout with its number.
    pub schema: String,
    /// Version of the program.
    pub version: String,
    /// SHA-256 of the plan file.
    pub plan_sha256: String,
    /// Title of the plan.
    pub title: String,
    /// The plan as validated.
    pub plan: Value,
    /// Keys of the plan file that are defaults.
    pub defaults: BTreeSet<String>,
    /// Channels that are left out because they are clear.
    pub omitted: u64,
    /// Listed channels, in plan order.
    pub channels: Vec<ChannelRecord>,
}

impl SurveyFile {
    /// Returns the number of the layout, as written.
    #[must_use]
    pub fn major(&self) -> &str {
        self.schema.strip_prefix(LAYOUT).unwrap_or("")
    }
}

/// One channel of a survey.
#[derive(Debug, Clone)]
pub struct ChannelRecord {
    /// Group name.
    pub group: String,
    /// Exact channel frequency, as written.
    pub channel_exact: String,
    /// Verdict.
    pub verdict: Verdict,
    /// Rules that fired, each once, with the first sentence.
    pub reasons: Vec<(String, String)>,
    /// What is programmed: (key, value as text, `null` for unknown).
    pub word: Vec<(&'static str, String)>,
    /// Tones, by offset.
    pub tones: Vec<ToneRecord>,
}

/// One tone of a survey.
#[derive(Debug, Clone, PartialEq, Deserialize)]
pub struct ToneRecord {
    /// Origin.
    pub origin: String,
    /// Label.
    pub label: String,
    /// Offset \[Hz\].
    pub offset_hz: f64,
    /// Level \[dBc\]; `None` is unknown.
    pub level_dbc: Option<f64>,
    /// Sum of the known parts \[dBc\].
    pub known_level_dbc: Option<f64>,
}

/// Why a text is no survey.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum SurveyFileError {
    /// The text ends in the middle.
    #[error("ends in the middle (line {line}): the file is truncated or still being written")]
    Truncated {
        /// Last line.
        line: usize,
    },
    /// No JSON.
    #[error("is not JSON: {found}")]
    NotJson {
        /// What the reader says, with line and column.
        found: String,
    },
    /// JSON of another kind.
    #[error("is no survey: {found}; expected the survey.json that `thornmap survey` writes")]
    NotASurvey {
        /// What was found.
        found: String,
    },
    /// A survey that lacks something.
    #[error("says it is {schema} but cannot be read as a survey: {found}")]
    Malformed {
        /// Its layout.
        schema: String,
        /// What is wrong.
        found: String,
    },
}

#[derive(Deserialize)]
struct Head {
    schema: Option<Value>,
}

#[derive(Deserialize)]
struct Document {
    version: String,
    plan_sha256: String,
    plan: Value,
    #[serde(default)]
    channels_omitted: u64,
    assumptions: Vec<AssumptionEntry>,
    channels: Vec<ChannelEntry>,
}

#[derive(Deserialize)]
struct AssumptionEntry {
    key: String,
    basis: String,
}

#[derive(Deserialize)]
struct ChannelEntry {
    group: String,
    channel_exact: String,
    verdict: String,
    reasons: Vec<ReasonEntry>,
    tones: Vec<ToneRecord>,
    legal: Option<Value>,
    n: Option<Value>,
    k: Option<Value>,
    m: Option<Value>,
    output_divider: Option<Value>,
    reference_divider: Option<Value>,
    doubler: Option<Value>,
    structure: Option<Value>,
    order: Option<Value>,
    seeds: Option<Value>,
}

impl ChannelEntry {
    /// Returns what is programmed, in the order of survey.json; unknown and absent are `null`.
    fn word(&self) -> Vec<(&'static str, String)> {
        [
            ("legal", &self.legal),
            ("n", &self.n),
            ("k", &self.k),
            ("m", &self.m),
            ("output_divider", &self.output_divider),
            ("reference_divider", &self.reference_divider),
            ("doubler", &self.doubler),
            ("structure", &self.structure),
            ("order", &self.order),
            ("seeds", &self.seeds),
        ]
        .into_iter()
        .map(|(key, value)| (key, value.as_ref().map_or_else(|| "null".to_owned(), Value::to_string)))
        .collect()
    }
}

#[derive(Deserialize)]
struct ReasonEntry {
    rule: String,
    text: String,
}

/// Returns the survey of a JSON text.
///
/// # Errors
/// `SurveyFileError` for a text that is cut off, no JSON, of another kind, or lacks what a comparison needs.
pub fn parse_survey(bytes: &[u8]) -> Result<SurveyFile, SurveyFileError> {
    let text = std::str::from_utf8(bytes)
        .map_err(|error| SurveyFileError::NotJson { found: format!("not UTF-8 text: {error}") })?;
    let text = text.trim_start_matches('\u{feff}');
    // The whole text is checked before anything is kept of it.
    let head: Head = serde_json::from_str(text).map_err(|error| {
        // A cut inside a number is an error of syntax to the parser: an object that does not end is cut off as well.
        let is_open = text.trim_start().starts_with('{') && !text.trim_end().ends_with('}');
        if (error.is_eof() && !text.trim().is_empty()) || (error.is_syntax() && is_open) {
            SurveyFileError::Truncated { line: error.line() }
        } else if error.is_data() {
            SurveyFileError::NotASurvey { found: "it is no JSON object with a schema".to_owned() }
        } else {
            SurveyFileError::NotJson { found: error.to_string() }
        }
    })?;
    let schema = match head.schema {
        Some(Value::String(schema)) if schema.starts_with(LAYOUT) => schema,
        Some(other) => return Err(SurveyFileError::NotASurvey { found: format!("its schema is {other}") }),
        None => return Err(SurveyFileError::NotASurvey { found: "it has no schema".to_owned() }),
    };
    let malformed = |found: String| SurveyFileError::Malformed { schema: schema.clone(), found };
    let document: Document = serde_json::from_str(text).map_err(|error| malformed(error.to_string()))?;
    let channels = document
        .channels
        .into_iter()
        .enumerate()
        .map(|(place, entry)| channel(entry).map_err(|found| malformed(format!("channel {}: {found}", place + 1))))
        .collect::<Result<Vec<_>, _>>()?;
    let title = document.plan.pointer("/identity/title").and_then(Value::as_str).unwrap_or("not stated").to_owned();
    Ok(SurveyFile {
        version: document.version,
        plan_sha256: document.plan_sha256,
        title,
        plan: document.plan,
        defaults: document.assumptions.into_iter().filter(|a| a.basis == "default").map(|a| a.key).collect(),
        omitted: document.channels_omitted,
        channels,
        schema,
    })
}

fn channel(entry: ChannelEntry) -> Result<ChannelRecord, String> {
    let word = entry.word();
    let verdict = [Verdict::Clear, Verdict::Marginal, Verdict::Bad]
        .into_iter()
        .find(|verdict| verdict.word() == entry.verdict)
        .ok_or_else(|| format!("verdict \"{}\" is none of clear, marginal, bad", entry.verdict))?;
    let mut reasons: Vec<(String, String)> = Vec::new();
    for reason in entry.reasons {
        if reasons.iter().all(|(rule, _)| *rule != reason.rule) {
            reasons.push((reason.rule, reason.text));
        }
    }
    Ok(ChannelRecord {
        group: entry.group,
        channel_exact: entry.channel_exact,
        verdict,
        reasons,
        word,
        tones: entry.tones,
    })
}
