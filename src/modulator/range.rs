//! Proven bounds: which outputs can occur, and when the periodic part begins.

use super::cascade::{InputSource, Silent, Stage, StageRule, WeightedBit};
use super::checked::{ModulatorConfig, Shaping};
use super::config::Structure;
use super::sequence::{prime_stage, start};

/// Returns the smallest and the largest output that the structure can give, both included, start-up included.
///
/// MASH of order m: 1 − 2^(m−1) … 2^(m−1), whatever K; held: 0 … 0. The others: proven bounds for this K, M and
/// dither, never narrower than what occurs and not always reached.
#[must_use]
pub fn output_range(config: &ModulatorConfig) -> (i64, i64) {
    if config.is_held() {
        return (0, 0);
    }
    match config.structure() {
        Structure::Integer => (0, 0),
        Structure::Mash | Structure::OutputFed => combined_range(&plain_carries(config)),
        Structure::PrimeMash => prime_range(config),
        Structure::ErrorFeedback => filter_range(config),
    }
}

/// Returns (stage from 1, weight) of the dither; (0, 0) without.
fn dither_of(config: &ModulatorConfig) -> (usize, u64) {
    config.dither().stage_and_weight().map_or((0, 0), |(stage, weight)| (usize::from(stage), weight))
}

/// Returns the largest carry of each stage with modulus M: inputs are at most M − 1 (also residue plus carry: a stage
/// that carries has a residue of at most M − 2), plus the dither.
fn plain_carries(config: &ModulatorConfig) -> Vec<i64> {
    let m = config.modulus().get();
    let (stage, weight) = dither_of(config);
    (1..=usize::from(config.order()))
        .map(|i| {
            // At stage 1 a MASH is quoted for every K at once.
            let added = if i == stage { weight } else { 0 };
            let carry = (2 * (m - 1) + added) / m;
            // A double carry of one stage may hand on up to M + 1 where carries are fed: one more carry at most.
            let fed = u64::from(config.structure() == Structure::OutputFed && stage > 0 && i > stage && weight > 1);
            i64::try_from((carry + fed).max(1)).expect("a carry is at most 4")
        })
        .collect()
}

/// Returns the range of y = Σ_i (1 − z⁻¹)^(i−1) c_i for 0 ≤ c_i ≤ `most[i]`: the even and the odd binomials of order
/// i − 1 sum to 2^(i−2) each.
fn combined_range(most: &[i64]) -> (i64, i64) {
    let shaped: i64 = most.iter().skip(1).zip(0..).map(|(carry, i)| carry << i).sum();
    (-shaped, most[0] + shaped)
}

/// Returns the range of a prime-modulus MASH: 2^b·y\[n\] = K + a·y\[n − 1\] − (1 − z⁻¹)^m s_m\[n\] bounds an output by
/// the one before; iterated from the bound by carries alone, and joined with the first outputs as they are, because
/// the relation holds only once the start-up is over.
fn prime_range(config: &ModulatorConfig) -> (i64, i64) {
    const FIRST: usize = 64;
    const ITERATIONS: usize = 32;
    let stage = prime_stage(config);
    let wide = |value: u64| i128::from(value);
    let power = 1i128 << stage.bits;
    let (dither_stage, weight) = dither_of(config);
    let half = 1i128 << (config.order() - 1);
    let shaped = half * (power - 1);
    let (dither_low, dither_high) = match dither_stage {
        0 => (0, 0),
        1 => (0, wide(weight)),
        r => (-(wide(weight) << (r - 2)), wide(weight) << (r - 2)),
    };
    // Carries alone: at most 3 each.
    let (mut low, mut high) = (-3 * half, 3 * half);
    for _ in 0..ITERATIONS {
        let feedback = wide(stage.feedback);
        high = high.min((wide(config.k()) + dither_high + feedback * high + shaped).div_euclid(power));
        low = low.max(-(-(wide(config.k()) + dither_low + feedback * low - shaped)).div_euclid(power));
    }
    let mut first = [0; FIRST];
    start(config).fill(&mut first);
    let narrow = |value: i128| i64::try_from(value).expect("a range below 2^8");
    let seen = first.into_iter().map(i64::from);
    (seen.clone().fold(narrow(low), i64::min), seen.fold(narrow(high), i64::max))
}

