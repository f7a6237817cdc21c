//! What changed between two surveys, and which inputs changed with it.

mod channels;
mod inputs;
mod survey_file;

pub use channels::{Change, ChannelChange, ToneChange, WordChange};
pub use inputs::{InputChange, input_changes, input_of};
pub use survey_file::{ChannelRecord, SurveyFile, SurveyFileError, ToneRecord, parse_survey};

use serde::Serialize;

use crate::assess::Verdict;
use crate::base::Frequency;

/// Name and number of the layout; a renamed or re-unitised key raises the number.
pub const SCHEMA: &str = "thornmap.diff/1";

/// Layout of the surveys that are understood in full.
const SURVEY_MAJOR: &str = "1";

/// Where one side of the comparison comes from.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Side {
    /// Layout of the survey.
    pub schema: String,
    /// Version of the program that wrote it.
    pub version: String,
    /// SHA-256 of its plan file.
    pub plan_sha256: String,
    /// Title of its plan.
    pub title: String,
    /// Channels it lists.
    pub listed: usize,
    /// Channels it leaves out: clear ones of a survey with flagged detail.
    pub omitted: u64,
}

/// What may have caused the changes.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(tag = "kind", rename_all = "kebab-case")]
pub enum Cause {
    /// No channel changed.
    NothingToExplain,
    /// Exactly one input of the channels changed.
    OneInput {
        /// Its key in the plan file.
        input: String,
    },
    /// Several inputs changed: which of them did it cannot be told from two surveys.
    SeveralInputs {
        /// Their keys in the plan file.
        inputs: Vec<String>,
        /// Whether the program's version changed too.
        version_changed: bool,
    },
    /// No input changed, but the program's version did.
    ProgramVersion,
    /// No input of the channels and no version changed.
    Unknown,
}

/// Counts of a comparison.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize)]
pub struct Counts {
    /// Channels in both plans.
    pub common: u64,
    /// Channels only in the new plan.
    pub added: u64,
    /// Channels only in the old plan.
    pub removed: u64,
    /// Channels whose verdict changed.
    pub verdict_changed: u64,
    /// Of these, channels that got worse.
    pub worse: u64,
    /// Of these, channels that got better.
    pub better: u64,
    /// Channels whose word changed.
    pub word_changed: u64,
    /// Channels on which a tone changed.
    pub tones_changed: u64,
}

/// A channel that only one survey's plan holds.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Lone {
    /// Group name.
    pub group: String,
    /// Channel frequency, exact.
    pub channel_exact: String,
    /// Its verdict.
    pub verdict: Verdict,
}

/// What changed between two surveys.
#[derive(Debug, Clone, Serialize)]
pub struct Difference {
    /// Layout of the comparison.
    pub schema: &'static str,
    /// Version of the program that compared.
    pub version: &'static str,
    /// The survey before.
    pub old: Side,
    /// The survey after.
    pub new: Side,
    /// Inputs that changed, by their key in the plan file.
    pub inputs: Vec<InputChange>,
    /// What may have caused the changes of channels.
    pub cause: Cause,
    /// Counts.
    pub counts: Counts,
    /// Channels in both plans that changed, in the order of the new survey, then those that only the old one lists.
    pub channels: Vec<ChannelChange>,
    /// Channels only in the new plan.
    pub added: Vec<Lone>,
    /// Channels only in the old plan.
    pub removed: Vec<Lone>,
    /// Rules of the comparison in words.
    pub conventions: Vec<&'static str>,
    /// Doubts about the comparison.
    pub warnings: Vec<String>,
}

impl Difference {
    /// Returns the channels of both plans that got worse and are now at least as bad as `state`.
    #[must_use]
    pub fn worse_to(&self, state: Verdict) -> u64 {
        let worse = |change: &&ChannelChange| {
            change.verdict.as_ref().is_some_and(|verdict| verdict.new > verdict.old && verdict.new >= state)
        };
        self.channels.iter().filter(worse).count() as u64
    }
}

