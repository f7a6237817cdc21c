//! Sequence lengths: closed rules where one is proven, bounded runs elsewhere, unknown beyond.

use num_bigint::BigUint;

use super::cascade::{InputSource, OutputFedStage, PlainStage, Silent, Stage, StageRule, WeightedBit};
use super::checked::{ModulatorConfig, Shaping};
use super::closed_form::cascade_period;
use super::config::{Dither, Structure};
use super::error_feedback::{ErrorFilter, MOST_TAPS};
use super::range::{settled_at, transient};
use super::sequence::prime_stage;

/// How a sequence length was found.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum PeriodBasis {
    /// The modulator stands still.
    Held,
    /// From word and seeds by a proven rule, without running.
    ClosedRule,
    /// From exact sums over a run of all stages but the last, or by finding the state again.
    Run,
    /// Not found within the steps allowed.
    Unknown,
}

/// The length of a sequence.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Period {
    /// Length in PFD cycles after the transient; `None` where it was not found.
    pub length: Option<BigUint>,
    /// Whether the length is proven. It is then the shortest one of the whole state; without dither also of the
    /// output (multi-stage structures, and error feedback with (1 − z⁻¹)^order).
    pub is_exact: bool,
    /// How it was found.
    pub basis: PeriodBasis,
}

impl Period {
    fn known(length: BigUint, basis: PeriodBasis) -> Self {
        Self { length: Some(length), is_exact: true, basis }
    }

    fn from_run(length: Option<u128>) -> Self {
        match length {
            Some(length) => Self::known(length.into(), PeriodBasis::Run),
            None => Self { length: None, is_exact: false, basis: PeriodBasis::Unknown },
        }
    }
}

/// Steps that [`period`] may run where no closed rule holds: a few milliseconds.
pub const DEFAULT_MOST_STEPS: u64 = 1 << 20;

/// Returns the sequence length, running at most [`DEFAULT_MOST_STEPS`] where no closed rule holds.
///
/// # Examples
/// ```
/// use thornmap::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, Structure, period};
/// let settings = ModulatorSettings {
///     structure: Structure::Mash,
///     order: 3,
///     seeds: vec![1],
///     dither: Dither::None,
///     noise_transfer: None,
///     runs_at_zero: false,
/// };
/// let config = ModulatorConfig::new(&settings, Modulus::new(512).unwrap(), 257, true).unwrap();
/// assert_eq!(period(&config).length, Some(1024u32.into()));
/// ```
#[must_use]
pub fn period(config: &ModulatorConfig) -> Period {
    period_within(config, DEFAULT_MOST_STEPS)
}

/// Returns the sequence length, running at most about `most_steps` for each stage where no closed rule holds.
#[must_use]
pub fn period_within(config: &ModulatorConfig, most_steps: u64) -> Period {
    if config.is_held() {
        return Period::known(1u32.into(), PeriodBasis::Held);
    }
    let m = config.modulus().get();
    let plain = PlainStage { modulus: m };
    let dithered = config.dither() != Dither::None;
    if matches!(config.dither(), Dither::White { .. }) {
        // The generator repeats after 2^64 bits, the whole never in practice.
        return Period::from_run(None);
    }
    match config.structure() {
        Structure::Integer => Period::known(1u32.into(), PeriodBasis::Held),
        Structure::Mash if !dithered => closed(cascade_period(config.k(), config.seeds(), m).into()),
        Structure::ErrorFeedback if !dithered && config.shaping() == Shaping::Difference => {
            closed(cascade_period(config.k(), &equivalent_seeds(config.seeds(), m), m).into())
        }
        Structure::PrimeMash if !dithered => closed(prime_period(config)),
        Structure::Mash => Period::from_run(stage_sums(config, plain, most_steps)),
        Structure::PrimeMash => Period::from_run(stage_sums(config, prime_stage(config), most_steps)),
        Structure::OutputFed => match output_fed_period(config).filter(|_| !dithered) {
            Some(length) => closed(length),
            None => Period::from_run(stage_sums(config, OutputFedStage { plain }, most_steps)),
        },
        Structure::ErrorFeedback => Period::from_run(filter_cycle(config, most_steps)),
    }
}

/// Wraps a length by rule.
fn closed(length: BigUint) -> Period {
    Period::known(length, PeriodBasis::ClosedRule)
}

/// Returns the seeds of the MASH whose last residue is the error of an error-feedback modulator with (1 − z⁻¹)^m:
/// Δ^m e ≡ K modulo M in both, so s_{m−j}(0) = Δ^j e\[−1\].
pub(super) fn equivalent_seeds(errors: &[u64], modulus: u64) -> Vec<u64> {
    let mut differences = errors.to_vec();
    let mut seeds = Vec::with_capacity(errors.len());
    while let Some(&newest) = differences.first() {
        seeds.push(newest);
        differences = differences.windows(2).map(|pair| (pair[0] + modulus - pair[1]) % modulus).collect();
    }
    seeds.reverse();
    seeds
}

