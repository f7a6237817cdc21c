//! The checked plan: base units, exact frequencies, every default filled in.

use std::collections::BTreeMap;

use serde::Serialize;

use crate::base::{Assumption, Basis, Exact, Frequency};
use crate::loop_model::{ChargeTable, FilterComponents, FilterDesign, NoisePoints, OscillatorNoise, ResponseTable};
use crate::modulator::{Dither, ModulatorSettings, Modulus, ModulusRule};
use crate::tones::Mechanism;

/// A whole checked plan.
#[derive(Debug, Clone, Serialize)]
pub struct Plan {
    /// Title block.
    pub identity: Identity,
    /// Reference oscillator and its path to the phase detector.
    pub reference: Reference,
    /// The voltage-controlled oscillator.
    pub oscillator: Oscillator,
    /// Feedback and output dividers.
    pub divider: Divider,
    /// Modulator settings.
    pub modulator: ModulatorPlan,
    /// Phase detector and charge pump.
    pub detector: Detector,
    /// Loop filter.
    #[serde(rename = "loop")]
    pub loop_plan: LoopPlan,
    /// Guard and the families that are searched.
    pub boundary: Boundary,
    /// Known coupling levels.
    pub anchors: Vec<Anchor>,
    /// Other clocks on the board.
    pub clocks: Vec<Clock>,
    /// Who must not be hit.
    pub victims: Vec<Victim>,
    /// What the plan must meet.
    pub limits: Limits,
    /// Channel groups, in file order.
    pub groups: Vec<ChannelGroup>,
    /// What a remedy may change.
    pub alternatives: Alternatives,
    /// Record length, span and floor of the analysis.
    pub analysis: Analysis,
    /// Every input figure and every default that applies, in file order, then defaults.
    #[serde(skip)]
    pub assumptions: Vec<Assumption>,
    /// Requirements that were given (limits of the plan and of groups), with basis and note.
    #[serde(skip)]
    pub required: Vec<Assumption>,
    /// Basis of each given figure by dotted key, for the basis of a result.
    #[serde(skip)]
    pub basis: BTreeMap<String, Basis>,
    /// Doubts that do not stop the work.
    #[serde(skip)]
    pub warnings: Vec<String>,
    /// SHA-256 of the plan file, lower-case hexadecimal.
    #[serde(skip)]
    pub sha256: String,
    /// File stem, or `demo` for the built-in plan.
    #[serde(skip)]
    pub stem: String,
}

impl Plan {
    /// Returns the basis of a figure by its dotted key; a key that was not given is a default.
    #[must_use]
    pub fn basis_of(&self, key: &str) -> Basis {
        self.basis.get(key).copied().unwrap_or(Basis::Default)
    }

    /// Returns the number of channels over all groups.
    #[must_use]
    pub fn channel_count(&self) -> u64 {
        self.groups.iter().map(|group| group.channels.len()).sum()
    }
}

/// Title block of the plan; what is not stated stays `None`.
#[derive(Debug, Clone, Serialize)]
pub struct Identity {
    /// Title; the file stem when not given.
    pub title: String,
    /// Revision.
    pub revision: Option<String>,
    /// Who prepared the plan.
    pub prepared_by: Option<String>,
    /// Who checked it.
    pub checked_by: Option<String>,
    /// Who approved it.
    pub approved_by: Option<String>,
    /// Date, as typed.
    pub date: Option<String>,
    /// Free notes.
    pub notes: Option<String>,
}

/// The reference and how it reaches the phase detector.
#[derive(Debug, Clone, Serialize)]
pub struct Reference {
    /// Reference frequency, positive.
    #[serde(rename = "frequency_exact")]
    pub frequency: Frequency,
    /// Whether the frequency is doubled before the divider.
    pub doubler: bool,
    /// Reference divider R, at least 1.
    pub divider: u64,
    /// Relative tolerance (1 ppm = 1e-6); `None` is unknown.
    pub tolerance: Option<f64>,
    /// Single-sideband noise of the reference at its own frequency; `None` is unknown.
    pub noise: Option<NoisePoints>,
}