/// Returns what changed from one survey to another.
#[must_use]
pub fn compare_surveys(old: &SurveyFile, new: &SurveyFile) -> Difference {
    let inputs = input_changes(old, new);
    let found = channels::changes(old, new);
    let mut counts = found.counts;
    for change in &found.changed {
        if let Some(verdict) = &change.verdict {
            counts.verdict_changed += 1;
            counts.worse += u64::from(verdict.new > verdict.old);
            counts.better += u64::from(verdict.new < verdict.old);
        }
        counts.word_changed += u64::from(!change.word.is_empty());
        counts.tones_changed += u64::from(!change.tones.is_empty());
    }
    let any_change = !(found.changed.is_empty() && found.added.is_empty() && found.removed.is_empty());
    Difference {
        schema: SCHEMA,
        version: env!("CARGO_PKG_VERSION"),
        cause: cause(&inputs, old.version != new.version, any_change),
        warnings: warnings(old, new, &inputs),
        old: side(old),
        new: side(new),
        inputs,
        counts,
        channels: found.changed,
        added: found.added,
        removed: found.removed,
        conventions: vec![
            "channels are matched by group name and exact channel frequency",
            "tones are matched by origin and label; a level counts as changed from 0.1 dB on",
            "an input that is a default in both plans follows from others and is no cause of its own",
            "a survey with flagged detail leaves out clear channels: their tones and words are not compared",
        ],
    }
}

fn side(survey: &SurveyFile) -> Side {
    Side {
        schema: survey.schema.clone(),
        version: survey.version.clone(),
        plan_sha256: survey.plan_sha256.clone(),
        title: survey.title.clone(),
        listed: survey.channels.len(),
        omitted: survey.omitted,
    }
}

/// Returns what may have caused the changes; several inputs are named, none is picked.
fn cause(inputs: &[InputChange], version_changed: bool, any_change: bool) -> Cause {
    if !any_change {
        return Cause::NothingToExplain;
    }
    let mut acting: Vec<String> = inputs.iter().filter(|input| input.acts()).map(|input| input.input.clone()).collect();
    match (acting.len(), version_changed) {
        (0, true) => Cause::ProgramVersion,
        (0, false) => Cause::Unknown,
        (1, false) => Cause::OneInput { input: acting.remove(0) },
        (_, version_changed) => Cause::SeveralInputs { inputs: acting, version_changed },
    }
}

fn warnings(old: &SurveyFile, new: &SurveyFile, inputs: &[InputChange]) -> Vec<String> {
    let mut warnings = Vec::new();
    if old.major() != new.major() {
        warnings.push(format!(
            "the surveys have different layouts ({}, {}): what only one of them holds is not compared",
            old.schema, new.schema
        ));
    }
    for survey in [old, new] {
        if survey.major() != SURVEY_MAJOR {
            warnings.push(format!(
                "layout {} is not thornmap.survey/{SURVEY_MAJOR}: keys may have another meaning",
                survey.schema
            ));
        }
    }
    if old.version != new.version {
        warnings.push(format!(
            "the surveys come from different versions ({}, {}): a figure may have changed with the program",
            old.version, new.version
        ));
    }
    if old.plan_sha256 != new.plan_sha256 && inputs.is_empty() {
        warnings.push(
            "the plan files differ, the validated plans do not: comments, notes of figures or their basis".to_owned(),
        );
    }
    for (survey, which) in [(old, "old"), (new, "new")] {
        if survey.omitted > 0 {
            warnings.push(format!(
                "the {which} survey leaves out {} clear channels: their words and tones are not compared",
                survey.omitted
            ));
        }
    }
    warnings.dedup();
    warnings
}

/// Returns an exact frequency as it stands in a survey in the form for readers.
#[must_use]
pub fn readable(exact: &str) -> String {
    let number = exact.strip_suffix(" Hz").and_then(|number| crate::base::parse_number(number).ok());
    number.map_or_else(|| exact.to_owned(), |hz| Frequency::from_hz(hz).to_string())
}
