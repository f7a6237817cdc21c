//! What is known about one channel after all stages; the writers print this and nothing else.

use num_bigint::BigUint;
use serde::{Serialize, Serializer};

use crate::base::{Basis, Frequency};
use crate::modulator::Structure;

/// The state of a channel, worst last.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Verdict {
    /// No rule fired.
    Clear,
    /// Passes, but narrowly or unproven.
    Marginal,
    /// Fails a limit, or may.
    Bad,
}

impl Verdict {
    /// Returns the word used in every output.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Clear => "clear",
            Self::Marginal => "marginal",
            Self::Bad => "bad",
        }
    }
}

/// A rule of the verdict.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize)]
pub enum Rule {
    /// No legal word.
    B1,
    /// A known level, or known part of one, above its limit.
    B2,
    /// An unknown level at or inside the guard.
    B3,
    /// Phase error with tones above its limit.
    B4,
    /// A known level within the margin below its limit.
    M1,
    /// An unknown level beyond the guard, at or inside the loop edge.
    M2,
    /// A boundary, fractional or clock tone inside the loop that passes with more than the margin.
    M3,
    /// Phase error within the margin of its limit.
    M4,
    /// A limit is set but cannot be judged.
    M5,
}

impl Rule {
    /// Every rule, in order.
    pub const ALL: [Self; 9] =
        [Self::B1, Self::B2, Self::B3, Self::B4, Self::M1, Self::M2, Self::M3, Self::M4, Self::M5];

    /// Returns the state that the rule gives.
    #[must_use]
    pub const fn verdict(self) -> Verdict {
        match self {
            Self::B1 | Self::B2 | Self::B3 | Self::B4 => Verdict::Bad,
            Self::M1 | Self::M2 | Self::M3 | Self::M4 | Self::M5 => Verdict::Marginal,
        }
    }

    /// Returns the rule's name, for example `B2`.
    #[must_use]
    pub const fn name(self) -> &'static str {
        match self {
            Self::B1 => "B1",
            Self::B2 => "B2",
            Self::B3 => "B3",
            Self::B4 => "B4",
            Self::M1 => "M1",
            Self::M2 => "M2",
            Self::M3 => "M3",
            Self::M4 => "M4",
            Self::M5 => "M5",
        }
    }

    /// Returns the rule in one sentence.
    #[must_use]
    pub const fn sentence(self) -> &'static str {
        match self {
            Self::B1 => "no legal divider word",
            Self::B2 => "a known tone is above its limit",
            Self::B3 => "a tone of unknown level lies at or inside the guard",
            Self::B4 => "the phase error with tones is above its limit",
            Self::M1 => "a known tone is within the margin below its limit",
            Self::M2 => "a tone of unknown level lies between guard and loop edge",
            Self::M3 => "a tone lies inside the loop but passes with more than the margin",
            Self::M4 => "the phase error with tones is within the margin below its limit",
            Self::M5 => "a limit is set that cannot be judged with what is known",
        }
    }
}

/// A rule that fired, with the integers that prove it.
#[derive(Debug, Clone, Serialize)]
pub struct Reason {
    /// The rule.
    pub rule: Rule,
    /// One sentence for a reader.
    pub text: String,
    /// Fractional numerator, where a word exists.
    pub k: Option<u64>,
    /// Modulus, where a word exists.
    pub m: Option<u64>,
    /// Boundary denominator (or harmonic) of the tone, where one is meant.
    pub q: Option<u64>,
    /// Smallest signed residue `q·K mod± M`.
    pub residue: Option<i64>,
    /// Tone offset at the output.
    pub offset_hz: Option<f64>,
}

/// A limit that a channel misses.
#[derive(Debug, Clone, Serialize)]
pub struct Illegal {
    /// Which limit, in plain words (for example `oscillator range, upper end`).
    pub limit: String,
    /// The value that misses it, base unit.
    pub value: f64,
    /// The bound, inclusive, base unit.
    pub bound: f64,
    /// By how much it is missed, positive, base unit.
    pub missed_by: f64,
    /// Unit of the three figures: `Hz`, `V` or empty for a division.
    pub unit: &'static str,
}

