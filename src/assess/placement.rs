//! From a channel to its divider word: the first output divider with a legal word wins.

use crate::base::{Exact, ExactError, Frequency};
use crate::modulator::{ModulatorConfig, ModulatorError, ModulusRule, Word, WordError, output_range, word};
use crate::plan::{ChannelGroup, Plan};

use super::result::Illegal;

/// Where a channel sits: its word, its exact frequencies, and the limits the word misses.
#[derive(Debug, Clone)]
pub struct Placement {
    /// Channel frequency plus injection.
    pub output: Frequency,
    /// Output divider P.
    pub output_divider: u64,
    /// Word at the VCO.
    pub word: Word,
    /// The modulator that this word drives.
    pub modulator: ModulatorConfig,
    /// f_pfd·(N + K/M), exact.
    pub vco: Frequency,
    /// Achieved output frequency, exact.
    pub achieved: Frequency,
    /// Achieved minus requested, at the output, exact.
    pub error: Frequency,
    /// Tuning voltage by the plan's tuning curve \[V\]; `None` without one or outside it.
    pub tuning_v: Option<f64>,
    /// Limits missed; empty for a legal word.
    pub illegal: Vec<Illegal>,
}

impl Placement {
    /// Returns N + K/M.
    #[must_use]
    pub fn divider_ratio(&self) -> f64 {
        self.word.ratio().to_f64()
    }
}

/// Why a channel cannot even be placed.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum PlacementError {
    /// An exact result passes 127 bits.
    #[error("channel {channel}: {source}")]
    Exact {
        /// The channel.
        channel: Frequency,
        /// What failed.
        source: ExactError,
    },
    /// No word can be formed.
    #[error("channel {channel}: {source}")]
    Word {
        /// The channel.
        channel: Frequency,
        /// What failed.
        source: WordError,
    },
    /// The modulator does not take the word.
    #[error("channel {channel}: {source}")]
    Modulator {
        /// The channel.
        channel: Frequency,
        /// What failed.
        source: ModulatorError,
    },
}

/// Returns the placement of a channel: with the first output divider whose word is legal, else with the one that
/// misses the fewest limits (ties: the first), so that the refusal can be named.
///
/// # Errors
/// `PlacementError` where exact arithmetic or the modulus rule has no result.
///
/// # Panics
/// When the group has no output divider: a checked plan has no such group.
pub fn place(plan: &Plan, group: &ChannelGroup, channel: Frequency) -> Result<Placement, PlacementError> {
    let exact = |source| PlacementError::Exact { channel, source };
    let output = Frequency::from_hz(channel.hz().plus(&group.injection.hz()).map_err(exact)?);
    let mut best: Option<Placement> = None;
    for &output_divider in &group.output_dividers {
        let placement = place_with(plan, channel, output, output_divider)?;
        if placement.illegal.is_empty() {
            return Ok(placement);
        }
        if best.as_ref().is_none_or(|known| placement.illegal.len() < known.illegal.len()) {
            best = Some(placement);
        }
    }
    Ok(best.expect("a checked group has at least one output divider"))
}

fn place_with(
    plan: &Plan,
    channel: Frequency,
    output: Frequency,
    output_divider: u64,
) -> Result<Placement, PlacementError> {
    let exact = |source| PlacementError::Exact { channel, source };
    let by = Exact::from_integer(i128::from(output_divider));
    let pfd = plan.reference.pfd().map_err(exact)?;
    let ratio = output.hz().times(&by).and_then(|vco| vco.over(&pfd.hz())).map_err(exact)?;
    let in_word = |source| PlacementError::Word { channel, source };
    let in_modulator = |source| PlacementError::Modulator { channel, source };
    let settings = &plan.modulator.settings;
    let rule = plan.modulator.modulus.working(settings.structure).map_err(in_modulator)?;
    let word = word::nearest(ratio, &rule, pfd, output_divider).map_err(in_word)?;
    let is_fixed = matches!(rule, ModulusRule::Fixed(_));
    let modulator = ModulatorConfig::new(settings, word.modulus, word.k, is_fixed).map_err(in_modulator)?;
    // Dither at the first stage shifts the mean; K is not changed for it, the achieved frequency tells.
    let shifted = word.ratio().plus(&modulator.mean_shift()).map_err(exact)?;
    let vco = shifted.times(&pfd.hz()).map_err(exact)?;
    let achieved = vco.over(&by).map_err(exact)?;
    let error = achieved.minus(&output.hz()).map_err(exact)?;
    let vco = Frequency::from_hz(vco);
    let tuning_v = plan.oscillator.tuning.as_deref().and_then(|curve| tuning_voltage(curve, vco.to_f64_hz()));
    let mut placement = Placement {
        output,
        output_divider,
        word,
        modulator,
        vco,
        achieved: Frequency::from_hz(achieved),
        error: Frequency::from_hz(error),
        tuning_v,
        illegal: Vec::new(),
    };
    placement.illegal = missed_limits(plan, pfd, &placement);
    Ok(placement)
}