/// Returns the range of an error-feedback modulator: every error is free in 0 … M − 1.
fn filter_range(config: &ModulatorConfig) -> (i64, i64) {
    let m = i128::from(config.modulus().get());
    let k = i128::from(config.k());
    let (_, weight) = dither_of(config);
    let sum = |keep: fn(i64) -> bool| -> i128 {
        config.error_filter().iter().filter(|h| keep(**h)).map(|h| i128::from(*h)).sum()
    };
    let low = (k + sum(|h| h < 0) * (m - 1)).div_euclid(m);
    let high = (k + i128::from(weight) + sum(|h| h > 0) * (m - 1)).div_euclid(m);
    let narrow = |value: i128| i64::try_from(value).expect("coefficients are at most 1024");
    (narrow(low), narrow(high))
}

/// Returns how many outputs to drop so that the rest surely repeats with the period: an upper bound.
///
/// MASH and output-fed of order m: m − 1, the outputs that still see the empty carry delays. Error feedback: 0 where
/// the last coefficient has an inverse modulo M (the state can be traced back), else order·log2 M rounded up, the
/// longest chain of images of a linear map. Prime-modulus MASH: m − 1 after the last stage has passed a residue that
/// one accumulator value alone can stand for.
#[must_use]
pub fn transient(config: &ModulatorConfig) -> usize {
    if config.is_held() {
        return 0;
    }
    let order = usize::from(config.order());
    match config.structure() {
        Structure::Integer => 0,
        Structure::Mash | Structure::OutputFed => order - 1,
        Structure::PrimeMash => settled_at(config) + order - 1,
        Structure::ErrorFeedback => {
            let m = config.modulus().get();
            let last = config.error_filter().last().map_or(0, |h| h.unsigned_abs());
            let traceable = config.shaping() == Shaping::Difference || num_integer::gcd(last, m) == 1;
            if traceable { 0 } else { order * (u64::BITS - m.leading_zeros()) as usize }
        }
    }
}

/// Returns the step at which every stage of a prime-modulus MASH is on its cycle.
///
/// The stage value w = s + a·c moves by its input modulo M and lies in 0 … M + 4a − 1, so a residue of at least 4a has
/// one value only. Two runs of a stage with equal residues and inputs agree from such a step on; a stage whose inputs
/// have settled is therefore on its cycle from then on. A stage that gets only zeros stands still.
pub(super) fn settled_at(config: &ModulatorConfig) -> usize {
    match WeightedBit::of(config) {
        None => settled_with(config, Silent),
        Some(source) => settled_with(config, source),
    }
}

/// [`settled_at`] with a source of dither.
fn settled_with(config: &ModulatorConfig, mut source: impl InputSource) -> usize {
    let rule = prime_stage(config);
    let mut stages: Vec<Stage> = config.seeds().iter().map(|seed| Stage { residue: *seed, carry: 0 }).collect();
    let mut waiting = 0;
    let first_dithered = dither_of(config).0;
    // Leading stages without any input hold their seed.
    if config.k() == 0 && first_dithered != 1 {
        waiting = 1;
        while waiting < stages.len() && stages[waiting - 1].residue == 0 && first_dithered != waiting + 1 {
            waiting += 1;
        }
    }
    let mut step = 0;
    while waiting < stages.len() {
        step += 1;
        let mut input = config.k();
        for (index, stage) in stages.iter_mut().enumerate() {
            input = rule.step(input + source.added_at(index), stage).1;
        }
        while waiting < stages.len() && rule.ramp(&stages[waiting]) >= 4 * rule.feedback {
            waiting += 1;
        }
    }
    step
}