/// A boundary near the channel.
#[derive(Debug, Clone, Serialize)]
pub struct BoundaryNear {
    /// `comparison`, `reference` or `output`.
    pub family: &'static str,
    /// Numerator of the nearest fraction p/q (of the PFD frequency, or of the reference).
    pub p: i128,
    /// Denominator.
    pub q: u64,
    /// Offset of the tone from the carrier, at or above zero.
    pub tone_offset_hz: f64,
    /// Distance of the VCO from the boundary.
    pub vco_distance_hz: f64,
    /// Tone offset ≤ guard (exact, inclusive).
    pub inside_guard: bool,
    /// Tone offset ≤ loop edge (inclusive).
    pub inside_loop: bool,
}

/// What makes a tone.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Origin {
    /// A boundary p/q.
    Boundary,
    /// A multiple of K/M that is no boundary in the search.
    Fractional,
    /// A line of the exact period that is no multiple of K/M.
    SubFractional,
    /// The PFD frequency and its harmonics.
    Reference,
    /// Another clock.
    Clock,
}

impl Origin {
    /// Returns the word used in every output.
    #[must_use]
    pub const fn word(self) -> &'static str {
        match self {
            Self::Boundary => "boundary",
            Self::Fractional => "fractional",
            Self::SubFractional => "sub-fractional",
            Self::Reference => "reference",
            Self::Clock => "clock",
        }
    }
}

/// Parts of a tone, each at the output \[dBc\]; `None` is unknown or does not apply (see `Tone::unknown`).
#[derive(Debug, Clone, Default, Serialize)]
pub struct Contributions {
    /// Coupling, from an anchor.
    pub coupling_dbc: Option<f64>,
    /// Line of `g(ψ + a) − ψ`.
    pub nonlinearity_dbc: Option<f64>,
    /// Line of ψ.
    pub modulator_dbc: Option<f64>,
    /// Leakage and offset current.
    pub leakage_dbc: Option<f64>,
    /// Clock, from its anchor.
    pub clock_dbc: Option<f64>,
}

impl Contributions {
    /// Returns the parts that are known, with the name of each, in a fixed order.
    pub fn known(&self) -> impl Iterator<Item = (&'static str, f64)> {
        [
            ("coupling", self.coupling_dbc),
            ("nonlinearity", self.nonlinearity_dbc),
            ("modulator", self.modulator_dbc),
            ("leakage", self.leakage_dbc),
            ("clock", self.clock_dbc),
        ]
        .into_iter()
        .filter_map(|(name, level)| Some((name, level?)))
    }
}

/// One tone at one exact offset.
#[derive(Debug, Clone, Serialize)]
pub struct Tone {
    /// What makes it.
    pub origin: Origin,
    /// Short name for a reader, for example `1/2 boundary` or `processor × 9`.
    pub label: String,
    /// Smallest h ≥ 1 of its family; `None` for sub-fractional lines.
    pub harmonic: Option<u64>,
    /// Offset from the carrier \[Hz\], positive.
    pub offset_hz: f64,
    /// Worst-case sum at the output \[dBc\], single sideband; `None` when an applicable part is unknown.
    pub level_dbc: Option<f64>,
    /// Half width of the level's uncertainty from the method (not from the inputs) \[dB\].
    pub level_uncertainty_db: Option<f64>,
    /// Sum of the known parts \[dBc\].
    pub known_level_dbc: Option<f64>,
    /// Weakest basis among the inputs of the level.
    pub basis: Basis,
    /// Boundary numerator.
    pub p: Option<i128>,
    /// Boundary denominator.
    pub q: Option<u64>,
    /// The parts.
    pub contributions: Contributions,
    /// The mask at the offset, or the limit of a victim where that is stricter \[dBc\]; `None` where none applies.
    pub limit_dbc: Option<f64>,
    /// limit − level (known part when the level is unknown) \[dB\]; positive passes.
    pub margin_db: Option<f64>,
    /// Offset ≤ loop edge.
    pub inside_loop: bool,
    /// Offset ≤ guard (exact where the guard is).
    #[serde(skip)]
    pub inside_guard: bool,
    /// Made after the loop (`output` family): its unknown level is at most marginal.
    #[serde(skip)]
    pub after_loop: bool,
    /// A boundary or multiple of K/M at this offset has a known part of its own; other known parts that fall on the same
    /// offset do not make it so.
    #[serde(skip)]
    pub family_known: bool,
    /// `h·K mod± M`, signed, for tones of the modulator family.
    #[serde(skip)]
    pub residue: Option<i64>,
    /// Names of the plan's victims that it hits.
    pub victims: Vec<String>,
    /// Names of the applicable parts that are unknown (`coupling`, `nonlinearity`, …), each with its reason.
    pub unknown: Vec<String>,
}