impl Reference {
    /// Returns the PFD frequency `f_ref·D/R`.
    ///
    /// # Errors
    /// `ExactError::Overflow` beyond 127 bits.
    pub fn pfd(&self) -> Result<Frequency, crate::base::ExactError> {
        let doubled = Exact::from_integer(if self.doubler { 2 } else { 1 });
        let ratio = doubled.over(&Exact::from_integer(i128::from(self.divider)))?;
        Ok(Frequency::from_hz(self.frequency.hz().times(&ratio)?))
    }
}

/// Tuning gain of the oscillator.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Gain {
    /// One value over the whole range \[Hz/V\].
    Constant(f64),
    /// Points (frequency \[Hz\], gain \[Hz/V\]), rising in frequency; linear between, end values held.
    Table(Vec<(f64, f64)>),
}

/// The voltage-controlled oscillator.
#[derive(Debug, Clone, Serialize)]
pub struct Oscillator {
    /// Lowest and highest frequency, inclusive.
    #[serde(rename = "range_exact")]
    pub range: (Frequency, Frequency),
    /// Tuning gain.
    pub gain: Gain,
    /// Free-running noise; `None` is unknown.
    pub noise: Option<OscillatorNoise>,
    /// Tuning curve (voltage \[V\], frequency \[Hz\]), both strictly rising; `None` is unknown.
    pub tuning: Option<Vec<(f64, f64)>>,
    /// Usable tuning voltage window \[V\], inclusive; needs `tuning`.
    pub tuning_range_v: Option<(f64, f64)>,
}

/// Feedback divider limits and output dividers.
#[derive(Debug, Clone, Serialize)]
pub struct Divider {
    /// Smallest legal instantaneous division.
    pub minimum: u64,
    /// Largest legal instantaneous division; `None` is no limit.
    pub maximum: Option<u64>,
    /// Output dividers, tried in this order.
    pub output: Vec<u64>,
    /// Noise floor of the output divider \[dBc/Hz\]; `None`: the divider adds no floor (listed as a default).
    pub floor_dbc_per_hz: Option<f64>,
}

/// Modulator settings of the plan.
#[derive(Debug, Clone, Serialize)]
pub struct ModulatorPlan {
    /// Structure, order, seeds, dither.
    pub settings: ModulatorSettings,
    /// How the modulus of a channel is found.
    pub modulus: ModulusRule,
}

/// Phase detector and charge pump.
#[derive(Debug, Clone, Serialize)]
pub struct Detector {
    /// Pump current \[A\], positive.
    pub current_a: f64,
    /// Mismatch of the pump currents as points (tuning voltage \[V\], ratio); one point with voltage 0 when
    /// constant; `None` is unknown.
    pub mismatch: Option<MismatchPoints>,
    /// Offset (bleed) current \[A\], positive discharges the filter.
    pub offset_current_a: f64,
    /// Leakage \[A\], positive discharges the filter; `None` is unknown.
    pub leakage_a: Option<f64>,
    /// Half width of the dead zone \[s\].
    pub dead_zone_s: f64,
    /// Quadratic term of the charge curve \[cycles⁻¹\].
    pub quadratic_per_cycle: f64,
    /// Cubic term of the charge curve \[cycles⁻²\].
    pub cubic_per_cycle2: f64,
    /// Measured charge against time error; replaces mismatch, dead zone and polynomial terms.
    pub table: Option<ChargeTable>,
    /// Reset delay of the detector \[s\]; `None` is unknown.
    pub reset_delay_s: Option<f64>,
    /// Noise of the offset current source \[A/√Hz\]; `None` is unknown.
    pub offset_noise_a_per_rthz: Option<f64>,
    /// Noise of the pump current sources \[A/√Hz\]; `None`: taken as inside the floor.
    pub pump_noise_a_per_rthz: Option<f64>,
    /// Floor normalised to 1 Hz \[dBc/Hz\]; `None` is unknown.
    pub floor_dbc_per_hz: Option<f64>,
    /// Flicker at 10 kHz normalised to a 1 GHz VCO \[dBc/Hz\]; `None` is unknown.
    pub flicker_dbc_per_hz: Option<f64>,
    /// Largest PFD frequency; `None` is not checked.
    #[serde(rename = "maximum_frequency_exact")]
    pub maximum_frequency: Option<Frequency>,
}

