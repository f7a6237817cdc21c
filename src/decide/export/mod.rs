//! What firmware needs of a plan: words, avoided ranges, and vectors to test a driver with.

mod avoided;
mod registers;
mod vectors;
mod words;

pub use avoided::{AvoidedRange, avoided_ranges};
pub use registers::{MapError, RegisterValues, pack, register_values};
pub use vectors::{TestVector, VectorSet, test_vectors};
pub use words::{DriverWord, ExportChannel, FIELDS, Field, RoundedHz, driver_word};

use serde::Serialize;

use crate::assess::AssessError;
use crate::base::Frequency;
use crate::modulator::ModulusRule;
use crate::plan::{Plan, RegisterMap};
use crate::survey::SurveyResult;

/// Name and number of the layout; a renamed or re-unitised key raises the number.
pub const SCHEMA: &str = "thornmap.export/1";

/// What must be read before the words are used.
pub const CAUTION: &str = "A prediction is no compliance measurement; transmitting needs a licence and your local rules decide; verify on hardware.";

/// Everything that is exported of a plan.
#[derive(Debug, Clone, Serialize)]
pub struct Export {
    /// Layout of the export.
    pub schema: &'static str,
    /// Version of the program.
    pub version: &'static str,
    /// SHA-256 of the plan file.
    pub plan_sha256: String,
    /// Title of the plan.
    pub title: String,
    /// File stem of the plan: names in code derive from it.
    pub stem: String,
    /// PFD frequency, exact.
    pub pfd_exact: Frequency,
    /// Reference frequencies that `reference_index` points into: the plan's own first, then its alternatives.
    pub references_exact: Vec<Frequency>,
    /// Modulator structure.
    pub structure: &'static str,
    /// How figures were rounded, in words.
    pub rounding: Vec<String>,
    /// What must be read before the words are used.
    pub caution: &'static str,
    /// Channels in plan order.
    pub channels: Vec<ExportChannel>,
    /// Contiguous runs of bad channels.
    pub avoided: Vec<AvoidedRange>,
    /// Vectors to test a driver with.
    pub vectors: Vec<TestVector>,
    /// Vectors that this plan cannot give, each with its reason.
    pub vectors_missing: Vec<String>,
    /// Register values, with a register map.
    pub registers: Option<RegisterValues>,
    /// Every input the verdicts rest on.
    pub assumptions: Vec<crate::base::Assumption>,
}

/// Why there is nothing to export.
#[derive(Debug, thiserror::Error)]
pub enum ExportError {
    /// A channel cannot be placed.
    #[error(transparent)]
    Assess(#[from] AssessError),
    /// No group of that name.
    #[error("the plan has no group \"{found}\"; its groups are {known}")]
    NoSuchGroup {
        /// The name asked for.
        found: String,
        /// The names there are.
        known: String,
    },
    /// The register map does not fit the plan.
    #[error("{}", problems.iter().map(ToString::to_string).collect::<Vec<_>>().join("\n"))]
    Map {
        /// Every problem.
        problems: Vec<MapError>,
    },
}

/// Returns the export of a surveyed plan, or of one of its groups, with register values where a map is given.
///
/// # Errors
/// `NoSuchGroup`, `Map` with every word that a map does not hold, `Assess` where exact arithmetic has no result.
pub fn export(result: &SurveyResult, group: Option<&str>, map: Option<&RegisterMap>) -> Result<Export, ExportError> {
    let plan = &result.plan;
    if let Some(name) = group
        && !plan.groups.iter().any(|known| known.name == name)
    {
        let known: Vec<String> = plan.groups.iter().map(|known| format!("\"{}\"", known.name)).collect();
        return Err(ExportError::NoSuchGroup { found: name.to_owned(), known: known.join(", ") });
    }
    let wanted = |name: &str| group.is_none_or(|group| group == name);
    let judged: Vec<_> = result.channels.iter().filter(|channel| wanted(&channel.group)).collect();
    let channels = judged
        .iter()
        .map(|channel| words::export_channel(plan, channel))
        .collect::<Result<Vec<_>, crate::assess::PlacementError>>()
        .map_err(AssessError::from)?;
    let VectorSet { vectors, missing } = test_vectors(plan, group).map_err(AssessError::from)?;
    let registers = match map {
        None => None,
        Some(map) => Some(register_values(map, &channels, &vectors).map_err(|problems| ExportError::Map { problems })?),
    };
    let pfd_exact =
        plan.reference.pfd().map_err(|source| AssessError::Exact { channel: plan.reference.frequency, source })?;
    Ok(Export {
        schema: SCHEMA,
        version: env!("CARGO_PKG_VERSION"),
        plan_sha256: plan.sha256.clone(),
        title: plan.identity.title.clone(),
        stem: plan.stem.clone(),
        pfd_exact,
        references_exact: words::references(plan),
        structure: plan.modulator.settings.structure.word(),
        rounding: rounding(plan),
        caution: CAUTION,
        avoided: avoided_ranges(&judged).map_err(AssessError::from)?,
        channels,
        vectors,
        vectors_missing: missing,
        registers,
        assumptions: result.assumptions.clone(),
    })
}

/// Returns the rounding policy, sentence by sentence.
fn rounding(plan: &Plan) -> Vec<String> {
    let word = match plan.modulator.modulus {
        ModulusRule::Fixed(modulus) => format!(
            "K is the integer nearest to M*(f_vco/f_pfd - N) with M = {}, a tie goes to the even K; K = M carries into N",
            modulus.get()
        ),
        ModulusRule::Largest(modulus) => format!(
            "K/M is the fraction nearest to f_vco/f_pfd - N with M up to {}, a tie takes the smaller M; K = M carries into N",
            modulus.get()
        ),
        ModulusRule::Step(step) => format!(
            "M makes an output step of {step} exact; K is the integer nearest to M*(f_vco/f_pfd - N), a tie goes to the even K"
        ),
    };
    let mut policy = vec![
        word,
        "achieved frequency = f_pfd*(N + K/M)/P in exact rational arithmetic".to_owned(),
        "a frequency in hertz is the nearest integer (a tie goes to the even one); its millihertz field is the signed \
         rest, rounded to the nearest integer millihertz (a tie goes to the even one)"
            .to_owned(),
        "a channel without a legal word has no word here; the C header leaves it out".to_owned(),
        "an avoided range names channels of the plan, both ends included; frequencies between the channels were not judged"
            .to_owned(),
    ];
    if let crate::modulator::Dither::Register { stage: 1, .. } = plan.modulator.settings.dither {
        policy
            .push("dither at stage 1 shifts the mean: the achieved frequency holds that shift, K does not".to_owned());
    }
    policy
}