/// Returns M^j: every stage that moves multiplies the length by the prime M.
///
/// Over T_i = M^i the residues of stage i sum to (−a)^i·K modulo M, never 0, so the next stage needs M times as long.
/// With K = 0 the first seed that is not 0 takes the place of the word. Source: the structure is Hosseini & Kennedy
/// 2007 (from memory); the sum is derived from w = s + a·c, whose residues run through all of 0 … M − 1.
fn prime_period(config: &ModulatorConfig) -> BigUint {
    let stages = u32::from(config.order());
    let moving = if config.k() > 0 {
        stages
    } else {
        let first = (1..).zip(config.seeds()).find(|(_, seed)| **seed != 0).map_or(stages, |(stage, _)| stage);
        stages - first
    };
    BigUint::from(config.modulus().get()).pow(moving)
}

/// Returns M^m where every stage of an output-fed MASH gains a unit modulo M over the period before; else `None`.
///
/// Stage 1 needs gcd(K, M) = 1, then T_1 = M and its residues and carries sum to M(M − 1)/2 + K. If a stage's input
/// sums to a unit u over T, its residues run through everything: over T·M they sum to T·M(M − 1)/2 and its carries to
/// u exactly.
fn output_fed_period(config: &ModulatorConfig) -> Option<BigUint> {
    let m = u128::from(config.modulus().get());
    let mut gain = u128::from(config.k());
    // M(M − 1)/2 modulo M: half of M for even M, else 0; an even T cancels it.
    let mut ramp_sum = if m % 2 == 0 { m / 2 } else { 0 };
    for _ in 0..config.order() {
        if num_integer::gcd(gain, m) != 1 {
            return None;
        }
        gain = (gain + ramp_sum) % m;
        ramp_sum = 0;
    }
    Some(BigUint::from(config.modulus().get()).pow(u32::from(config.order())))
}

/// Returns the length of the state of a cascade from exact sums: if the input of a stage repeats with P and sums to S
/// over P, the stage repeats with P·M/gcd(S, M). `None` where a P passes `most_steps`.
fn stage_sums<R: StageRule>(config: &ModulatorConfig, rule: R, most_steps: u64) -> Option<u128> {
    match WeightedBit::of(config) {
        None => stage_sums_with(config, rule, Silent, most_steps),
        Some(source) => stage_sums_with(config, rule, source, most_steps),
    }
}

/// [`stage_sums`] with a source of dither.
fn stage_sums_with<R: StageRule, S: InputSource>(
    config: &ModulatorConfig,
    rule: R,
    source: S,
    most_steps: u64,
) -> Option<u128> {
    let m = u128::from(config.modulus().get());
    let start: Vec<Stage> = config.seeds().iter().map(|seed| Stage { residue: *seed, carry: 0 }).collect();
    let settled = if config.structure() == Structure::PrimeMash { settled_at(config) } else { 0 };
    let mut period = 1u128;
    for observed in 0..start.len() {
        if let Dither::Register { stage, register, .. } = config.dither()
            && usize::from(stage) == observed + 1
        {
            period = num_integer::lcm(period, (1u128 << register) - 1);
        }
        if period > u128::from(most_steps) {
            return None;
        }
        let (mut stages, mut source) = (start.clone(), source);
        let mut sum = 0u128;
        let first = settled as u128;
        for step in 0..first + period {
            let mut input = config.k();
            for (index, stage) in stages.iter_mut().enumerate() {
                input += source.added_at(index);
                if index == observed && step >= first {
                    sum += u128::from(input);
                }
                input = rule.step(input, stage).1;
            }
        }
        period *= m / num_integer::gcd(sum % m, m);
    }
    Some(period)
}

/// Returns the cycle length of the state of an error-feedback modulator (with its register), found by
/// waiting for the return of a state that is surely on the cycle; `None` where it passes `most_steps`.
fn filter_cycle(config: &ModulatorConfig, most_steps: u64) -> Option<u128> {
    let mut state = (ErrorFilter::new(config), WeightedBit::of(config));
    let advance = |(filter, source): &mut (ErrorFilter, Option<WeightedBit>)| {
        let added = source.as_mut().map_or(0, |source| source.added_at(0));
        filter.next_output(i64::try_from(added).expect("a weight is at most 2^48"));
    };
    // The filter keeps errors beyond its order too: they must have come from the run.
    for _ in 0..transient(config) + MOST_TAPS {
        advance(&mut state);
    }
    // On the cycle already: the first return to this state is the length.
    let mark = state;
    for length in 1..=most_steps {
        advance(&mut state);
        if state == mark {
            return Some(length.into());
        }
    }
    None
}