/// Pump mismatch, constant or over the tuning voltage.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum MismatchPoints {
    /// One value.
    Constant(f64),
    /// Points (tuning voltage \[V\], ratio), rising in voltage; linear between, end values held.
    Table(Vec<(f64, f64)>),
}

/// How the loop filter is given.
#[derive(Debug, Clone, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum LoopPlan {
    /// From unity-gain bandwidth and phase margin; designed once for the whole plan.
    Designed(FilterDesign),
    /// From components.
    Components(FilterComponents),
    /// From a measured closed-loop response table.
    Measured(ResponseTable),
}

/// What "inside the loop" means.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum LoopEdge {
    /// The channel's own unity-gain frequency.
    UnityGain,
    /// The channel's own closed-loop 3 dB frequency.
    #[serde(rename = "3 dB")]
    ThreeDb,
}

/// The guard around a boundary.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Guard {
    /// The channel's loop edge (the default).
    LoopEdge,
    /// A fixed tone offset, exact.
    Offset(Frequency),
    /// A share of the PFD frequency, exact.
    ShareOfPfd(Exact),
}

/// Guard and the families that are searched.
#[derive(Debug, Clone, Serialize)]
pub struct Boundary {
    /// Loop edge in use.
    pub edge: LoopEdge,
    /// Guard on the tone offset, inclusive.
    pub guard: Guard,
    /// Largest boundary denominator q that is looked for.
    pub largest_q: u64,
    /// Harmonics listed.
    pub harmonics: u64,
}

/// Where an anchor was taken.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum AnchorPlace {
    /// On a channel (before injection).
    Channel(Frequency),
    /// At a tone offset, with the output divider in use.
    Offset {
        /// Tone offset, positive.
        offset: Frequency,
        /// Output divider in use; the first of the plan when not given.
        output_divider: u64,
    },
}

/// A known coupling level.
#[derive(Debug, Clone, Serialize)]
pub struct Anchor {
    /// Path.
    pub mechanism: Mechanism,
    /// Level at the output \[dBc\], single sideband.
    pub level_dbc: f64,
    /// Where it was taken.
    pub place: AnchorPlace,
    /// Boundary denominator.
    pub q: u64,
    /// Fall per harmonic \[dB\].
    pub roll_off_db: f64,
    /// Where the level comes from.
    pub basis: Basis,
}

/// Another clock on the board.
#[derive(Debug, Clone, Serialize)]
pub struct Clock {
    /// Name.
    pub name: String,
    /// Frequency, positive.
    #[serde(rename = "frequency_exact")]
    pub frequency: Frequency,
    /// Known level of its first-order tone, if any.
    pub anchor: Option<Anchor>,
}

/// A receiver, channel or band that tones may hit; offsets or a band, at least one.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Victim {
    /// Name.
    pub name: String,
    /// Offsets from the carrier, either side, inclusive \[Hz\].
    pub offsets_hz: Option<(f64, f64)>,
    /// Output frequencies, inclusive \[Hz\].
    pub band_hz: Option<(f64, f64)>,
    /// Bandwidth of the victim \[Hz\].
    pub width_hz: f64,
    /// Limit at the output \[dBc\]; `None`: the mask alone.
    pub limit_dbc: Option<f64>,
}

/// A limit over offset: dB linear in log offset, end values held.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Mask {
    /// Points (offset \[Hz\] > 0, strictly rising; level \[dBc\]).
    pub points: Vec<(f64, f64)>,
}

impl Mask {
    /// Returns the limit at an offset \[dBc\].
    #[must_use]
    pub fn limit_dbc(&self, offset_hz: f64) -> f64 {
        let points = &self.points;
        let after = points.partition_point(|(offset, _)| *offset <= offset_hz);
        match (after.checked_sub(1).map(|i| points[i]), points.get(after)) {
            (Some((f0, l0)), Some(&(f1, l1))) => l0 + (l1 - l0) * (offset_hz / f0).ln() / (f1 / f0).ln(),
            (Some((_, level)), None) | (None, Some(&(_, level))) => level,
            // A checked mask holds at least one point.
            (None, None) => f64::INFINITY,
        }
    }
}