/// Returns the tuning voltage at a frequency by linear interpolation; `None` outside the curve.
pub(super) fn tuning_voltage(curve: &[(f64, f64)], frequency_hz: f64) -> Option<f64> {
    curve.windows(2).find(|pair| pair[0].1 <= frequency_hz && frequency_hz <= pair[1].1).map(|pair| {
        let ((v0, f0), (v1, f1)) = (pair[0], pair[1]);
        v0 + (v1 - v0) * (frequency_hz - f0) / (f1 - f0)
    })
}

/// Returns every limit that a word misses; all limits are inclusive.
fn missed_limits(plan: &Plan, pfd: Frequency, placement: &Placement) -> Vec<Illegal> {
    let mut missed = Vec::new();
    let (lowest, highest) = plan.oscillator.range;
    let mut frequency = |limit: &str, value: Frequency, bound: Frequency, is_missed: bool| {
        if is_missed {
            let (value, bound) = (value.to_f64_hz(), bound.to_f64_hz());
            missed.push(Illegal {
                limit: limit.to_owned(),
                value,
                bound,
                missed_by: (value - bound).abs(),
                unit: "Hz",
            });
        }
    };
    frequency("oscillator range, lower end", placement.vco, lowest, placement.vco < lowest);
    frequency("oscillator range, upper end", placement.vco, highest, placement.vco > highest);
    if let Some(maximum) = plan.detector.maximum_frequency {
        frequency("maximum PFD frequency", pfd, maximum, pfd > maximum);
    }
    missed.extend(missed_divisions(plan, placement));
    missed.extend(missed_tuning(plan, placement));
    missed
}

/// N + y_min ≥ minimum and N + y_max ≤ maximum over the modulator's whole output range.
fn missed_divisions(plan: &Plan, placement: &Placement) -> Vec<Illegal> {
    let word = &placement.word;
    let (lowest, highest) = output_range(&placement.modulator);
    let n = i128::from(word.n);
    let mut missed = Vec::new();
    let mut division = |limit: &str, value: i128, bound: i128| {
        #[allow(clippy::cast_precision_loss, reason = "divider limits are far below 2^53")]
        missed.push(Illegal {
            limit: limit.to_owned(),
            value: value as f64,
            bound: bound as f64,
            missed_by: (value - bound).abs() as f64,
            unit: "",
        });
    };
    let minimum = i128::from(plan.divider.minimum);
    if n + i128::from(lowest) < minimum {
        division("divider minimum (N plus the lowest modulator output)", n + i128::from(lowest), minimum);
    }
    if let Some(maximum) = plan.divider.maximum.map(i128::from)
        && n + i128::from(highest) > maximum
    {
        division("divider maximum (N plus the highest modulator output)", n + i128::from(highest), maximum);
    }
    missed
}

/// The tuning voltage must lie in its window; a frequency beyond the curve has no voltage and is a miss as well.
fn missed_tuning(plan: &Plan, placement: &Placement) -> Option<Illegal> {
    let (low, high) = plan.oscillator.tuning_range_v?;
    let curve = plan.oscillator.tuning.as_deref()?;
    let miss = |limit: &str, value: f64, bound: f64, unit| {
        Some(Illegal { limit: limit.to_owned(), value, bound, missed_by: (value - bound).abs(), unit })
    };
    match placement.tuning_v {
        Some(volts) if volts < low => miss("tuning voltage, lower end", volts, low, "V"),
        Some(volts) if volts > high => miss("tuning voltage, upper end", volts, high, "V"),
        Some(_) => None,
        None => {
            let vco = placement.vco.to_f64_hz();
            let first = curve.first().map_or(vco, |point| point.1);
            let last = curve.last().map_or(vco, |point| point.1);
            let bound = if vco < first { first } else { last };
            miss("tuning curve, which ends before this frequency", vco, bound, "Hz")
        }
    }
}