/// How the tone levels of the modulator family were found.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Method {
    /// One DFT over one exact period.
    ExactPeriod,
    /// A windowed record.
    Windowed,
    /// The conditional-mean curve, checked by a record.
    SharedCurve,
    /// A formula (integer words, held modulators).
    ClosedForm,
}

/// Everything about one channel.
#[derive(Debug, Clone, Serialize)]
#[allow(missing_docs, reason = "field names and units are those of the plan, DEVELOPERS.md lists them")]
pub struct ChannelResult {
    pub group: String,
    pub group_index: usize,
    pub index: u64,
    pub channel_hz: f64,
    #[serde(rename = "channel_exact")]
    pub channel: Frequency,
    pub injection_hz: f64,
    pub output_hz: f64,
    #[serde(rename = "output_exact")]
    pub output: Frequency,
    pub achieved_hz: Option<f64>,
    pub error_hz: Option<f64>,
    pub error_ppb: Option<f64>,
    pub vco_hz: Option<f64>,
    pub reference_hz: f64,
    pub doubler: bool,
    pub reference_divider: u64,
    pub pfd_hz: f64,
    pub output_divider: Option<u64>,
    pub legal: bool,
    pub illegal: Vec<Illegal>,
    pub n: Option<u64>,
    pub k: Option<u64>,
    pub m: Option<u64>,
    pub k_reduced: Option<u64>,
    pub m_reduced: Option<u64>,
    #[serde(serialize_with = "big_integer")]
    pub period: Option<BigUint>,
    pub period_is_exact: bool,
    pub structure: Structure,
    pub order: u8,
    pub seeds: Vec<u64>,
    pub seeds_reduced: bool,
    pub unity_gain_hz: Option<f64>,
    pub phase_margin_deg: Option<f64>,
    pub closed_loop_3db_hz: Option<f64>,
    pub peaking_db: Option<f64>,
    pub tuning_v: Option<f64>,
    pub guard_hz: Option<f64>,
    pub loop_edge_hz: Option<f64>,
    pub boundary: Option<BoundaryNear>,
    pub boundaries: Vec<BoundaryNear>,
    pub tones: Vec<Tone>,
    pub unknown_tones: usize,
    pub tones_below_floor: usize,
    pub method: Method,
    pub phase_error_deg: Option<f64>,
    pub phase_error_with_tones_deg: Option<f64>,
    pub phase_error_known_deg: Option<f64>,
    pub noise_unknown: Vec<String>,
    pub jitter_s: Option<f64>,
    pub residual_fm_hz: Option<f64>,
    pub evm_percent: Option<f64>,
    pub verdict: Verdict,
    pub verdict_best: Option<Verdict>,
    pub verdict_worst: Option<Verdict>,
    pub reasons: Vec<Reason>,
    pub warnings: Vec<String>,
}

impl ChannelResult {
    /// Returns the tone that decides first: rules B2 and B3 first, then the smallest margin, ties to the smaller
    /// offset; `None` where no tone can be ranked.
    #[must_use]
    pub fn worst_tone(&self) -> Option<&Tone> {
        let deciding = |tone: &Tone| {
            self.reasons.iter().any(|r| matches!(r.rule, Rule::B2 | Rule::B3) && r.offset_hz == Some(tone.offset_hz))
        };
        self.tones.iter().filter(|tone| deciding(tone) || tone.margin_db.is_some()).min_by(|a, b| {
            let key = |t: &Tone| (!deciding(t), t.margin_db.unwrap_or(f64::NEG_INFINITY));
            let (ka, kb) = (key(a), key(b));
            ka.0.cmp(&kb.0).then(ka.1.total_cmp(&kb.1)).then(a.offset_hz.total_cmp(&b.offset_hz))
        })
    }
}

/// Writes a big integer as a JSON integer of any length.
fn big_integer<S: Serializer>(value: &Option<BigUint>, serializer: S) -> Result<S::Ok, S::Error> {
    match value {
        None => serializer.serialize_none(),
        Some(number) => {
            let text = number.to_string();
            text.parse::<serde_json::Number>().map_err(serde::ser::Error::custom)?.serialize(serializer)
        }
    }
}