/// What the plan must meet.
#[derive(Debug, Clone, Serialize)]
pub struct Limits {
    /// Spur mask at the output; `None` is no mask.
    pub spur: Option<Mask>,
    /// Margin for "marginal" \[dB\].
    pub margin_db: f64,
    /// Limit on the rms phase error \[deg\]; `None` is no limit.
    pub phase_error_deg: Option<f64>,
    /// Integration limits \[Hz\].
    pub integration_hz: (f64, f64),
}

/// The frequencies of a group.
#[derive(Debug, Clone, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum ChannelList {
    /// `first + i·spacing` for `i` in `0..count`.
    Raster {
        /// First channel.
        first: Frequency,
        /// Spacing, positive (zero only with one channel).
        spacing: Frequency,
        /// Number of channels, at least 1.
        count: u64,
    },
    /// Listed one by one, in file order.
    List(Vec<Frequency>),
}

impl ChannelList {
    /// Returns the number of channels.
    #[must_use]
    pub fn len(&self) -> u64 {
        match self {
            Self::Raster { count, .. } => *count,
            Self::List(list) => list.len() as u64,
        }
    }

    /// Returns whether there is none; a checked plan has no such group.
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// Returns channel `index`, or `None` beyond the end or beyond 127 bits.
    #[must_use]
    pub fn get(&self, index: u64) -> Option<Frequency> {
        match self {
            Self::Raster { first, spacing, count } => {
                if index >= *count {
                    return None;
                }
                let step = spacing.hz().times(&Exact::from_integer(i128::from(index))).ok()?;
                first.hz().plus(&step).ok().map(Frequency::from_hz)
            }
            Self::List(list) => list.get(usize::try_from(index).ok()?).copied(),
        }
    }
}

/// Channels that share injection, dividers and limits.
#[derive(Debug, Clone, Serialize)]
pub struct ChannelGroup {
    /// Name; `group N` (from 1) when not given.
    pub name: String,
    /// The channel frequencies.
    pub channels: ChannelList,
    /// Added to the channel frequency to give the output frequency.
    #[serde(rename = "injection_exact")]
    pub injection: Frequency,
    /// Output dividers of the group, tried in this order.
    pub output_dividers: Vec<u64>,
    /// Limits of the group (the plan's where it has none of its own).
    pub limits: Limits,
}

/// What a remedy may change; each list holds at least the plan's own value.
#[derive(Debug, Clone, Serialize)]
pub struct Alternatives {
    /// Reference frequencies.
    #[serde(rename = "references_exact")]
    pub references: Vec<Frequency>,
    /// Reference dividers.
    pub dividers: Vec<u64>,
    /// Doubler settings.
    pub doubler: Vec<bool>,
    /// Modulator orders.
    pub orders: Vec<u8>,
    /// Dithers.
    pub dithers: Vec<Dither>,
    /// Injections; the groups' own when empty.
    #[serde(rename = "injections_exact")]
    pub injections: Vec<Frequency>,
    /// Output dividers; the groups' own when empty.
    pub output_dividers: Vec<u64>,
    /// First seeds; the plan's own when empty.
    pub seeds: Vec<u64>,
    /// Fixed moduli; the plan's own rule when empty.
    pub moduli: Vec<Modulus>,
    /// Offset currents \[A\]; the plan's own when empty.
    pub offset_currents_a: Vec<f64>,
    /// Largest permitted shift of the output frequency.
    #[serde(rename = "nudge_exact")]
    pub nudge: Frequency,
}

/// Record length, span and floor of the analysis.
#[derive(Debug, Clone, Serialize)]
pub struct Analysis {
    /// Samples of a non-periodic record; also the longest period that is transformed whole.
    pub record: u64,
    /// Largest tone offset listed \[Hz\].
    pub span_hz: f64,
    /// Known tones below this level are dropped and counted \[dBc\].
    pub tone_floor_dbc: f64,
    /// How far levels may be off, half width \[dB\]; 0: none stated.
    pub level_uncertainty_db: f64,
}
